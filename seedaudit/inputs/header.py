"""NIfTI headers, judged before memory is taken."""

from __future__ import annotations

from dataclasses import dataclass
from math import isfinite, prod
from pathlib import Path

import nibabel as nib
import numpy as np
from nibabel.spatialimages import HeaderDataError
from numpy.typing import NDArray

from seedaudit.errors import DataError, Problem
from seedaudit.inputs.stream import opened
from seedaudit.space.grid import Grid

_FORMATS = {348: (nib.Nifti1Header, b"n+1\0"), 540: (nib.Nifti2Header, b"n+2\0\r\n\x1a\n")}
_TIME_UNITS = {0: 1.0, 8: 1.0, 16: 1e-3, 24: 1e-6}  # unknown (read as s), s, ms, us
_SPACE_UNITS = {1: "metre", 3: "micrometre"}
_FORM_TOLERANCE = 1e-2  # mm
_DEFLATE_LIMIT = 1032  # no byte of a deflate stream expands further (zlib, technical details)


@dataclass(frozen=True)
class RunHeader:
    """What a NIfTI header says about one run.

    Parameters
    ----------
    path : Path
    grid : Grid
        Shape and affine: the sform when its code is positive, else the qform.
    n_volumes : int
    repetition_time : float or None
        Seconds; None when the header holds none.
    dtype : numpy.dtype
        Stored type, with its byte order.
    offset : int
        First byte of the voxel data.
    space_code : int
        NIfTI code of the form in use (1 scanner, ... 4 MNI-152).
    warnings : tuple of str
        Words without the path.
    scaling : (float, float)
        Slope and intercept of the stored values.
    """

    path: Path
    grid: Grid
    n_volumes: int
    repetition_time: float | None
    dtype: np.dtype
    offset: int
    space_code: int
    warnings: tuple[str, ...] = ()
    scaling: tuple[float, float] = (1.0, 0.0)


def read_header(path: str | Path, declared: RunHeader | None = None) -> RunHeader:
    """Read and judge the header of a run; the voxel data are not touched.

    Parameters
    ----------
    path : path of a NIfTI-1 or NIfTI-2 file, plain or gzip
    declared : RunHeader, optional
        Image whose grid the run is declared to be on, used only where its own header codes none.

    Raises
    ------
    DataError
        With every problem of the header: not NIfTI, not 4-D, complex or RGB values, no coded
        affine, or a size that the file cannot hold.
    """
    return _judged(Path(path), single=False, declared=declared)


def read_image_header(path: str | Path) -> RunHeader:
    """Read and judge the header of a 3-D image, as `read_header` does for a run."""
    return _judged(Path(path), single=True)


def read_map_header(path: str | Path) -> RunHeader:
    """Read and judge the header of an image of one or more volumes, as `read_header` does."""
    return _judged(Path(path), single=None)


def _judged(path: Path, *, single: bool | None, declared: RunHeader | None = None) -> RunHeader:
    where = str(path)
    header, compressed = _nifti_header(path)
    problems: list[Problem] = []
    warnings: list[str] = []
    dims = [int(size) for size in header["dim"]]
    shape = (dims[1], dims[2], dims[3])
    n_volumes = dims[4] if dims[0] > 3 else 1
    if not 3 <= dims[0] <= 7 or min(dims[1 : dims[0] + 1]) < 1:
        allowed = "three axes in space and one of volumes, every length at least 1"
        remedy = "write the image again; its header is damaged"
        problems.append(Problem(where, f"dim is {dims}", allowed, remedy))
    elif any(size > 1 for size in dims[5 : dims[0] + 1]):
        found = f"an image with {dims[0]} axes ({dims[1 : dims[0] + 1]})"
        remedy = "split the image into one 4-D run each"
        problems.append(Problem(where, found, "three axes in space and one of volumes", remedy))
    elif single and n_volumes > 1:
        found, remedy = f"a 4-D image ({n_volumes} volumes)", "give one volume of it"
        problems.append(Problem(where, found, "a 3-D image", remedy))
    elif single is False and n_volumes < 2:
        allowed = "a 4-D run of at least two volumes"
        remedy = "give the whole series, all volumes in one file"
        problems.append(Problem(where, "a 3-D image (one volume)", allowed, remedy))
    dtype = _dtype(header, where, problems)
    if declared is not None and max(int(header["sform_code"]), int(header["qform_code"])) <= 0:
        affine, space_code = _declared(declared, shape, where, problems, warnings)
    else:
        affine, space_code = _affine(header, shape, where, problems, warnings)
    offset, first_allowed = float(header["vox_offset"]), len(header.binaryblock) + 4
    if not offset.is_integer() or offset < first_allowed:
        found = f"the data start at byte {offset:g} (vox_offset)"
        problems.append(Problem(where, found, f"a whole number, at least {first_allowed}"))
    if problems:
        raise DataError(*problems)
    size = int(offset) + prod((*shape, n_volumes)) * dtype.itemsize
    _check_size(path, size, compressed)
    return RunHeader(
        path=path,
        grid=Grid(shape, affine),
        n_volumes=n_volumes,
        repetition_time=_repetition_time(header, warnings),
        dtype=dtype,
        offset=int(offset),
        space_code=space_code,
        warnings=tuple(warnings),
        scaling=_scaling(header),
    )


def _nifti_header(path: Path) -> tuple[nib.Nifti1Header, bool]:
    """The header as nibabel sees it, either byte order, and whether the file is gzip."""
    block = bytearray(540)
    with opened(path) as stream:
        del block[stream.fill(block) :]
    if not block:
        raise DataError(Problem(str(path), "an empty file", "NIfTI", "copy the file again"))
    # the size of the header tells the byte order: any other field may be damaged
    orders = {int.from_bytes(block[:4], "little"): "<", int.from_bytes(block[:4], "big"): ">"}
    for size, (header_class, magic) in _FORMATS.items():
        at = slice(344, 348) if size == 348 else slice(4, 12)
        if size in orders and len(block) >= size and block[at] == magic:
            header = header_class(bytes(block[:size]), endianness=orders[size], check=False)
            return header, stream.compressed
    raise DataError(
        Problem(
            str(path),
            "not a NIfTI file of one part",
            "NIfTI-1 or NIfTI-2, .nii or .nii.gz",
            "convert the image (a pair of header and image file becomes one .nii)",
        )
    )


def _dtype(header: nib.Nifti1Header, where: str, problems: list[Problem]) -> np.dtype:
    code = int(header["datatype"])
    try:
        dtype: np.dtype = header.get_data_dtype()
        name = nib.nifti1.data_type_codes.label[code]
    except (HeaderDataError, KeyError):
        dtype, name = np.dtype("V1"), "unknown"
    if dtype.kind not in "iuf" or dtype.itemsize > 8:
        found = f"values of datatype {code} ({name})"
        allowed = "integers of 8 to 64 bits, float32 or float64"
        problems.append(Problem(where, found, allowed, "store the image in one of these types"))
    return dtype


def _affine(
    header: nib.Nifti1Header,
    shape: tuple[int, int, int],
    where: str,
    problems: list[Problem],
    warnings: list[str],
) -> tuple[NDArray[np.float64], int]:
    """The affine in use and its code; sform before qform is the rule of nibabel and others."""
    codes = {"sform": int(header["sform_code"]), "qform": int(header["qform_code"])}
    usable: dict[str, Grid] = {}
    for form, code in codes.items():
        if code <= 0:
            continue
        try:
            affine = header.get_sform() if form == "sform" else header.get_qform()
            usable[form] = Grid((1, 1, 1), affine)
        except (DataError, HeaderDataError, ValueError) as error:
            # A broken form is fatal only when it is the one that counts.
            if form == "sform" or codes["sform"] <= 0:
                found = f"the {form} (code {code}) is no usable affine"
                problems.append(Problem(where, found, remedy="set the affine of the image again"))
            else:
                warnings.append(f"the qform (code {code}) is not usable ({error})")
    if max(codes.values()) <= 0:
        problems.append(
            Problem(
                where,
                "no affine is coded (sform_code and qform_code are 0)",
                "one code above 0",
                "set the affine of the image, or declare an image on the same grid (data.grid); "
                "nothing here guesses where the voxels are",
            )
        )
    chosen = "sform" if codes["sform"] > 0 else "qform"
    if chosen not in usable:
        return np.eye(4), 0
    if len(usable) == 2 and min(shape) >= 1:
        grids = [Grid(shape, usable[form].affine) for form in ("sform", "qform")]
        gap = np.linalg.norm(grids[0].corners() - grids[1].corners(), axis=1).max()
        if gap > _FORM_TOLERANCE:
            both = " and ".join(
                f"the {form} (code {codes[form]}) {grid.affine[:3].round(4).tolist()}"
                for form, grid in zip(("sform", "qform"), grids, strict=True)
            )
            mirrored = " and one mirrors the other" if grids[0].mirrors(grids[1]) else ""
            warnings.append(
                f"{both} disagree by up to {gap:.3g} mm at a corner{mirrored}; the sform is used"
            )
    return usable[chosen].affine, codes[chosen]


def _declared(
    declared: RunHeader,
    shape: tuple[int, int, int],
    where: str,
    problems: list[Problem],
    warnings: list[str],
) -> tuple[NDArray[np.float64], int]:
    """The affine and code that the user declared for an image that codes none."""
    if declared.grid.shape != shape:
        problems.append(
            Problem(
                where,
                f"codes no affine and has the shape {shape}",
                f"the shape of the declared grid {declared.path.name}, {declared.grid.shape}",
            )
        )
    warnings.append(f"codes no affine; on the grid of {declared.path.name}, as declared")
    return declared.grid.affine, declared.space_code


def _check_size(path: Path, size: int, compressed: bool) -> None:
    """Refuse a header that asks for more bytes than the file can hold."""
    stored = path.stat().st_size
    if compressed and size > stored * _DEFLATE_LIMIT:
        limit = f"at most {_DEFLATE_LIMIT} times the {stored} bytes of the gzip file"
    elif not compressed and size > stored:
        limit = f"the {stored} bytes of the file"
    else:
        return
    remedy = "copy the file again; the header is wrong or the file is truncated"
    raise DataError(Problem(str(path), f"the header asks for {size} bytes", limit, remedy))


def _repetition_time(header: nib.Nifti1Header, warnings: list[str]) -> float | None:
    units = int(header["xyzt_units"])
    if units & 7 in _SPACE_UNITS:
        warnings.append(f"the spatial unit is {_SPACE_UNITS[units & 7]}; sizes are read as mm")
    value, factor = float(header["pixdim"][4]), _TIME_UNITS.get(units & 56)
    if factor is None or not isfinite(value) or value <= 0:
        return None
    # A float32 0.72 was meant as 0.72 and not as 0.7200000286: its shortest decimal is taken.
    return float(str(header["pixdim"][4])) * factor


def _scaling(header: nib.Nifti1Header) -> tuple[float, float]:
    slope, intercept = float(header["scl_slope"]), float(header["scl_inter"])
    if not isfinite(slope) or not isfinite(intercept) or slope == 0:
        return 1.0, 0.0
    return slope, intercept
