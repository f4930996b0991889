"""The frozen result of an audit: summary, tables and maps, one set for each seed."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import nibabel as nib
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from seedaudit.consensus.lowrank import LowRank
from seedaudit.dictionary import ALL_COLUMNS, ALL_MAPS, INTEGER_MAPS

if TYPE_CHECKING:
    from matplotlib.axes import Axes

SCHEMA = 1
"""Version of summary.json; raised when a key changes its meaning or goes away."""

SIGNIFICANT_DIGITS = 8
"""Tables hold this many, in memory as on disk, so that what is loaded is what was saved."""


@dataclass(frozen=True)
class SeedAudit:
    """What the audit found for one seed.

    Parameters
    ----------
    name : str
    summary : mapping
        Headline numbers, as in summary.json.
    tables : mapping of str to DataFrame
        placements, similarity, pairs, regions, thresholds, participants.
    maps : mapping of str to Nifti1Image
        With read-only data, on the grid of the runs.
    placement_maps : LowRank, optional
        Effect maps of the used placements, in the order of the table of similarities, over the
        analysis voxels in the order of a `VoxelSet`; the explorer moves the seed with them.
    """

    name: str
    summary: Mapping[str, Any]
    tables: Mapping[str, pd.DataFrame]
    maps: Mapping[str, nib.Nifti1Image]
    placement_maps: LowRank | None = None

    def table(self, name: str) -> pd.DataFrame:
        """A copy of one table."""
        return self.tables[name].copy()

    def plot(self, panel: str, ax: Axes | None = None, **options: Any) -> Axes:
        """Draw one panel of the figure; see `seedaudit.report.figures.PANELS` for the names."""
        from seedaudit.report.figures import draw_panel

        return draw_panel(self, panel, ax, **options)


@dataclass(frozen=True)
class Audit:
    """The result of an audit of one or more seeds.

    `provenance` says what the numbers come from: versions, the study as read, digests of the
    inputs, warnings and the choices the program made; `between` is the table that compares the
    seeds, where there are several.
    """

    title: str
    seeds: tuple[SeedAudit, ...]
    provenance: Mapping[str, Any]
    between: pd.DataFrame | None = None

    @property
    def summary(self) -> dict[str, Any]:
        """The content of summary.json."""
        told = {
            "schema": SCHEMA,
            "title": self.title,
            "seeds": [dict(seed.summary) for seed in self.seeds],
        }
        if self.between is not None:
            told["interchangeable"] = [
                {"seeds": [row.seed_a, row.seed_b], "interchangeable": row.interchangeable}
                for row in self.between.itertuples()
            ]
        return told

    def seed(self, name: str | None = None) -> SeedAudit:
        """One seed's result; the first without a name.

        Raises
        ------
        KeyError
            If there is no seed of that name.
        """
        if name is None:
            return self.seeds[0]
        by_name = {seed.name: seed for seed in self.seeds}
        if name not in by_name:
            raise KeyError(f"no seed {name!r}; there are {', '.join(by_name)}")
        return by_name[name]

    def table(self, name: str) -> pd.DataFrame:
        """One table of all seeds; `seeds` is the one that compares them.

        Raises
        ------
        KeyError
            If there is no table of that name.
        """
        if name == "seeds" and self.between is not None:
            return self.between.copy()
        return pd.concat([seed.table(name) for seed in self.seeds], ignore_index=True)

    @property
    def regions(self) -> pd.DataFrame:
        """The regions of all seeds."""
        return self.table("regions")

    @property
    def placements(self) -> pd.DataFrame:
        """The placements of all seeds."""
        return self.table("placements")

    @property
    def similarity(self) -> pd.DataFrame:
        """Each used placement against the reported one, for all seeds."""
        return self.table("similarity")

    @property
    def maps(self) -> Mapping[str, nib.Nifti1Image]:
        """The maps of the first seed."""
        return self.seeds[0].maps

    def plot(self, panel: str, ax: Axes | None = None, **options: Any) -> Axes:
        """Draw one panel of the first seed's figure."""
        if panel == "seeds":
            options = {"between": self.between, **options}
        return self.seeds[0].plot(panel, ax, **options)

    def save(self, folder: str | Path, *, replace: bool = False) -> Path:
        """Write the result folder, whole or not at all; see `seedaudit.store.save`."""
        from seedaudit.report import write_report
        from seedaudit.store import save

        return save(self, folder, replace=replace, extra=write_report)

    def _repr_html_(self) -> str:
        from html import escape

        lines = "".join(f"<p>{escape(seed.summary['sentence'])}</p>" for seed in self.seeds)
        return f"<h3>{escape(self.title)}</h3>{lines}"


def frozen_table(name: str, columns: Mapping[str, Any]) -> pd.DataFrame:
    """A table with the columns of the data dictionary, in its order, rounded as on disk."""
    table = pd.DataFrame({key: columns[key] for key in ALL_COLUMNS[name] if key in columns})
    for key in table.columns:
        if table[key].dtype.kind == "f":
            table[key] = rounded(table[key].to_numpy())
    return table


def rounded(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Numbers as they are after a round trip through text of `SIGNIFICANT_DIGITS`."""
    return np.array([float(f"{value:.{SIGNIFICANT_DIGITS}g}") for value in values], dtype=float)


def map_image(
    name: str, volume: NDArray[Any], affine: NDArray[np.float64], space_code: int
) -> nib.Nifti1Image:
    """A map with read-only data, both forms coded, and its description.

    Parameters
    ----------
    name : str
        Key of the dictionary of maps.
    volume : 3-D array
    affine : (4, 4)
    space_code : int
        NIfTI code of the space of the runs.
    """
    dtype = np.uint8 if name in INTEGER_MAPS else np.float32
    data = np.ascontiguousarray(volume, dtype=dtype)
    data.setflags(write=False)
    image = nib.Nifti1Image(data, affine)
    image.header.set_xyzt_units("mm")
    image.header["descrip"] = ALL_MAPS[name][0][:79].encode()
    image.set_sform(affine, code=space_code)
    image.set_qform(affine, code=space_code)
    return image


def read_only(mapping: dict[str, Any]) -> Mapping[str, Any]:
    """A view of a dictionary that cannot be changed."""
    return MappingProxyType(mapping)
