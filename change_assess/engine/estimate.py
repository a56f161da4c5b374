"""An estimate: a number that remembers the expression it came from.

Because the expression is kept, the difference of two estimates formed in a notebook still has its covariance, can
be pickled, and can be evaluated again for other counts.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any, Protocol

import numpy as np
from scipy import sparse

from change_assess.engine.cells import Floats
from change_assess.engine.intervals import METHODS, Interval, check_level
from change_assess.engine.linearise import Linearised, Survey, common, lift
from change_assess.errors import InputError, nearest


class Leaf(Protocol):
    """Where expressions start: one number that is a function of totals."""

    def linear(self) -> Linearised:
        """Value with scores, shape ()."""

    def at(self, survey: Survey, count: Floats) -> Floats:
        """Value for other counts, shape (..., c) over the cells of `survey`; shape (...)."""


@dataclass(frozen=True)
class Known:
    """A number known without error, such as the area of the target population."""

    value: float
    survey: Survey

    def linear(self) -> Linearised:
        """Value with empty scores."""
        cells = sum(len(p.cells) for p in self.survey.parts)
        return Linearised(np.asarray(self.value), sparse.csr_array((1, cells)), self.survey)

    def at(self, survey: Survey, count: Floats) -> Floats:
        """The same value for all counts."""
        return np.full(count.shape[:-1], self.value)


@dataclass(frozen=True)
class Applied:
    """A numpy function, by name, applied to expressions and plain numbers."""

    function: str
    arguments: tuple[Any, ...]

    def linear(self) -> Linearised:
        """Value with scores of the function of the arguments."""
        result: Linearised = getattr(np, self.function)(
            *(a if isinstance(a, float) else a.linear() for a in self.arguments)
        )
        return result

    def at(self, survey: Survey, count: Floats) -> Floats:
        """Value for other counts."""
        with np.errstate(all="ignore"):
            result: Floats = getattr(np, self.function)(
                *(a if isinstance(a, float) else a.at(survey, count) for a in self.arguments)
            )
        return result


@dataclass(frozen=True, eq=False)
class Estimate:
    """One estimated number: value, standard error, degrees of freedom, interval, and arithmetic that keeps them.

    Examples
    --------
    ``(later - earlier).se`` uses the covariance of the units the two share; estimates from independent samples
    have covariance zero. Numbers and estimates may be mixed with ``+ - * /``; `log` and `exp` are methods.
    """

    expression: Leaf
    level: float = 0.95

    @cached_property
    def linear(self) -> Linearised:
        """Value with its scores."""
        return self.expression.linear()

    @property
    def value(self) -> float:
        """The estimate; NaN if it is not estimable."""
        return float(self.linear.value)

    @cached_property
    def se(self) -> float:
        """Standard error; NaN if it cannot be computed."""
        return float(self.linear.se)

    @cached_property
    def df(self) -> float:
        """Degrees of freedom: primary units minus strata."""
        return float(self.linear.survey.df(self.linear.scores)[0])

    def interval(self, level: float | None = None, method: str | None = None) -> Interval:
        """Limits at `level` (default: that of the result it came from).

        The conventional limits, also where the table has exact ones. Where the sample shows no variance they are NaN,
        unless a method is asked for by name.

        Raises
        ------
        InputError
            For an unknown method or a level outside (0.5, 1).
        """
        level = check_level(self.level if level is None else level)
        flat = method is None and self.se == 0 and not isinstance(self.expression, Known)
        method = method or "normal"
        if method not in METHODS:
            raise InputError(
                f"there is no interval method '{method}' for a single estimate",
                value=method,
                mend=f"Use one of: {', '.join(METHODS)}.{nearest(method, METHODS)}",
            )
        if flat:  # nothing seen to vary is no reason for x ± 0
            return Interval(float("nan"), float("nan"), level, method)
        lower, upper = METHODS[method](np.asarray(self.value), np.asarray(self.se), np.asarray(self.df), level)
        return Interval(float(lower), float(upper), level, method)

    def at(self, count: Floats) -> Floats:
        """Value for other counts, shape (..., c) over the cells of this estimate's sample."""
        return self.expression.at(self.linear.survey, np.asarray(count, float))

    def variance_by_stratum(self) -> Floats:
        """Contribution of each stratum to the variance, shape (H,)."""
        return np.asarray(self.linear.survey.components(self.linear.scores)[0])

    def log(self) -> Estimate:
        """Natural logarithm."""
        return self._apply("log", self)

    def exp(self) -> Estimate:
        """Exponential."""
        return self._apply("exp", self)

    def _apply(self, function: str, *arguments: Any) -> Estimate:
        nodes = tuple(a.expression if isinstance(a, Estimate) else float(a) for a in arguments)
        return Estimate(Applied(function, nodes), self.level)

    def __add__(self, other: Any) -> Estimate:
        return self._apply("add", self, other)

    def __radd__(self, other: Any) -> Estimate:
        return self._apply("add", other, self)

    def __sub__(self, other: Any) -> Estimate:
        return self._apply("subtract", self, other)

    def __rsub__(self, other: Any) -> Estimate:
        return self._apply("subtract", other, self)

    def __mul__(self, other: Any) -> Estimate:
        return self._apply("multiply", self, other)

    def __rmul__(self, other: Any) -> Estimate:
        return self._apply("multiply", other, self)

    def __truediv__(self, other: Any) -> Estimate:
        return self._apply("divide", self, other)

    def __rtruediv__(self, other: Any) -> Estimate:
        return self._apply("divide", other, self)

    def __neg__(self) -> Estimate:
        return self._apply("negative", self)

    def __float__(self) -> float:
        return self.value

    def __repr__(self) -> str:
        lower, upper, level, _ = self.interval()
        limits = f", {level:.0%} interval {lower:.6g} to {upper:.6g}" if np.isfinite(upper) else ", no normal interval"
        return f"Estimate({self.value:.6g}, se={self.se:.4g}{limits})"


def covariance(*estimates: Estimate) -> Floats:
    """Covariance matrix of estimates, shape (p, p); zero between independent samples.

    Raises
    ------
    DesignError
        If estimates from one sample use different units.
    """
    survey = estimates[0].linear.survey
    for estimate in estimates[1:]:
        survey = common(survey, estimate.linear.survey)
    scores = sparse.csr_array(sparse.vstack([lift(e.linear, survey).scores for e in estimates]))
    return survey.covariance(scores, scores)
