"""Planes through the maps in world millimetres, right whatever the affine of the images is.

A plane is a regular grid of points in mm; each takes the voxel that holds it. So the right of a
coronal or axial picture is the right of the body, the right of a sagittal one is anterior, and up
is superior (axial: anterior), for either handedness, permuted, oblique or anisotropic storage.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import nibabel as nib
import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray
from scipy import ndimage
from scipy.spatial import KDTree

from seedaudit.results import SeedAudit
from seedaudit.space.grid import Grid

FloatArray = NDArray[np.float64]

DIRECTIONS = {"coronal": (0, 2, 1), "sagittal": (1, 2, 0), "axial": (0, 1, 2)}
"""World axes of each plane: along the picture, up the picture, through it."""

ENDS = (("L", "R"), ("P", "A"), ("I", "S"))
"""What lies at the lower and at the upper end of each world axis."""

FINEST, COARSEST = 0.5, 1.0
"""Distance of the sampled points, mm."""


@dataclass(frozen=True)
class Plane:
    """A window of a plane.

    Parameters
    ----------
    kind : {"coronal", "sagittal", "axial"}
    at : (3,)
        A world point on the plane, mm.
    window : (left, right, lower, upper)
        mm
    step : float
        Distance of the points, mm.
    """

    kind: str
    at: tuple[float, float, float]
    window: tuple[float, float, float, float]
    step: float = COARSEST

    @property
    def through(self) -> int:
        """World axis across the plane."""
        return DIRECTIONS[self.kind][2]

    @property
    def across(self) -> FloatArray:
        """Places of the columns, mm."""
        return _centres(*self.window[:2], self.step)

    @property
    def upward(self) -> FloatArray:
        """Places of the rows, mm."""
        return _centres(*self.window[2:], self.step)

    @property
    def points(self) -> FloatArray:
        """World points (rows, columns, 3), mm; the first row is the lowest."""
        along, up, through = DIRECTIONS[self.kind]
        points = np.empty((len(self.upward), len(self.across), 3))
        points[..., along] = self.across
        points[..., up] = self.upward[:, None]
        points[..., through] = self.at[through]
        return points

    @property
    def letters(self) -> tuple[str, str]:
        """What is at the left and at the right of the picture."""
        return ENDS[DIRECTIONS[self.kind][0]]


def _centres(low: float, high: float, step: float) -> FloatArray:
    count = max(1, round((high - low) / step))
    return np.asarray(low + (np.arange(count) + 0.5) * (high - low) / count)


def grid_of(image: nib.Nifti1Image) -> Grid:
    """The grid that a map is stored on."""
    x, y, z = image.shape
    return Grid((x, y, z), image.affine)


def sample(image: nib.Nifti1Image, plane: Plane, outside: float = np.nan) -> FloatArray:
    """Value of the voxel that holds each point of a plane, (rows, columns)."""
    data = np.asanyarray(image.dataobj)
    at = grid_of(image).voxel_of(plane.points)
    inside = ((at >= 0) & (at < data.shape)).all(axis=-1)
    values = np.full(inside.shape, outside, dtype=np.float64)
    values[inside] = data[tuple(at[inside].T)]
    return values


def sample_smooth(image: nib.Nifti1Image, plane: Plane) -> FloatArray:
    """Trilinear value at each point of a plane, 0 outside; for the picture underneath only."""
    data = np.asanyarray(image.dataobj)
    at = np.moveaxis(grid_of(image).to_voxel(plane.points), -1, 0)
    return np.asarray(ndimage.map_coordinates(data, at, order=1, cval=0.0, prefilter=False))


def step_of(seed: SeedAudit) -> float:
    """A distance of points that shows every voxel, mm."""
    finest = grid_of(seed.maps["analysis_mask"]).voxel_sizes.min()
    return float(np.clip(finest / 3, FINEST, COARSEST))


def cloud_rows(seed: SeedAudit) -> pd.DataFrame:
    """The placements of the cloud: all but control seeds, which lie far away on purpose."""
    table = seed.tables["placements"]
    return table[table["kind"] != "control"]


def body_frame(seed: SeedAudit, pad: float = 4.0) -> FloatArray:
    """Box (2, 3) around the analysis voxels and the reported sphere, mm."""
    image = seed.maps["analysis_mask"]
    grid = grid_of(image)
    voxels = np.argwhere(np.asanyarray(image.dataobj) > 0)
    xyz = grid.to_world(voxels) if len(voxels) else grid.corners()
    half = np.abs(grid.affine[:3, :3]).sum(axis=1) / 2
    at = np.asarray(seed.summary["at_mm"], dtype=float)
    radius = float(seed.summary["radius_mm"])
    low = np.minimum(xyz.min(axis=0) - half, at - radius) - pad
    high = np.maximum(xyz.max(axis=0) + half, at + radius) + pad
    return np.array([low, high])


def whole_plane(kind: str, at: ArrayLike, frame: FloatArray, step: float) -> Plane:
    """The plane through a point, as wide as the frame."""
    along, up, _ = DIRECTIONS[kind]
    x, y, z = (float(value) for value in np.asarray(at))
    window = (frame[0, along], frame[1, along], frame[0, up], frame[1, up])
    return Plane(kind, (x, y, z), window, step)


def near_plane(kind: str, at: ArrayLike, half: float, step: float) -> Plane:
    """The plane through a point, so many mm to either side of it."""
    along, up, _ = DIRECTIONS[kind]
    centre = np.asarray(at, dtype=float)
    window = (
        centre[along] - half,
        centre[along] + half,
        centre[up] - half,
        centre[up] + half,
    )
    return Plane(kind, tuple(centre.tolist()), window, step)


@dataclass(frozen=True)
class Place:
    """A contested place: its most contested voxel (mm), and the voxels of its cluster."""

    at: tuple[float, float, float]
    n_voxels: int


def contested_places(seed: SeedAudit, most: int = 3) -> list[Place]:
    """The largest clusters of the contested map (26 neighbours), largest first.

    Each stands at the voxel with a tail's share nearest to one half; among equals, at the one
    nearest to the centre of gravity of the cluster. Order in the file decides nothing.
    """
    image = seed.maps["contested"]
    labels, _ = ndimage.label(
        np.asanyarray(image.dataobj) > 0, structure=np.ones((3, 3, 3), dtype=int)
    )
    unsettled = _unsettled(seed)
    places = []
    for number, box in enumerate(ndimage.find_objects(labels), start=1):
        voxels = np.argwhere(labels[box] == number) + [part.start for part in box]
        xyz = np.round(grid_of(image).to_world(voxels), 3) + 0.0
        off = np.round(unsettled[tuple(voxels.T)], 6)
        lateral = np.round(np.linalg.norm(xyz - xyz.mean(axis=0), axis=1), 3)
        best = np.lexsort((*xyz.T[::-1], lateral, off))[0]
        x, y, z = xyz[best].tolist()
        places.append(Place((x, y, z), len(voxels)))
    return sorted(places, key=lambda place: (-place.n_voxels, place.at))[:most]


def _unsettled(seed: SeedAudit) -> FloatArray:
    """Distance from one half of the tail's share that is nearest to it, infinite where missing."""
    shares = [
        np.asanyarray(seed.maps[f"agreement_{tail}"].dataobj) for tail in ("positive", "negative")
    ]
    off = np.minimum(*(np.abs(share - 0.5) for share in shares))
    return np.where(np.isnan(off), np.inf, off)


def excluded_zone(seed: SeedAudit, plane: Plane) -> NDArray[np.bool_]:
    """Points of a plane in voxels that no analysis uses because of the spheres of the cloud."""
    mask = seed.maps["analysis_mask"]
    table = cloud_rows(seed)
    counted = table["used"].to_numpy(dtype=bool) | table["flags"].str.contains("missing_in_data")
    spheres = table[counted.to_numpy(dtype=bool)]
    # a voxel counts by its centre, so the zone may end half a diagonal off the widened sphere
    slack = float(np.linalg.norm(grid_of(mask).voxel_sizes)) / 2
    margin = float(seed.summary["exclude_margin_mm"]) + slack
    near: NDArray[Any] = np.zeros(plane.points.shape[:2], dtype=bool)
    for radius, group in spheres.groupby("radius"):
        tree = KDTree(group[["x", "y", "z"]].to_numpy())
        distance, _ = tree.query(plane.points, distance_upper_bound=float(radius) + margin)
        near |= np.isfinite(distance)
    return near & (sample(mask, plane, outside=0) == 0)
