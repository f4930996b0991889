"""The picture under the maps: a template for data in a template space, else the data themselves."""

from __future__ import annotations

import warnings

import nibabel as nib
import numpy as np
from numpy.typing import NDArray

from seedaudit.inputs.header import RunHeader
from seedaudit.inputs.volumes import first_volume


def anatomy(header: RunHeader, *, template: bool) -> tuple[NDArray[np.float32], str]:
    """A three-dimensional image on the grid of a run, 0 to 1, and where it comes from.

    Parameters
    ----------
    header : RunHeader
        Run that gives the grid and, without a template, its first volume.
    template : bool
        The data are in MNI space: resample the ICBM 152 2009 template that nilearn carries.
    """
    if template:
        # imported here: nilearn is slow to load and not every command draws
        from nilearn.datasets import load_mni152_template
        from nilearn.image import resample_img

        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            finest = max(1, round(float(header.grid.voxel_sizes.min())))
            image = resample_img(
                load_mni152_template(resolution=min(finest, 4)),
                target_affine=header.grid.affine,
                target_shape=header.grid.shape,
                interpolation="linear",
            )
        assert isinstance(image, nib.Nifti1Image)
        picture, source = np.asarray(image.dataobj, np.float32), "ICBM 152 2009 template"
    else:
        picture = np.nan_to_num(first_volume(header).astype(np.float32))
        source = "first volume of the first run"
    low, high = np.percentile(picture, [1, 99.5])
    return np.clip((picture - low) / max(high - low, 1e-12), 0, 1).astype(np.float32), source
