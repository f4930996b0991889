"""Conversion between the ICBM-152 (MNI) and the Talairach space."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

# Lancaster et al. (2007) Hum. Brain Mapp. 28:1194-1205, doi 10.1002/hbm.20345: the fit pooled
# over two ways of spatial normalisation, MNI to Talairach.
_POOLED = np.array(
    [
        [0.9357, 0.0029, -0.0072, -1.0423],
        [-0.0065, 0.9396, -0.0726, -1.3940],
        [0.0103, 0.0752, 0.8967, 3.6475],
    ]
)


def mni_to_talairach(xyz: ArrayLike) -> NDArray[np.float64]:
    """Convert MNI coordinates (..., 3), mm, to Talairach ones (Lancaster et al. 2007, pooled)."""
    return np.asarray(np.asarray(xyz, dtype=np.float64) @ _POOLED[:, :3].T + _POOLED[:, 3])


def talairach_to_mni(xyz: ArrayLike) -> NDArray[np.float64]:
    """Convert Talairach coordinates (..., 3), mm, to MNI ones; undoes `mni_to_talairach`."""
    shifted = np.asarray(xyz, dtype=np.float64) - _POOLED[:, 3]
    return np.asarray(shifted @ np.linalg.inv(_POOLED[:, :3]).T)
