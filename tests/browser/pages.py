"""Invented results that can be explored: the awkward ones, and one of the size of a 2 mm brain."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
from scipy import ndimage

from seedaudit.consensus.cloud import MAP_BYTES, MAP_TOLERANCE
from seedaudit.consensus.lowrank import low_rank
from seedaudit.results import SeedAudit, frozen_table, map_image, read_only
from seedaudit.space.grid import Grid, VoxelSet
from tests.report.invented import AT, invented_placements, invented_seed

EVIL = "<img src=x onerror=alert(1)>"
CLOSING = "</script><script>alert(2)</script>"
WHOLE_BRAIN = 235_375
"""Voxels of a 2 mm brain."""


def smooth_maps(count: int, voxels: VoxelSet, shifts: np.ndarray, seed: int = 3) -> np.ndarray:
    """Maps (N, V) that are smooth in space, and alike for placements that are near.

    Each is a mean of random fields that belong to points of the cloud, weighted by nearness.
    """
    rng = np.random.default_rng(seed)
    points = rng.normal(0, 4, (count, 3))
    fields = np.empty((count + 1, len(voxels)), np.float32)
    for field in fields:
        noise = rng.standard_normal(voxels.grid.shape, dtype=np.float32)
        for _ in range(2):
            noise = ndimage.uniform_filter(noise, 5)
        field[:] = noise[tuple(voxels.ijk.T)] / noise.std()
    gap = np.linalg.norm(shifts[:, None] - points[None], axis=2)
    weights = np.exp(-(gap**2) / (2 * 4.0**2)).astype(np.float32)
    weights /= weights.sum(axis=1, keepdims=True)
    return 0.3 * fields[0] + 0.35 * (weights @ fields[1:])


def explorable(
    seed: SeedAudit, maps: np.ndarray | None = None, **tables: pd.DataFrame
) -> SeedAudit:
    """The seed with placement maps, region labels and the tables that its page shows."""
    mask = seed.maps["analysis_mask"]
    grid = Grid(mask.shape, mask.affine)
    voxels = VoxelSet.from_mask(grid, np.asarray(mask.dataobj) > 0)
    similar = seed.tables["similarity"]
    where = seed.tables["placements"].set_index("placement").loc[similar["placement"]]
    if maps is None:
        maps = smooth_maps(8, voxels, where[["dx", "dy", "dz"]].to_numpy())
    index = seed.tables["regions"]["index"].to_numpy(int)
    labels = np.zeros(len(voxels), int)
    if len(index):
        labels = index[(voxels.xyz[:, 1] // 9).astype(int) % len(index)]
    labels[voxels.xyz[:, 2] < 0] = 0
    volume = voxels.volume(labels, fill=0, dtype=np.float32)
    a, b = np.triu_indices(len(similar) - 1, 1)
    near = 1 / (1 + 0.05 * np.abs(a - b))
    undefined = bool(similar["dice_negative"].isna().any())
    more = {
        "pairs": frozen_table(
            "pairs",
            {
                "seed": [seed.name] * len(a),
                "placement_a": a + 1,
                "placement_b": b + 1,
                "dice_positive": near,
                "dice_negative": np.full(len(a), np.nan) if undefined else near**2,
                "spatial_r": near**0.5,
            },
        ),
        "thresholds": invented_thresholds(seed.name, empty=undefined),
        "participants": invented_people(int(seed.summary["n_participants"])),
    }
    return replace(
        seed,
        tables=read_only({**seed.tables, **more, **tables}),
        maps=read_only(
            {**seed.maps, "region_labels": map_image("region_labels", volume, grid.affine, 4)}
        ),
        placement_maps=low_rank(maps, tolerance=MAP_TOLERANCE, most_bytes=MAP_BYTES),
    )


def invented_thresholds(name: str, *, empty: bool) -> pd.DataFrame:
    """Sweeps that fall; without a negative tail its Dice is missing."""
    cut = np.concatenate([np.arange(1, 51) / 100, np.arange(1, 21) / 20])
    fall = 1 - cut / 2
    return frozen_table(
        "thresholds",
        {
            "seed": [name] * 70,
            "rule": ["density"] * 50 + ["effect"] * 20,
            "cut": cut,
            "dice_positive_mean": fall,
            "dice_negative_mean": np.full(70, np.nan) if empty else fall**2,
            "n_positive": 100.0,
            "n_negative": 0.0 if empty else 50.0,
        },
    )


def invented_people(count: int) -> pd.DataFrame:
    """Participants with telling labels, one of them set aside for a reason that names a file."""
    rng = np.random.default_rng(1)
    median = np.append(rng.uniform(0.6, 0.95, count), np.nan)
    return frozen_table(
        "participants",
        {
            "participant_id": [f"sub-zebra{k}" for k in range(count + 1)],
            "n_runs": 1,
            "residual_df": 60,
            "median_spatial_r": median,
            "min_spatial_r": median - 0.3,
            "used": np.arange(count + 1) < count,
            "reason": ["" for _ in range(count)] + ["sub-zebra_bold.nii.gz is cut short"],
        },
    )


def invented_claims(name: str) -> pd.DataFrame:
    """One claim of each verdict, the first with a hostile name."""
    return frozen_table(
        "claims",
        {
            "seed": [name] * 3,
            "claim": [EVIL, CLOSING, "plain"],
            "target": ["region A", "(1, 2, 3), radius 6 mm", EVIL],
            "direction": ["positive", "negative", "positive"],
            "reported_effect": [0.3, -0.2, 0.0],
            "reported_low": [0.1, -0.3, -0.1],
            "reported_high": [0.5, -0.1, 0.1],
            "share_passing": [1.0, 0.4, np.nan],
            "first_failure_mm": [np.nan, 3.2, 0.5],
            "effect_min": [0.2, -0.3, -0.1],
            "effect_max": [0.4, 0.1, 0.1],
            "verdict": ["holds", "breaks", "open"],
            "note": ["", "", CLOSING],
        },
    )


def whole_brain() -> SeedAudit:
    """A 2 mm brain with 100 placements, on the template that nilearn carries."""
    from nilearn.datasets import load_mni152_template

    template = load_mni152_template(resolution=2)
    grid = Grid(template.shape, template.affine)
    picture = np.asarray(template.dataobj, np.float32)
    placements = invented_placements(100, 0, within=8.0, radius=6.0)
    ijk = np.stack(np.meshgrid(*map(np.arange, grid.shape), indexing="ij"), axis=-1)
    xyz = grid.to_world(ijk)
    far = np.linalg.norm(xyz - AT, axis=-1) > 16
    rank = np.where(far, (((xyz - [0, -18, 10]) / [70, 88, 70]) ** 2).sum(axis=-1), np.inf)
    inside = np.zeros(grid.shape, bool)
    inside.flat[np.argsort(rank.ravel(), kind="stable")[:WHOLE_BRAIN]] = True
    voxels = VoxelSet.from_mask(grid, inside)
    maps = smooth_maps(30, voxels, placements[["dx", "dy", "dz"]].to_numpy())
    drawn = maps[1:]
    volumes = {
        "analysis_mask": inside,
        "anatomy": np.clip(picture / np.percentile(picture, 99.5), 0, 1),
        "contested": voxels.volume(drawn.std(axis=0) > 0.2, fill=0),
        "agreement_positive": voxels.volume((drawn > 0.3).mean(axis=0)),
        "agreement_negative": voxels.volume((drawn < -0.3).mean(axis=0)),
    }
    images = {name: map_image(name, volume, grid.affine, 4) for name, volume in volumes.items()}
    names = [f"region {k}" for k in range(1, 161)]
    small = invented_seed(names=names, grid=Grid((6, 7, 8), np.diag([30.0, 30, 30, 1])))
    summary = dict(small.summary) | {"n_analysis_voxels": WHOLE_BRAIN}
    return explorable(replace(small, summary=read_only(summary), maps=read_only(images)), maps)
