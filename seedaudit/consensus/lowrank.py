"""The maps of all placements in little space: a mean, a few components in 8 bits, and weights.

Neighbouring placements share most of their voxels, so their maps differ in a few patterns only.
"""

from __future__ import annotations

import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

LARGEST_CODE = 127
MOST = 128
"""Components at the most: beyond, little of what is left over is common to several maps."""

_BLOCK = 8192  # voxels
_ROUNDING_SHARE = 1 / 20
"""Part of the tolerance that the rounding of one component may take."""


@dataclass(frozen=True)
class LowRank:
    """N maps over V voxels: each is the mean plus K weighted components.

    Parameters
    ----------
    codes : (K + 1, V) int8
        The mean, then the components, rounded to steps.
    steps : (K + 1,) float64
        What one code is worth.
    weights : (N, K) float64
    errors : (K + 1,) float64
        Largest difference from the maps, over maps and voxels, with the first 0 to K components;
        made with the rounded numbers.
    """

    codes: NDArray[np.int8]
    steps: NDArray[np.float64]
    weights: NDArray[np.float64]
    errors: NDArray[np.float64]

    @property
    def error(self) -> float:
        """Largest difference from the maps, in their unit."""
        return float(self.errors[-1])

    def maps(self) -> NDArray[np.float64]:
        """The maps (N, V) that the codes and weights give."""
        parts = self.codes * self.steps[:, None]
        return np.asarray(parts[0] + self.weights @ parts[1:])

    def first(self, count: int) -> LowRank:
        """The same with so many components only."""
        rows = slice(count + 1)
        return LowRank(
            self.codes[rows], self.steps[rows], self.weights[:, :count], self.errors[rows]
        )


def low_rank(
    maps: NDArray[np.floating[Any]],
    *,
    tolerance: float,
    most_bytes: float = np.inf,
    overwrite: bool = False,
) -> LowRank:
    """Add components until every map is met within the tolerance, or the space is used up.

    Parameters
    ----------
    maps : (N, V) array
        Finite; taken in blocks of voxels, so that little memory is needed beside them.
    tolerance : float
        Largest difference allowed, in the unit of the maps.
    most_bytes : float
        Largest sum of the packed sizes.
    overwrite : bool
        Work in the memory of the maps, which are lost.

    Returns
    -------
    LowRank
        Its `error` is above the tolerance where the space did not suffice.

    Notes
    -----
    Singular vectors of what the rounded mean leaves over, by way of the small (N, N) matrix of
    products: Eckart C. & Young G. (1936) Psychometrika 1:211-218. They are best for the sum of
    squares; the largest difference is what is measured.
    """
    mean = maps.mean(axis=0, dtype=np.float64)
    mean_step = _largest(mean) / LARGEST_CODE or 1.0
    codes = [_rounded(mean, mean_step)]
    offset = codes[0] * mean_step
    left = np.subtract(maps, offset.astype(np.float32), out=maps if overwrite else None)
    lengths, vectors = _principal(left)
    steps, weights = [mean_step], [np.zeros(0)]
    size, errors = len(packed(codes[0])), [_largest(left)]
    while errors[-1] >= tolerance and lengths.max(initial=0.0) > 0 and len(steps) <= MOST:
        # a vector may come again, for what the rounding of its pattern has left over
        k = int(lengths.argmax())
        pattern = vectors[:, k].astype(np.float32) @ left
        length = float(np.linalg.norm(pattern))
        pattern /= length
        weight = vectors[:, k] * length
        step = max(
            _largest(pattern) / LARGEST_CODE,
            2 * tolerance * _ROUNDING_SHARE / _largest(weight),
        )
        code = _rounded(pattern, step)
        if not code.any():
            # finer than the steps: nothing of this vector can be kept
            lengths[k] = 0
            continue
        size += len(packed(code))
        if size > most_bytes:
            break
        errors.append(_taken_away(left, weight, code, step))
        lengths[k] = length * np.linalg.norm(pattern - code * step)
        codes.append(code)
        steps.append(step)
        weights.append(weight)
    kept = np.array(weights[1:]).reshape(-1, len(maps)).T
    return LowRank(np.array(codes), np.array(steps), kept, np.array(errors))


def _taken_away(
    left: NDArray[np.floating[Any]],
    weight: NDArray[np.float64],
    code: NDArray[np.int8],
    step: float,
) -> float:
    """Take one component out, in place, and give the largest value that is left."""
    column = weight.astype(np.float32)[:, None]
    largest = 0.0
    for part in _blocks(left):
        block = left[:, part]
        block -= column * (code[part] * np.float32(step))
        largest = max(largest, _largest(block))
    return largest


def packed(codes: NDArray[np.int8]) -> bytes:
    """Differences of successive codes (modulo 256), compressed; neighbours in space are alike."""
    steps = np.diff(codes.view(np.uint8), prepend=np.uint8(0))
    return zlib.compress(steps.tobytes(), 9)


def _principal(
    left: NDArray[np.floating[Any]],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Singular values above noise, largest first, and the left singular vectors as columns."""
    products = np.zeros((len(left), len(left)))
    for part in _blocks(left):
        block = left[:, part].astype(np.float64)
        products += block @ block.T
    values, vectors = np.linalg.eigh(products)
    # squares of singular values: below this share they are rounding of the products
    some = values > max(values[-1], 0) * 1e-10
    return np.sqrt(values[some][::-1]), vectors[:, some][:, ::-1]


def _rounded(values: NDArray[np.floating[Any]], step: float) -> NDArray[np.int8]:
    return np.rint(values / step).astype(np.int8)


def _largest(values: NDArray[np.floating[Any]]) -> float:
    return float(max(values.max(initial=0.0), -values.min(initial=0.0)))


def _blocks(maps: NDArray[np.floating[Any]]) -> Iterator[slice]:
    for start in range(0, maps.shape[1], _BLOCK):
        yield slice(start, start + _BLOCK)
