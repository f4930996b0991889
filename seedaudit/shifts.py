"""Shifts of a seed, drawn from stated distributions in world millimetres."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from math import isfinite, sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation
from scipy.special import gammainc, gammaincinv
from scipy.stats import qmc

from seedaudit.errors import DataError, Problem, StudyError
from seedaudit.space.lattice import ball_lattice

DRAWS = ("ball", "normal", "shell", "lattice")
MIN_ACCEPTANCE = 0.01  # below this share of accepted draws the constraint is taken for a mistake
_SLACK = 1e-6  # mm

Shifts = NDArray[np.float64]
Accept = Callable[[Shifts], NDArray[np.bool_]]


def draw_shifts(
    draw: str,
    *,
    count: int,
    within: float,
    random_state: int,
    sd: float | None = None,
    distances: Sequence[float] | None = None,
    step: float | None = None,
    accept: Accept | None = None,
) -> Shifts:
    """Draw shifts from a stated distribution about zero, in world axes.

    Parameters
    ----------
    draw : {"ball", "normal", "shell", "lattice"}
        Uniform in a ball; isotropic normal truncated at `within`; evenly spread directions at
        given distances; or every point of a lattice but zero itself.
    count : int
        Number of shifts, 1 or more; `lattice` ignores it.
    within : float
        Largest shift, mm, above 0.
    random_state : int
        0 or more; the same number gives the same shifts. `lattice` has no chance in it.
    sd : float, optional
        Standard deviation of `normal` along each axis before truncation, mm; half of `within` when
        left out.
    distances : sequence of float, optional
        Distances of `shell`, mm, up to `within`, which is the only one when left out; `count` is
        split evenly over them.
    step : float, optional
        Spacing of `lattice`, mm; 2 when left out.
    accept : function of shifts (M, 3) to bool (M,), optional
        Which shifts may stand. More are drawn until `count` do; a lattice keeps those that do.

    Returns
    -------
    array (N, 3)
        Shifts, mm. `lattice` is sorted by distance.

    Raises
    ------
    StudyError
        If an argument is out of range.
    DataError
        If less than 1 % of the draws are accepted.

    Notes
    -----
    `ball` and `normal` are scrambled Sobol points (Owen 1998, J. Complexity 14:466-489) sent
    through the inverse distribution of the radius and a uniform direction.
    """
    sd = within / 2 if sd is None else sd
    step = 2.0 if step is None else step
    lengths = [within] if distances is None else list(distances)
    _check_draw(draw, count, within, random_state, sd, lengths, step)
    if draw == "lattice":
        points = ball_lattice(within, step)[1:]  # without the reported place itself
        return points if accept is None else points[accept(points)]
    if draw == "shell":
        streams = _shells(lengths, count, random_state)
    else:
        spread = sd if draw == "normal" else None
        streams = [(count, _sobol_batches(count, within, random_state, spread))]
    return np.concatenate([_fill(wanted, stream, accept) for wanted, stream in streams])


def _shells(
    lengths: Sequence[float], count: int, random_state: int
) -> list[tuple[int, Iterator[Shifts]]]:
    """How many shifts are wanted at each distance, and the endless stream they come from."""
    shares = [len(part) for part in np.array_split(np.arange(count), len(lengths))]
    generators = np.random.default_rng(random_state).spawn(len(lengths))
    return [
        (share, _shell_batches(length, share, rng))
        for length, share, rng in zip(lengths, shares, generators, strict=True)
    ]


def _shell_batches(length: float, count: int, rng: np.random.Generator) -> Iterator[Shifts]:
    """Evenly spread directions on a spherical Fibonacci lattice, turned at random each time.

    Swinbank & Purser (2006) Q. J. R. Meteorol. Soc. 132:1769-1793.
    """
    index = np.arange(count)
    height = 1 - (2 * index + 1) / count
    directions = _directions(height, index * np.pi * (3 - sqrt(5)))
    while True:
        turned = directions @ Rotation.random(rng=rng).as_matrix().T
        # shuffled, so that a batch cut short under a constraint favours no side
        yield length * rng.permutation(turned)


def _sobol_batches(
    count: int, within: float, random_state: int, sd: float | None
) -> Iterator[Shifts]:
    engine = qmc.Sobol(3, scramble=True, rng=np.random.default_rng(random_state))
    power = (count - 1).bit_length()
    uniform = engine.random_base2(power)
    while True:
        if sd is None:
            length = within * np.cbrt(uniform[:, 0])
        else:
            # |shift|^2 / (2 sd^2) of an isotropic normal in 3-D is gamma distributed, shape 3/2
            top = gammainc(1.5, (within / sd) ** 2 / 2)
            length = sd * np.sqrt(2 * gammaincinv(1.5, uniform[:, 0] * top))
        directions = _directions(2 * uniform[:, 1] - 1, 2 * np.pi * uniform[:, 2])
        yield length[:, None] * directions
        # the balance of a Sobol sequence holds for powers of two, so the total doubles
        uniform = engine.random_base2(power)
        power += 1


def _directions(height: NDArray[np.floating], angle: NDArray[np.floating]) -> Shifts:
    ring = np.sqrt(1 - height**2)
    return np.stack([ring * np.cos(angle), ring * np.sin(angle), height], axis=1, dtype=np.float64)


def _fill(wanted: int, batches: Iterator[Shifts], accept: Accept | None) -> Shifts:
    """Take accepted shifts from a stream until enough are there or acceptance is hopeless."""
    kept: list[Shifts] = []
    n_kept = n_drawn = 0
    for batch in batches:
        chosen = batch if accept is None else batch[accept(batch)]
        kept.append(chosen)
        n_kept += len(chosen)
        n_drawn += len(batch)
        if n_kept >= wanted:
            break
        if n_drawn * MIN_ACCEPTANCE >= wanted:
            raise DataError(
                Problem(
                    "inside",
                    f"{n_kept} of {n_drawn} drawn centres ({n_kept / n_drawn:.2%}) lie in it",
                    f"at least {MIN_ACCEPTANCE:.0%}",
                    "check that the mask is the right one, or leave `inside` out",
                )
            )
    return np.concatenate(kept)[:wanted]


def _check_draw(
    draw: str,
    count: int,
    within: float,
    random_state: int,
    sd: float,
    lengths: Sequence[float],
    step: float,
) -> None:
    problems = []

    def need(fine: bool, where: str, found: object, allowed: str) -> None:
        if not fine:
            problems.append(Problem(where, str(found), allowed))

    need(draw in DRAWS, "draw", repr(draw), ", ".join(DRAWS))
    need(count >= 1, "count", count, "1 or more")
    need(random_state >= 0, "random_state", random_state, "a whole number, 0 or more")
    need(is_length(within), "within", within, "a length above 0 mm")
    if draw == "normal":
        need(is_length(sd), "sd", sd, "a length above 0 mm")
    if draw == "lattice":
        need(is_length(step), "step", step, "a length above 0 mm")
    if draw == "shell":
        fine = bool(lengths) and all(is_length(d) and d <= within + _SLACK for d in lengths)
        rule = f"one or more lengths above 0 and up to within = {within:g} mm"
        need(fine, "distances", lengths, rule)
        need(count >= len(lengths), "count", count, f"{len(lengths)} or more, one per distance")
    if problems:
        raise StudyError(*problems)


def is_length(value: float) -> bool:
    """Whether a value is a finite length above 0."""
    return isfinite(value) and value > 0
