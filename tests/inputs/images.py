"""Small NIfTI files written byte by byte, so that every header field can be chosen."""

from __future__ import annotations

import gzip
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np

SHAPE = (7, 5, 6)
# Oblique, anisotropic, left-handed storage: a swapped or flipped axis cannot hide.
_TURN = nib.eulerangles.euler2mat(z=0.2, y=-0.1, x=0.3)
AFFINE = nib.affines.from_matvec(_TURN @ np.diag([-2.0, 3.0, 2.5]), [11.0, -7.0, 4.0])


def write_nifti(
    path: Path,
    values: np.ndarray,
    dtype: Any = "<f4",
    *,
    sform: np.ndarray | None = AFFINE,
    sform_code: int = 4,
    qform: np.ndarray | None = None,
    qform_code: int = 0,
    version: int = 1,
    fields: dict[str, Any] | None = None,
) -> Path:
    """Write stored values as they are, with header fields overridden at the end."""
    dtype = np.dtype(dtype)
    header_class = {1: nib.Nifti1Header, 2: nib.Nifti2Header}[version]
    header = header_class(endianness=">" if dtype.byteorder == ">" else "<")
    header.set_data_dtype(dtype.newbyteorder("="))
    header.set_data_shape(values.shape)
    header.set_sform(sform, code=sform_code)
    header.set_qform(qform, code=qform_code)
    header["vox_offset"] = len(header.binaryblock) + 4
    header["magic"] = b"n+1" if version == 1 else header["magic"]
    header["pixdim"][4] = 2.0
    header["xyzt_units"] = 10
    for name, value in (fields or {}).items():
        if name == "repetition_time":
            header["pixdim"][4] = value
        else:
            header[name] = value
    content = header.binaryblock + bytes(4) + values.astype(dtype).tobytes(order="F")
    path.write_bytes(gzip.compress(content, 1) if path.suffix == ".gz" else content)
    return path


def run_values(seed: int, n_volumes: int = 9, shape: tuple[int, ...] = SHAPE) -> np.ndarray:
    """A noisy run on a baseline, fit for every stored type (0 to 127)."""
    random = np.random.default_rng(seed)
    return random.normal(60, 12, (*shape, n_volumes)).clip(0, 127)
