"""NIfTI images as arrays; runs are streamed one volume at a time."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from math import prod
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from seedaudit.errors import DataError, Problem
from seedaudit.inputs.header import RunHeader, read_header, read_image_header
from seedaudit.inputs.stream import Stream, opened
from seedaudit.space.grid import Grid, VoxelSet

__all__ = [
    "RunData",
    "RunHeader",
    "first_volume",
    "read_header",
    "read_image",
    "read_mask",
    "read_run",
]


LARGEST_VALUE = 1e15
"""No signal is larger: what is beyond (values of the wrong byte order) counts as not finite."""


@dataclass(frozen=True)
class RunData:
    """The voxel series of one run.

    Parameters
    ----------
    series : (T, V) float32
        Stored value minus that of the first volume; 0 in voxels that are not finite.
    background : (V,) float32
        The first volume, in stored units.
    finite : (V,) bool
        Whether the voxel holds finite values, none beyond `LARGEST_VALUE`, in every volume.
    digest : str
        SHA-256 of the file as stored.
    """

    series: NDArray[np.float32]
    background: NDArray[np.float32]
    finite: NDArray[np.bool_]
    digest: str


def read_run(
    header: RunHeader,
    voxels: VoxelSet,
    smooth: float = 0.0,
    *,
    out: NDArray[np.float32] | None = None,
) -> RunData:
    """Stream a run and keep the series of the voxels asked for.

    Scaling (scl_slope, scl_inter) is not applied: it is one affine map of all values, which a
    correlation cannot see. The first volume is subtracted before anything is rounded to float32,
    so that a small signal on a large baseline keeps its digits.

    Parameters
    ----------
    header : RunHeader
    voxels : VoxelSet
        V voxels on the grid of the run.
    smooth : float
        FWHM in mm of a Gaussian applied to every volume, 0 for none. Values that are not finite
        count as 0 in it, and stay marked.
    out : (T or more, V) float32, optional
        Memory for the series: fresh pages cost as much time as decompression.

    Raises
    ------
    DataError
        When the grids differ, or the file is truncated or corrupt.
    """
    _check_grid(header.path, header.grid, voxels.grid)
    work = _difference_type(header.dtype)
    order = voxels.file_order
    # Smoothing needs the neighbours outside the voxel list too.
    taken: Any = slice(None) if smooth > 0 else order
    zero = -header.scaling[1] / header.scaling[0]  # the stored value that stands for 0
    if out is None:
        out = np.empty((header.n_volumes, len(voxels)), np.float32)
    series = out[: header.n_volumes]
    finite = np.ones(len(voxels), bool)
    may_lack_values = header.dtype.kind == "f" or header.dtype.itemsize == 8 or smooth > 0

    def at_voxels(values: NDArray[Any]) -> NDArray[Any]:
        return _smoothed(values, header.grid, smooth)[order] if smooth > 0 else values

    with opened(header.path) as stream, np.errstate(over="ignore", invalid="ignore"):
        for t, stored in enumerate(_volumes(header, stream)):
            values = stored[taken]
            if smooth > 0:
                values = values.astype(work)
                bad = ~_plausible(values)
                values[bad] = zero
                finite &= ~bad[order]
            if t == 0:
                first = values.astype(work)
            if smooth > 0:
                series[t] = at_voxels(values - first)
            else:
                np.subtract(values, first, out=series[t], casting="same_kind")
            if may_lack_values:
                finite &= _plausible(series[t])
        digest = stream.finish()
        background = at_voxels(first).astype(np.float32)
    if not finite.all():
        series[:, ~finite] = 0
    return RunData(series, background, finite, digest)


def first_volume(header: RunHeader) -> NDArray[np.float64]:
    """Read the first volume of a run, scaled; shape as the grid's.

    Raises
    ------
    DataError
        When the file ends early or is corrupt.
    """
    with opened(header.path) as stream:
        return _scaled(next(_volumes(header, stream)), header)


def read_image(path: str | Path) -> tuple[NDArray[np.float64], Grid]:
    """Read a 3-D image whole: scaled values and their grid.

    Raises
    ------
    DataError
        As `read_header`, and when the image holds more than one volume or is corrupt.
    """
    header = read_image_header(path)
    with opened(header.path) as stream:
        values = _scaled(next(_volumes(header, stream)), header)
        stream.finish()
    return values, header.grid


def read_mask(
    path: str | Path, grid: Grid | None = None, beside: str = "the audit's"
) -> tuple[NDArray[np.bool_], Grid]:
    """Read a mask: 0 or not finite outside, one other value inside.

    Parameters
    ----------
    path : path of a 3-D image
    grid : Grid, optional
        The grid the mask must lie on.
    beside : str
        Whose grid that is, such as the name of a run, for the message.

    Raises
    ------
    DataError
        When the grids differ, nothing is inside, or there is more than one value beside 0 (where
        to cut a probability map, or which labels to take, only the user can say).
    """
    values, own = read_image(path)
    if grid is not None:
        _check_grid(path, own, grid, beside)
    mask = np.isfinite(values) & (values != 0)
    inside = np.unique(values[mask])
    if inside.size != 1:
        found = "an empty mask"
        if inside.size:
            shown = ", ".join(f"{value:g}" for value in inside[:3])
            found = f"{inside.size} values beside 0 ({shown}{', ...' if inside.size > 3 else ''})"
        allowed = "0 outside, one other value inside, at least one voxel"
        raise DataError(Problem(str(path), found, allowed, "threshold or redraw the mask"))
    return mask, own


def _check_grid(path: str | Path, own: Grid, wanted: Grid, beside: str = "the audit's") -> None:
    difference = own.difference(wanted)
    if difference:
        raise DataError(
            Problem(
                str(path),
                f"another grid than {beside}: {difference}",
                "every run and mask on one grid",
                "resample this image before the audit",
            )
        )


def _plausible(values: NDArray[Any]) -> NDArray[np.bool_]:
    """Whether each value is a number of a size that a sum of squares in float32 can bear."""
    return np.asarray(np.abs(values) <= LARGEST_VALUE)


def _difference_type(dtype: np.dtype) -> type[np.float32] | type[np.float64]:
    # float32 holds the difference of two 16-bit integers exactly, and that of two float32 values
    # as well as its result can be stored; anything wider needs float64.
    narrow = dtype.itemsize <= (4 if dtype.kind == "f" else 2)
    return np.float32 if narrow else np.float64


def _smoothed(values: NDArray[Any], grid: Grid, fwhm: float) -> NDArray[Any]:
    """Smooth a volume that is given and returned flat, in file order."""
    sigma = fwhm / (np.sqrt(8 * np.log(2)) * grid.voxel_sizes)
    volume = values.reshape(grid.shape, order="F")
    return np.asarray(ndimage.gaussian_filter(volume, sigma)).ravel(order="F")


def _scaled(stored: NDArray[Any], header: RunHeader) -> NDArray[np.float64]:
    slope, intercept = header.scaling
    with np.errstate(over="ignore", invalid="ignore"):
        values = stored.astype(np.float64) * slope + intercept
    return values.reshape(header.grid.shape, order="F")


def _volumes(header: RunHeader, stream: Stream) -> Iterator[NDArray[Any]]:
    """Yield each volume flat, in file order; the next one overwrites it."""
    stream.skip(header.offset)
    buffer = bytearray(prod(header.grid.shape) * header.dtype.itemsize)
    values = np.frombuffer(buffer, header.dtype)
    for t in range(header.n_volumes):
        if stream.fill(buffer) < len(buffer):
            found = f"the data end within volume {t + 1} of {header.n_volumes}"
            raise DataError(Problem(str(header.path), found, remedy="copy the file again"))
        yield values
