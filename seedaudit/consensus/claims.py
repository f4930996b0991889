"""Do the sentences of a paper survive a shift of the seed? `holds`, `breaks` or `open`.

A claim that passes here and not there has not been shown to differ there (Nieuwenhuis S. et al.
2011 Nat. Neurosci. 14:1105-1107), so a break needs a significant paired difference; and no
difference is no stability, so holding on needs passes or equivalence.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from seedaudit.consensus.components import contrast_effects
from seedaudit.inference.permutation import maximum_test

FloatArray = NDArray[np.float64]

LEVEL = 0.05
"""Of the maximum test and of each of the two one-sided tests."""


@dataclass(frozen=True)
class ClaimResult:
    """What the placements say about one claim.

    Parameters
    ----------
    effect, t : (N,) arrays
        Effect of the claimed contrast in Fisher z and its t, at the reported placement (first)
        and the drawn ones.
    passes : (N,) bool
    share_passing : float
        Of the drawn placements.
    first_failure : float
        Smallest shift at which the claim does not pass, mm; NaN where there is none.
    largest_difference : float
        Effect minus that of the reported placement, where the claim weakens most: among the
        placements where it fails, if there are any, and of these among the significant ones.
    difference_p : float
        Family-wise p of that difference over all drawn placements.
    equivalent : bool
        The effect is equivalent to the reported one at the safe share of the drawn placements.
    verdict : str
        holds, breaks or open.
    """

    effect: FloatArray
    t: FloatArray
    passes: NDArray[np.bool_]
    share_passing: float
    first_failure: float
    largest_difference: float
    difference_p: float
    equivalent: bool
    verdict: str


def judge_claim(
    means: FloatArray,
    distance: FloatArray,
    design: FloatArray,
    contrast: FloatArray,
    sign: int,
    critical: FloatArray,
    *,
    on_effect: bool = False,
    smallest_effect: float = 0.05,
    safe: float = 0.95,
    rearrangements: int = 5000,
    random_state: int = 0,
) -> ClaimResult:
    """Judge one claim.

    Parameters
    ----------
    means : (n, N) array
        Mean z of the target in each participant at the reported placement (first) and the drawn
        ones.
    distance : (N,) array
        Length of each shift, mm.
    design : (n, p) array
        n > p
    contrast : (p,)
    sign : int
        +1 or -1: the sign that the claim gives the contrast.
    critical : (N,) array
        Value that the rule asks of a voxel of the same map: of |t|, or with `on_effect` of the
        |effect|; inf where no voxel can pass.
    on_effect : bool
    smallest_effect : float
        Fisher z, above 0.
    safe : float
        Share of placements.
    rearrangements : int
    random_state : int
    """
    effect, error = contrast_effects(means, design, contrast)
    t = np.divide(effect, error, out=np.full(effect.shape, np.nan), where=error > 0)
    passes = sign * (effect if on_effect else t) >= critical
    drawn = passes[1:]
    differences = sign * (means[:, 1:] - means[:, :1])
    change, change_error = contrast_effects(differences, design, contrast)
    df = len(design) - design.shape[1]
    # two one-sided tests (Schuirmann 1987) at once
    reach = np.abs(change) + stats.t.ppf(1 - LEVEL, df) * change_error
    equivalent = bool(np.mean(reach < smallest_effect) >= safe)
    weakening = maximum_test(
        -differences, design, contrast,
        two_sided=False, count=rearrangements, random_state=random_state,
    )  # fmt: skip
    p = weakening.p_values()
    share = float(drawn.mean())
    here = _weakest(change, p, ~drawn if not drawn.all() else np.ones(len(drawn), bool))
    broken = bool(not drawn[here] and p[here] <= LEVEL and -change[here] > smallest_effect)
    return ClaimResult(
        effect,
        t,
        passes,
        share,
        float(distance[1:][~drawn].min()) if not drawn.all() else float("nan"),
        float(sign * change[here]),
        float(p[here]),
        equivalent,
        verdict(bool(passes[0]), share >= safe, equivalent, broken),
    )


def verdict(passes: bool, steady: bool, equivalent: bool, broken: bool) -> str:
    """The verdict on a claim.

    Parameters
    ----------
    passes : bool
        At the reported placement.
    steady : bool
        It passes in the safe share of the drawn placements.
    equivalent : bool
        Its effect is equivalent there.
    broken : bool
        The paired difference is significant and larger than the smallest effect.
    """
    if not passes:
        return "open"
    if steady or equivalent:
        return "holds"
    return "breaks" if broken else "open"


def _weakest(change: FloatArray, p: FloatArray, candidates: NDArray[np.bool_]) -> int:
    """The candidate that weakens the claim most, among the significant ones if there are any."""
    significant = candidates & (p <= LEVEL)
    chosen = np.flatnonzero(significant if significant.any() else candidates)
    return int(chosen[change[chosen].argmin()])
