"""Affines, masks, spheres and coordinate systems as arrays in world millimetres."""

from seedaudit.space.grid import Grid, VoxelSet
from seedaudit.space.spheres import cloud_exclusion, sphere_coverage, sphere_weights
from seedaudit.space.talairach import mni_to_talairach, talairach_to_mni

__all__ = [
    "Grid",
    "VoxelSet",
    "cloud_exclusion",
    "mni_to_talairach",
    "sphere_coverage",
    "sphere_weights",
    "talairach_to_mni",
]
