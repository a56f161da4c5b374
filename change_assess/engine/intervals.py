"""From an estimate to limits. Methods are plain functions, chosen by name.

================  ===================================================================================================
``normal``        value ± z · SE. Promises its level in large samples only; with rare change and few errors seen it
                  fails badly. Always reproducible by hand, hence kept beside every other method.
``t``             the same with Student's t and the design's degrees of freedom.
``exact``         one stratum, yes/no labels, equal areas, element sampling: limits by inverting the binomial
                  (Clopper & Pearson 1934) or, with the finite population correction, the hypergeometric
                  distribution. Coverage is never below the level.
``simulated``     measures that hang on a |.| or min near its kink: quantiles over simulated samples.
================  ===================================================================================================
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from scipy import special

from change_assess.engine.cells import Cells, Floats, Ints
from change_assess.engine.design import Design, indicator_of
from change_assess.errors import InputError

DRAWS = 4000
"""Simulated samples behind a ``simulated`` interval."""


class Interval(NamedTuple):
    """Limits of an estimate."""

    lower: float
    upper: float
    level: float = 0.95
    method: str = "normal"


def check_level(level: float) -> float:
    """Return `level` if it is a confidence level in (0.5, 1); else refuse it."""
    if not 0.5 < level < 1:
        raise InputError(
            f"the confidence level {level:g} is not between 0.5 and 1", value=level, mend="Use 0.95 or 0.90."
        )
    return level


def normal(value: Floats, se: Floats, df: Floats, level: float) -> tuple[Floats, Floats]:
    """Normal limits; not clipped to the range of the measure."""
    half = special.ndtri(0.5 + level / 2) * se
    return value - half, value + half


def student_t(value: Floats, se: Floats, df: Floats, level: float) -> tuple[Floats, Floats]:
    """Limits by Student's t; without any degree of freedom there are none."""
    known = np.asarray(df, float) > 0
    half = np.where(known, special.stdtrit(np.where(known, df, 1.0), 0.5 + level / 2), np.nan) * se
    return value - half, value + half


METHODS: dict[str, Callable[[Floats, Floats, Floats, float], tuple[Floats, Floats]]] = {
    "normal": normal,
    "t": student_t,
}


def exact(x: Floats, n: Floats, population: Floats | None, level: float) -> tuple[Floats, Floats]:
    """Exact limits for a proportion seen as `x` of `n`, both tails at (1 - level) / 2.

    Parameters
    ----------
    x, n : ndarray of float holding whole numbers, same shape
    population : ndarray or None
        Units in the stratum; None for sampling with replacement or an infinite stratum.

    Returns
    -------
    lower, upper : ndarray
        Clopper & Pearson (1934) without `population`; with it, the smallest and largest share whose hypergeometric
        tail beyond the observed count still exceeds (1 - level) / 2.
    """
    x, n = np.broadcast_arrays(np.asarray(x, float), np.asarray(n, float))
    tail = (1 - level) / 2
    if population is None:
        with np.errstate(invalid="ignore"):
            lower = np.where(x > 0, special.betaincinv(np.maximum(x, 1), n - x + 1, tail), 0.0)
            upper = np.where(x < n, special.betaincinv(x + 1, np.maximum(n - x, 1), 1 - tail), 1.0)
        return lower, upper
    from scipy import stats  # half a second to import, needed here only

    size = np.broadcast_to(np.asarray(population, float), x.shape)
    lower = _first(lambda m: stats.hypergeom.sf(x - 1, size, m, n) > tail, x, size - (n - x))
    upper = size - _first(lambda m: stats.hypergeom.sf(n - x - 1, size, m, n) > tail, n - x, size - x)
    return np.asarray(lower / size), np.asarray(upper / size)


def _first(accepts: Callable[[Floats], Any], low: Floats, high: Floats) -> Floats:
    """Smallest whole number in [low, high] that a predicate, false then true, accepts; by bisection."""
    low, high = np.array(low, float), np.array(high, float)
    while np.any(low < high):
        middle = np.floor((low + high) / 2)
        good = accepts(middle)
        high = np.where(good, middle, high)
        low = np.where(good, low, np.minimum(middle + 1, high))
    return low


def simulated_counts(design: Design, cells: Cells, rng: np.random.Generator, draws: int = DRAWS) -> Floats:
    """Counts of simulated samples, shape (draws, c), whose totals vary as the design's totals do.

    Every unit of each stage of selection gets a random multiplier of mean one: a Dirichlet law within its stratum or
    cluster (Rubin 1981, the Bayesian bootstrap), its concentration set so that the variance of a total equals the
    stage's estimate, (1 - f) n/(n - 1) times the centred sum of squares. What is wholly sampled does not vary.
    """
    counts = np.asarray(cells.count)
    for stage in design.stages(cells):
        multiplier = _multipliers(stage.count, stage.group, stage.size, stage.factor, rng, draws)
        columns = multiplier if len(stage.count) == len(cells) or cells.psu is None else multiplier[:, cells.psu]
        counts = counts * columns
    return counts


def _multipliers(
    count: Floats, group: Ints, size: Floats, factor: Floats, rng: np.random.Generator, draws: int
) -> Floats:
    """Mean multiplier of the units of each column, shape (draws, columns); one where nothing varies."""
    factor = np.nan_to_num(factor)
    with np.errstate(divide="ignore", invalid="ignore"):
        shape = np.where(factor > 0, np.clip((size / factor - 1) / size, 0.02, None), np.inf)
    rate = shape[group] * count
    fixed = ~np.isfinite(rate) | (count == 0)
    law = np.where(fixed, 1.0, rate)
    if law.min() > 0.5:  # single precision takes half the time, but small shapes underflow in it
        gamma = rng.standard_gamma(law.astype(np.float32), (draws, len(law)), np.float32).astype(float)
    else:
        gamma = np.maximum(rng.standard_gamma(law, (draws, len(law))), np.finfo(float).tiny)
    gamma[:, fixed] = count[fixed]
    total = np.asarray(gamma @ indicator_of(group, np.ones(len(group)), len(size)))
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(fixed, 1.0, gamma / total[:, group] * size[group] / count)


def zero_count_bound(area: Floats, n: Floats, level: float) -> float:
    """Largest area of a class that, at `level`, could be there although no unit of any stratum showed it.

    The maximum of sum(area p) over all stratum rates p whose chance of showing nothing, prod((1 - p)**n), is at
    least 1 - level (one-sided; sampling with replacement, hence cautious in finite strata). At the maximum
    1 - p = min(1, k n / area); the multiplier k is found by bisection in its logarithm.

    Parameters
    ----------
    area, n : ndarray, shape (H,)
        Area and sample size of each stratum, n > 0.
    """

    def rates(k: float) -> Floats:
        return np.maximum(0.0, 1 - k * n / area)

    low, high = 0.0, float((area / n).max())
    for _ in range(200):
        middle = (low + high) / 2
        with np.errstate(divide="ignore"):
            chance = float((n * np.log1p(-rates(middle))).sum())
        low, high = (middle, high) if chance < np.log(1 - level) else (low, middle)
    return float((area * rates(high)).sum())


def quantiles(replicates: Floats, level: float) -> tuple[Floats, Floats]:
    """Lower and upper quantile over the first axis, ignoring replicates that are not estimable."""
    tails = [(1 - level) / 2, (1 + level) / 2]
    finite = np.isfinite(replicates)
    if finite.all():
        lower, upper = np.quantile(replicates, tails, axis=0)
        return lower, upper
    known = finite.any(axis=0)
    lower, upper = np.nanquantile(np.where(known, replicates, 0.0), tails, axis=0)
    return np.where(known, lower, np.nan), np.where(known, upper, np.nan)
