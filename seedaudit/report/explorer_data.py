"""What the explorer computes with: volumes and placement maps as compressed bytes, and numbers."""

from __future__ import annotations

import base64
import math
import zlib
from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from matplotlib import colormaps
from matplotlib.colors import to_rgb
from numpy.typing import NDArray

from seedaudit.consensus.lowrank import LowRank, packed
from seedaudit.report.slices import body_frame, grid_of
from seedaudit.report.style import DARK, LIGHT, Palette
from seedaudit.results import SeedAudit
from seedaudit.space.grid import Grid, VoxelSet

LEVELS = 64
"""Shades of one class."""
FAINTEST = 0.34
"""Part of a side of the diverging map that is left out: what passes a cut must not look neutral."""

GREYS = 63
"""Levels of the anatomy; more cannot be told apart under a map and cost space."""
SHARES = 250
"""Code of a share of 1."""


def page_data(seed: SeedAudit) -> tuple[dict[str, Any], dict[str, str]]:
    """The numbers of a page, and its arrays as base64 text, all but the placement maps.

    Returns
    -------
    numbers : dict, ready for JSON
        Missing numbers are None.
    arrays : dict of str
        Each is base64 of a zlib stream of bytes; `regions` holds unsigned 16-bit words,
        little-endian.
    """
    mask = seed.maps["analysis_mask"]
    grid = grid_of(mask)
    box = _Box(grid, body_frame(seed))
    voxels = VoxelSet.from_mask(grid, np.asarray(mask.dataobj) > 0)
    at = tuple(voxels.ijk.T)
    index = seed.tables["regions"]["index"].to_numpy(dtype=int)
    labels = np.asarray(seed.maps["region_labels"].dataobj)[at]
    arrays = {
        "analysis": _bytes(box.cut(np.asarray(mask.dataobj)) > 0),
        "anatomy": _bytes(np.rint(box.cut(np.asarray(seed.maps["anatomy"].dataobj)) * GREYS)),
        "regions": _encoded((_row_of(labels, index) + 1).astype("<u2").tobytes()),
    }
    for tail in ("positive", "negative"):
        share = np.nan_to_num(np.asarray(seed.maps[f"agreement_{tail}"].dataobj)[at])
        arrays[f"share_{tail}"] = _bytes(np.rint(share * SHARES))
    arrays |= _pairs(seed.tables.get("pairs"))
    numbers: dict[str, Any] = {
        "shape": box.shape,
        "toVoxel": np.linalg.inv(box.affine)[:3].tolist(),
        "voxels": len(voxels),
        "frame": body_frame(seed).tolist(),
        "edge": float(grid.voxel_sizes.min()),
        "diagonal": float(np.linalg.norm(grid.voxel_sizes)),
        "at": list(seed.summary["at_mm"]),
        "within": float(seed.summary["within_mm"]),
        "radius": float(seed.summary["radius_mm"]),
        "margin": float(seed.summary["exclude_margin_mm"]),
        "reported": [
            int(seed.summary["n_reported_positive"]),
            int(seed.summary["n_reported_negative"]),
        ],
        "placements": placement_list(seed),
        "regions": [" ".join(str(name).split()) for name in seed.tables["regions"]["region"]],
        "colours": page_colours(),
    }
    return json_ready(numbers), arrays


def map_arrays(maps: LowRank) -> list[str]:
    """The mean and each component as base64 of a zlib stream.

    The stream holds differences of successive signed bytes.
    """
    return [base64.b64encode(packed(codes)).decode() for codes in maps.codes]


def map_numbers(maps: LowRank) -> dict[str, Any]:
    """What the page needs to put the arrays of `map_arrays` together."""
    return {
        "steps": maps.steps.tolist(),
        "weights": [[float(f"{weight:.7g}") for weight in row] for row in maps.weights],
        "error": maps.error,
    }


def page_colours() -> dict[str, Any]:
    """The colours that the page draws with, each as red, green, blue of 0 to 255."""
    sides = 0.5 * np.linspace(FAINTEST, 1, LEVELS)

    def theme(colours: Palette) -> dict[str, Any]:
        return {
            "plus": _rgb(colours.diverging(0.5 + sides)),
            "minus": _rgb(colours.diverging(0.5 - sides)),
            "greys": _rgb(colours.anatomy(np.linspace(0, 1, GREYS + 1))),
            "ink": _rgb([to_rgb(colours.ink)])[0],
            "hatch": _rgb([to_rgb(colours.paper)])[0],
        }

    return {
        "light": theme(LIGHT),
        "dark": theme(DARK),
        "cividis": _rgb(colormaps["cividis"](np.linspace(0, 1, LEVELS))),
    }


def _rgb(colours: Any) -> list[list[int]]:
    return np.rint(np.asarray(colours)[..., :3] * 255).astype(int).tolist()


class _Box:
    """The part of a grid around a frame (2, 3), mm, stored along R, A and S."""

    def __init__(self, grid: Grid, frame: NDArray[np.float64]) -> None:
        self._axes, self._reverse = grid.canonical_axes
        shape = np.array(grid.shape)[list(self._axes)]
        affine = grid.affine[:, [*self._axes, 3]].copy()
        for axis in np.flatnonzero(self._reverse):
            affine[:3, 3] += affine[:3, axis] * (shape[axis] - 1)
            affine[:3, axis] *= -1
        corners = np.array(np.meshgrid(*frame.T)).reshape(3, -1)
        ijk = np.linalg.solve(affine[:3, :3], corners - affine[:3, 3:])
        low = np.clip(np.floor(ijk.min(axis=1)), 0, shape - 1).astype(int)
        high = np.clip(np.ceil(ijk.max(axis=1)) + 1, low + 1, shape).astype(int)
        affine[:3, 3] += affine[:3, :3] @ low
        self.affine = affine
        self.shape = [int(size) for size in high - low]
        self._part = tuple(slice(a, b) for a, b in zip(low, high, strict=True))

    def cut(self, volume: NDArray[Any]) -> NDArray[Any]:
        """That part of a volume as a list, the axis R fastest."""
        turned = np.flip(volume.transpose(self._axes), tuple(np.flatnonzero(self._reverse)))
        return np.asarray(turned[self._part].ravel(order="F"))


def _row_of(labels: NDArray[Any], index: NDArray[np.int_]) -> NDArray[np.int_]:
    """Position of each label in `index`, -1 for those that are none of them."""
    if not len(index):
        return np.full(len(labels), -1)
    order = np.argsort(index)
    found = order[np.clip(np.searchsorted(index[order], labels), 0, len(index) - 1)]
    return np.where(index[found] == labels, found, -1)


def placement_list(seed: SeedAudit) -> list[dict[str, Any]]:
    """Centre and similarity of the reported and of each used drawn placement, in table order."""
    similar = seed.tables["similarity"]
    where = seed.tables["placements"].set_index("placement").loc[similar["placement"]]
    columns = {
        "name": similar["placement"].to_numpy(),
        **{name: where[name].to_numpy(float) for name in ("x", "y", "z", "radius")},
        "distance": similar["distance"].to_numpy(float),
        **{
            short: similar[name].to_numpy(float)
            for short, name in (
                ("positive", "dice_positive"),
                ("negative", "dice_negative"),
                ("r", "spatial_r"),
            )
        },
        "nPositive": similar["n_positive"].to_numpy(),
        "nNegative": similar["n_negative"].to_numpy(),
    }
    return [dict(zip(columns, row, strict=True)) for row in zip(*columns.values(), strict=True)]


def _pairs(table: pd.DataFrame | None) -> dict[str, str]:
    """Similarity of every pair, in table order, as codes: 255 where undefined, else 0 to 250."""
    if table is None or not len(table):
        return {}
    measures = ("dice_positive", "dice_negative", "spatial_r")
    codes = {
        name: np.rint(np.clip(table[name].to_numpy(float), 0, 1) * SHARES) for name in measures
    }
    return {f"pairs_{name}": _bytes(np.nan_to_num(code, nan=255)) for name, code in codes.items()}


def _bytes(values: NDArray[Any]) -> str:
    return _encoded(values.astype(np.uint8).tobytes())


def _encoded(content: bytes) -> str:
    return base64.b64encode(zlib.compress(content, 9)).decode()


def json_ready(value: Any) -> Any:
    """The same content in types of JSON; numbers that are not finite become None."""
    if isinstance(value, Mapping):
        return {str(key): json_ready(part) for key, part in value.items()}
    if isinstance(value, list | tuple | np.ndarray):
        return [json_ready(part) for part in value]
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
