"""Invented results for the report, ordinary and awkward, with nothing computed from images."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from seedaudit.consensus.tolerance import decay_fits, decay_table, tolerance_table
from seedaudit.report.words import verdict
from seedaudit.results import Audit, SeedAudit, frozen_table, map_image
from seedaudit.space.grid import Grid
from tests.space.samples import affine_of, restored

AT = (-8.0, -56.0, 28.0)
LONG = "Left posterior parietal cortex, upper bank, dorsal part no. 7"  # 61 characters
STATES = ("held", "silent", "contested", "lost", "gained", "n/a")
MARKUP = ("<img src=x onerror=1>", "*bold* _low_", "a|b|c", "$\\alpha_1$ & `tick` <b>", "plain")
EVERYWHERE = ((0, 1, 2), (1, 1, 1))
"""Stored as made: axes and directions."""


def head_grid(edge: float = 4.0, *, oblique: bool = False) -> Grid:
    """A grid around an adult head; the oblique one is anisotropic too."""
    shape = tuple(int(n / edge) for n in (160, 200, 176))
    if oblique:
        shape = tuple(int(n / e) for n, e in zip((200, 240, 210), (3, 4, 5), strict=True))
        affine = affine_of(angles=(8.0, -14.0, 11.0), sizes=(3.0, 4.0, 5.0))
        affine[:3, 3] += [0, -20, 10] - Grid(shape, affine).corners().mean(axis=0)
        return Grid(shape, affine)
    affine = np.diag([edge, edge, edge, 1.0])
    affine[:3, 3] = [-80 + edge / 2, -120 + edge / 2, -78 + edge / 2]
    return Grid(shape, affine)


def blob(xyz: NDArray[np.float64], at: Sequence[float], width: float) -> NDArray[np.float64]:
    """1 at a place, falling to 0 around it."""
    return np.asarray(np.exp(-(((xyz - np.array(at)) ** 2).sum(axis=-1)) / (2 * width**2)))


def head_volumes(
    grid: Grid, placements: pd.DataFrame, *, negative: bool, contested: bool
) -> dict[str, NDArray[Any]]:
    """Volumes of every map: an ellipsoid with a few blobs of agreement."""
    ijk = np.stack(np.meshgrid(*map(np.arange, grid.shape), indexing="ij"), axis=-1)
    xyz = grid.to_world(ijk)
    brain = (((xyz - [0, -20, 10]) / [68, 86, 66]) ** 2).sum(axis=-1) < 1
    used = placements[placements["used"] & (placements["kind"] != "control")]
    far = np.ones(grid.shape, bool)
    for row in used.itertuples():
        gap = np.linalg.norm(xyz - [row.x, row.y, row.z], axis=-1)
        far &= gap > row.radius + grid.largest_edge
    inner = brain & far
    positive = sum(
        blob(xyz, at, 13)
        for at in ((-44, -64, 34), (46, -60, 34), (0, 52, 4), (-58, -18, -14), (0, -52, 24))
    )
    minus = sum(blob(xyz, at, 12) for at in ((-38, 2, 6), (40, 4, 6), (4, 8, 56)))
    shares = [np.clip(1.7 * share - 0.35, 0, 1) for share in (positive, minus * negative)]
    if not contested:
        shares = [np.where(share > 0.5, 1.0, 0.0) for share in shares]
    classes = (shares[0] >= 0.5).astype(int) - (shares[1] >= 0.5).astype(int)
    between = [(share > 0.05) & (share < 0.95) for share in shares]
    folds = 0.5 + 0.5 * np.sin(xyz[..., 0] / 7) * np.cos(xyz[..., 1] / 9) * np.sin(xyz[..., 2] / 8)
    ventricle = blob(xyz, (0, -20, 18), 12) > 0.5
    volumes: dict[str, NDArray[Any]] = {
        "agreement_positive": shares[0],
        "agreement_negative": shares[1],
        "class_reported": classes,
    }
    volumes = {name: np.where(inner, volume, np.nan) for name, volume in volumes.items()}
    volumes["contested"] = inner & (between[0] | between[1])
    volumes["analysis_mask"] = inner
    volumes["region_labels"] = np.where(brain, 1 + (xyz[..., 1] > -20), 0)
    volumes["anatomy"] = np.where(brain, np.where(ventricle, 0.2, 0.55 + 0.4 * folds), 0.0)
    return volumes


def invented_placements(
    count: int, aside: int, within: float, radius: float, at: Sequence[float] = AT
) -> pd.DataFrame:
    """A cloud, uniform in a ball, the last ones set aside; then five control seeds."""
    rng = np.random.default_rng(4)
    shifts = rng.normal(size=(count, 3))
    length = within * rng.random(count) ** (1 / 3)
    shifts *= (length / np.linalg.norm(shifts, axis=1))[:, None]
    shifts = np.vstack([np.zeros(3), shifts])
    centres = shifts + at
    used = np.arange(count + 1) <= count - aside
    columns = {
        "seed": "posterior",
        "placement": np.arange(count + 1),
        "kind": np.where(np.arange(count + 1) == 0, "reported", "jitter"),
        **{axis: centres[:, i] for i, axis in enumerate("xyz")},
        **{f"d{axis}": shifts[:, i] for i, axis in enumerate("xyz")},
        "distance": np.linalg.norm(shifts, axis=1),
        "radius": radius,
        "n_voxels": 14,
        "coverage": np.where(used, 1.0, 0.3),
        "used": used,
        "flags": np.where(used, "", "low_coverage;leaves_mask"),
    }
    table = frozen_table("placements", columns)
    controls = table.iloc[[1, 2, 1, 2, 1]].assign(kind="control", used=True, flags="", coverage=1.0)
    controls[["x", "dx"]] += 50  # into the other half of the head
    controls["placement"] = count + np.arange(1, 6)
    controls["distance"] = np.linalg.norm(controls[["dx", "dy", "dz"]], axis=1)
    return pd.concat([table, controls], ignore_index=True)


def invented_similarity(placements: pd.DataFrame, *, negative: bool) -> pd.DataFrame:
    """Similarities that fall with distance."""
    rng = np.random.default_rng(5)
    used = placements[placements["used"] & (placements["kind"] != "control")]
    distance = used["distance"].to_numpy()
    n = len(used)
    noise = np.where(distance > 0, 1, 0) * rng.random((3, n))
    minus = np.clip(1 - 0.08 * distance - 0.3 * noise[1], 0, 1)
    if not negative:
        minus = np.where(noise[1] > 0.9, 0.0, np.nan)
    columns = {
        "seed": "posterior",
        "placement": used["placement"].to_numpy(),
        "distance": distance,
        "threshold": "fdr 0.05",
        "n_positive": 900,
        "n_negative": 240 if negative else 0,
        "dice_positive": np.clip(1 - 0.03 * distance - 0.12 * noise[0], 0, 1),
        "dice_negative": minus,
        "spatial_r": np.clip(1 - 0.015 * distance - 0.05 * noise[2], 0, 1),
        "concordance": np.clip(1 - 0.02 * distance - 0.05 * noise[2], 0, 1),
        "rms_difference": 0.01 * distance,
    }
    return frozen_table("similarity", columns)


def invented_regions(names: Sequence[str], states: Sequence[str], *, single: bool) -> pd.DataFrame:
    """A row for each name; the states go round."""
    rng = np.random.default_rng(6)
    k = len(names)
    state = np.array([states[i % len(states)] for i in range(k)], dtype=object)
    known = np.where(state == "n/a", np.nan, 1.0)
    effect = rng.normal(0.1, 0.3, k) * known
    score = np.clip(rng.normal(0.75, 0.3, k), -0.4, 1) * known
    interval = known * (np.nan if single else 1.0)
    columns: dict[str, Any] = {
        "seed": ["posterior"] * k,
        "index": np.arange(1, k + 1),
        "region": list(names),
        "n_voxels": np.where(state == "n/a", 0, 120),
        "reported_positive": 0.5 * known,
        "reported_negative": 0.1 * known,
        "reported_effect": effect,
        "reported_low": effect - 0.12 * interval,
        "reported_high": effect + 0.1 * interval,
        "effect_mean": effect * 0.9,
        "effect_sd": 0.05 * known,
        "effect_min": effect - 0.2 * known,
        "effect_max": effect + 0.05 * known,
        "sign_share": 0.97 * known,
        "stability": score,
        "stability_low": score - 0.2 * interval,
        "stability_high": np.minimum(score + 0.2 * interval, 1),
        "pairwise_agreement": 0.9 * known,
        "ceiling": np.full(k, np.nan),
        "ceiling_relative": np.full(k, np.nan),
        "state": state,
    }
    for tail in ("positive", "negative"):
        columns |= {
            f"dice_{tail}_mean": 0.8 * known,
            f"dice_{tail}_p05": 0.6 * known,
            f"dice_{tail}_undefined": np.zeros(k, int),
        }
    return frozen_table("regions", columns)


def invented_worth(
    tables: dict[str, pd.DataFrame], claims: Sequence[str], *, ceiling: bool, single: bool
) -> tuple[dict[str, pd.DataFrame], dict[str, Any]]:
    """Tables of what similarities are worth, and the headline numbers that go with them."""
    rng = np.random.default_rng(7)
    placed = tables["placements"].set_index("placement")
    similar = tables["similarity"]
    distance = similar["distance"].to_numpy()
    if ceiling:
        relative = np.where(distance > 0, 1.1 - 0.04 * distance - 0.3 * rng.random(len(similar)), 1)
        similar = similar.assign(ceiling_relative=relative)
    shifts = placed.loc[similar["placement"][1:], ["dx", "dy", "dz"]].to_numpy()
    measures = ["dice_positive", "dice_negative", "spatial_r", *["ceiling_relative"] * ceiling]
    fits = decay_fits(shifts, {name: similar[name].to_numpy()[1:] for name in measures})
    steps = np.arange(0, 8.25, 0.25)
    levels = {"dice_positive": 0.6, "dice_negative": 0.3, "spatial_r": 0.7, "ceiling_relative": 1.0}
    floors = {"dice_positive": 0.02, "spatial_r": -0.05, "ceiling_relative": 0.0}
    geometry = {"spatial_r": np.clip(1 - steps / 9, 0, 1)}
    decay = decay_table(fits, steps, levels if ceiling else {}, floors, geometry)
    limits = tolerance_table(fits)
    verdicts = np.array(["holds", "breaks", "open"], dtype=object)[np.arange(len(claims)) % 3]
    effect = rng.normal(0.3, 0.2, len(claims))
    missing = np.nan if single else 1.0
    told = {
        "seed": ["posterior"] * len(claims),
        "claim": list(claims),
        "target": "region",
        "direction": "positive",
        "reported_effect": effect,
        "reported_low": (effect - 0.1) * missing,
        "reported_high": (effect + 0.1) * missing,
        "passes_reported": verdicts != "open",
        "share_passing": np.where(verdicts == "holds", 1.0, rng.random(len(claims))) * missing,
        "first_failure_mm": np.where(verdicts == "holds", np.nan, 2.5),
        "effect_min": effect - 0.25,
        "effect_max": effect + 0.05,
        "verdict": verdicts,
        "note": "",
    }
    regions = tables["regions"]
    made = {
        "similarity": similar,
        "decay": frozen_table("decay", {"seed": ["posterior"] * len(decay["n"]), **decay}),
        "tolerance": frozen_table(
            "tolerance", {"seed": ["posterior"] * len(limits["n"]), **limits}
        ),
        "claims": frozen_table("claims", told),
        "controls": frozen_table("controls", {"seed": ["posterior"] * 5, "distance": [41.26] * 5}),
        "regions": regions.assign(ceiling=regions["stability"] * 0.9 if ceiling else np.nan),
    }
    known = made["tolerance"].query("direction == 'all'").dropna(subset="tolerance")
    tolerances = {
        row.measure: {"target": row.target, "mm": row.tolerance, "censored": bool(row.censored)}
        for row in known.itertuples()
    }
    first = next(iter(tolerances), None)
    numbers = {
        "ceiling": 0.71 if ceiling else None,
        "ceiling_relative": 0.8765 if ceiling else None,
        "ceiling_relative_low": 0.81 if ceiling and not single else None,
        "ceiling_relative_high": 0.93 if ceiling and not single else None,
        "n_half_splits": 35,
        "n_class_half_splits": 4,
        "n_class_placements": 24,
        "floor": -0.051,
        "n_controls": 5,
        "smoothness_mm": 6.28,
        "tolerances": tolerances,
        "tolerance_measure": first,
        "tolerance_target": tolerances[first]["target"] if first else None,
        "tolerance_mm": tolerances[first]["mm"] if first else None,
        "tolerance_censored": tolerances[first]["censored"] if first else None,
        "most_fragile_direction": "posterior",
        "most_fragile_measure": "ceiling_relative" if "ceiling_relative" in tolerances else first,
        "claims": {word: int((verdicts == word).sum()) for word in ("holds", "breaks", "open")},
        "motion_rank_correlation": -0.43,
        "effect_kind": "mean",
        "notes": [],
    }
    return made, numbers


def invented_summary(tables: dict[str, pd.DataFrame], **others: Any) -> dict[str, Any]:
    """The headline numbers that go with the tables."""
    drawn = tables["similarity"].iloc[1:]
    numbers: dict[str, Any] = {
        "name": "posterior",
        "at_mm": list(AT),
        "radius_mm": 6.0,
        "within_mm": 8.0,
        "draw": "ball",
        "exclude_margin_mm": 4.0,
        "n_participants": 12,
        "n_placements_used": len(drawn),
        "n_placements_set_aside": int((~tables["placements"]["used"]).sum()),
        "n_analysis_voxels": 21234,
        "n_reported_positive": int(tables["similarity"]["n_positive"].iloc[0]),
        "n_reported_negative": int(tables["similarity"]["n_negative"].iloc[0]),
        "threshold": "fdr 0.05",
        "statistic": "t",
        "df": 11.0,
        "stability": 0.912345,
        "stability_low": 0.871,
        "stability_high": 0.953,
        "fleiss_kappa": 0.77,
        "safe_share": 0.0812,
        "contested_share": 0.04321,
        "spatial_r_median": float(drawn["spatial_r"].median()),
    }
    for tail in ("positive", "negative"):
        overlap = drawn[f"dice_{tail}"].dropna()
        numbers[f"dice_{tail}_median"] = float(overlap.median()) if len(overlap) else None
        numbers[f"dice_{tail}_p05"] = float(overlap.quantile(0.05)) if len(overlap) else None
        numbers[f"dice_{tail}_undefined"] = len(drawn) - len(overlap)
    numbers["regions"] = {
        str(k): int(v) for k, v in tables["regions"]["state"].value_counts().items()
    }
    return numbers | others


def invented_seed(
    *,
    names: Sequence[str] = ("Default, front", "Default, left", "Salience", "Motor", "Visual", "X"),
    states: Sequence[str] = STATES,
    count: int = 100,
    aside: int = 0,
    negative: bool = True,
    contested: bool = True,
    participants: int = 12,
    nothing: bool = False,
    grid: Grid | None = None,
    storage: Any = EVERYWHERE,
    worth: bool = False,
    ceiling: bool = True,
    claims: Sequence[str] = ("Parietal", "Visual", "Motor"),
    scale: float = 1.0,
    **summary: Any,
) -> SeedAudit:
    """One seed's result; see the tests for what each option makes awkward."""
    grid = head_grid(8.0) if grid is None else grid
    single = participants == 1
    placements = invented_placements(count, aside, within=8.0, radius=6.0)
    tables = {
        "placements": placements,
        "similarity": invented_similarity(placements, negative=negative),
        "regions": invented_regions(names, states, single=single),
    }
    scaled = [
        name for name in tables["regions"] if "effect" in name or name.endswith(("d_low", "d_high"))
    ]
    tables["regions"][scaled] *= scale
    if nothing:
        tails = ["dice_positive", "dice_negative"]
        tables["similarity"] = tables["similarity"].assign(
            n_positive=0, n_negative=0, **dict.fromkeys(tails, np.nan)
        )
        tables["regions"] = tables["regions"].assign(state="silent")
        summary = {"safe_share": 0.0, "contested_share": 0.0} | summary
    if single:
        summary = {"stability_low": None, "stability_high": None, "df": None, "statistic": "z"} | (
            summary
        )
    if worth:
        more, others = invented_worth(tables, claims, ceiling=ceiling, single=single)
        tables |= more
        summary = others | summary
    numbers = invented_summary(tables, n_participants=participants, **summary)
    states = zip(tables["regions"]["region"], tables["regions"]["state"], strict=True)
    numbers["sentence"] = verdict(numbers, states)
    maps = {}
    for name, volume in head_volumes(
        grid, placements, negative=negative, contested=contested
    ).items():
        if nothing and name not in ("analysis_mask", "anatomy"):
            volume = np.where(np.isnan(volume), volume, 0)
        stored_grid, stored = restored(grid, volume, storage)
        maps[name] = map_image(name, stored, stored_grid.affine, 4)
    return SeedAudit("posterior", numbers, tables, maps)


def invented_audit(*seeds: SeedAudit, **study: Any) -> Audit:
    """The seeds with a provenance, as `seedaudit.provenance` makes it."""
    seeds = seeds or (invented_seed(),)
    first = seeds[0].summary
    sections = {
        "title": "Invented study",
        "data": {"runs": "runs.tsv", "mask": "mask.nii.gz", "regions": "networks_dseg.nii.gz"},
        "cleaning": {
            "confounds": ["trans_*", "rot_*", "csf"],
            "drift": 1,
            "band": [0.008, 0.09],
            "censor": {
                "column": "framewise_displacement",
                "above": 0.45,
                "before": 1,
                "after": 2,
            },
            "smooth": 0.0,
        },
        "seed": [
            {"name": seed.name, "at": list(AT), "space": "mni", "radius": 6.0} for seed in seeds
        ],
        "placements": {
            "within": 8.0,
            "draw": "ball",
            "count": 100,
            "random_state": 20,
            "snap": False,
            "weighting": "hard",
            "min_coverage": 0.5,
        },
        "group": {"model": "~ 1", "folds": 8, "missing": "intersection"},
        "threshold": {
            "rule": "fdr",
            "level": 0.05,
            "scale": "z",
            "per_tail": False,
            "min_extent": 0.0,
            "neighbours": 26,
            "rearrangements": 5000,
        },
        "consensus": {"safe": 0.95},
    } | study
    provenance = {
        "seedaudit": "0.1.0",
        "python": "3.11.9",
        "libraries": {"numpy": "2.4.1", "scipy": "1.17.2"},
        "study": {key: value for key, value in sections.items() if value is not None},
        "data": {
            "grid_shape": [40, 50, 44],
            "voxel_mm": [4.0, 4.0, 4.0],
            "space_code": 4,
            "mask_voxels": 25831,
            "runs": 13,
            "volumes": [118, 124],
            "repetition_time_s": 2.2,
            "anatomy": "ICBM 152 2009 template",
        },
        "group": {
            "participants": first["n_participants"],
            "set_aside": 0,
            "model": "~ 1",
            "columns": ["Intercept"],
            "effect": "Intercept",
            "folds": 8,
            "residual_df": [61, 97],
        },
        "regions": {
            "source": "networks_dseg.nii.gz",
            "count": len(seeds[0].tables["regions"]),
        },
        "choices": ["the space of the images is taken from the header (code 4)"],
        "warnings": [],
    }
    return Audit("Invented study", tuple(seeds), provenance)
