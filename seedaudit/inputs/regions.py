"""Network regions: a label image with its look-up table, or published spheres."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from nilearn.datasets import fetch_coords_dosenbach_2010
from numpy.typing import NDArray
from scipy.spatial import KDTree

from seedaudit.errors import DataError, Problem
from seedaudit.inputs.tables import nearest, read_table
from seedaudit.inputs.volumes import read_image
from seedaudit.space.grid import Grid, VoxelSet

DOSENBACH = "dosenbach2010"
_DOSENBACH_RADIUS = 5.0  # mm
_LARGEST_LABEL = 2**31 - 1
_SLACK = 1e-6  # mm, as for every sphere


@dataclass(frozen=True)
class Regions:
    """Labels of the analysis voxels and the names they stand for.

    Parameters
    ----------
    index : (K,) int64
    names : tuple of K str
    labels : (V,) int32
        Index of the region of each voxel, 0 for none.
    notes : tuple of str
        What was decided on the way; no paths in it.
    """

    index: NDArray[np.int64]
    names: tuple[str, ...]
    labels: NDArray[np.int32]
    notes: tuple[str, ...]


def read_regions(source: str | Path, voxels: VoxelSet) -> Regions:
    """Label the voxels by region.

    Parameters
    ----------
    source : path or "dosenbach2010"
        A 3-D label image with a table of the same stem beside it (columns index and name, as
        BIDS writes `_dseg.tsv`), or the six networks of Dosenbach et al. (2010): spheres of 5 mm
        around 160 MNI coordinates, a voxel in two spheres going to the nearer centre.
    voxels : VoxelSet
        V voxels. An image on another grid is read at their world positions.

    Raises
    ------
    DataError
        With every problem of the image and its table, or when no voxel has a label.
    """
    if str(source) == DOSENBACH:
        index, names, labels, notes = _dosenbach(voxels)
    else:
        path = Path(source)
        index, names = _look_up(path)
        labels, notes = _image_labels(path, index, voxels)
    empty = [n for n, i in zip(names, index, strict=True) if not (labels == i).any()]
    if len(empty) == len(names):
        raise DataError(
            Problem(
                str(source),
                "no region has a voxel in the analysis mask",
                "regions that overlap with the mask",
                "check that regions and runs are in one space",
            )
        )
    if empty:
        notes.append(f"regions without a voxel in the analysis mask: {', '.join(empty)}")
    return Regions(index, names, labels, tuple(notes))


def _look_up(image: Path) -> tuple[NDArray[np.int64], tuple[str, ...]]:
    path = image.parent / (image.name.removesuffix(".gz").removesuffix(".nii") + ".tsv")
    where = str(path)
    if not path.is_file():
        raise DataError(
            Problem(
                str(image),
                f"its look-up table {where} does not exist",
                "a table of the same stem with the columns index and name",
                "write that table",
            )
        )
    table = read_table(path)
    absent = [name for name in ("index", "name") if name not in table.columns]
    if absent:
        raise DataError(
            *(Problem(where, f"no column {n!r}", remedy=nearest(n, table.columns)) for n in absent)
        )
    problems = []
    numbers = pd.to_numeric(table["index"], errors="coerce")
    for row in np.flatnonzero(~numbers.between(0, _LARGEST_LABEL) | (numbers % 1 != 0)):
        found = f"row {row + 1}: index {table['index'].iloc[row] or 'n/a'}"
        allowed = f"a whole number, 0 (background) to {_LARGEST_LABEL}"
        problems.append(Problem(where, found, allowed))
    for row in np.flatnonzero(table["name"].isna()):
        problems.append(Problem(where, f"row {row + 1}: no name"))
    table = table.assign(index=numbers)[numbers != 0]  # 0 is the background (BIDS)
    for column in ("index", "name"):
        twice = table[column][table[column].duplicated()].dropna().unique().tolist()
        if twice:
            shown = ", ".join(f"{value:g}" if column == "index" else value for value in twice)
            problems.append(Problem(where, f"{column} {shown} stands there twice", "each once"))
    if table.empty:
        problems.append(Problem(where, "it names no region"))
    if problems:
        raise DataError(*problems)
    return table["index"].to_numpy(np.int64), tuple(table["name"])


def _image_labels(
    path: Path, index: NDArray[np.int64], voxels: VoxelSet
) -> tuple[NDArray[np.int32], list[str]]:
    image, grid = read_image(path)
    present = np.unique(image)
    if not np.isfinite(present).all() or (present % 1 != 0).any() or present[0] < 0:
        found = "values that are no labels (fractions, negative or not finite)"
        allowed = "whole numbers, 0 for the background"
        remedy = "give a label image; a probability map must be cut into labels first"
        raise DataError(Problem(str(path), found, allowed, remedy))
    unnamed = np.setdiff1d(present[present > 0], index)
    if unnamed.size:
        shown = ", ".join(f"{value:.0f}" for value in unnamed[:10])
        found = f"labels without a row in the look-up table: {shown}"
        found += f" and {unnamed.size - 10} more" if unnamed.size > 10 else ""
        raise DataError(Problem(str(path), found, "a name for every label", "add the rows"))
    if grid.matches(voxels.grid):
        return image[tuple(voxels.ijk.T)].astype(np.int32), []
    note = (
        f"{path.name} is on another grid than the runs ({grid.difference(voxels.grid)}): each "
        "voxel took the label at its centre (nearest neighbour)"
    )
    return _at_world(image, grid, voxels).astype(np.int32), [note]


def _at_world(image: NDArray[np.float64], grid: Grid, voxels: VoxelSet) -> NDArray[np.float64]:
    at = grid.voxel_of(voxels.xyz)
    inside = ((at >= 0) & (at < grid.shape)).all(axis=1)
    values = np.zeros(len(voxels))
    values[inside] = image[tuple(at[inside].T)]
    return values


def _dosenbach(
    voxels: VoxelSet,
) -> tuple[NDArray[np.int64], tuple[str, ...], NDArray[np.int32], list[str]]:
    """Dosenbach N.U.F. et al. (2010) Science 329:1358-1361; the table is part of nilearn."""
    coordinates = fetch_coords_dosenbach_2010(ordered_regions=False)
    names, number = np.unique(np.asarray(coordinates.networks, str), return_inverse=True)
    centres = np.asarray(coordinates.rois, np.float64)
    # Centres of different networks are more than 10 mm apart, so no tie between two can arise.
    distance, row = KDTree(centres).query(voxels.xyz)
    inside = distance <= _DOSENBACH_RADIUS + _SLACK
    labels = np.where(inside, number[row] + 1, 0).astype(np.int32)
    note = (
        f"regions: the six networks of Dosenbach et al. 2010 Science 329:1358, spheres of "
        f"{_DOSENBACH_RADIUS:g} mm around {len(centres)} MNI coordinates; a voxel in two spheres "
        "belongs to the nearer centre"
    )
    return np.arange(1, len(names) + 1), tuple(map(str, names)), labels, [note]
