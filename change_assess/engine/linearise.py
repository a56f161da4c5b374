"""The value type whose arithmetic is the delta method.

A `Linearised` holds values and, for each, its weighted scores: how much one unit of each cell moves it. Adding,
multiplying, dividing, log and exp act on both, so a measure written for plain arrays gives its own standard error
(Taylor linearisation: Woodruff 1971, *JASA* 66, 411-414; Särndal, Swensson & Wretman 1992, section 5.5).
"""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from change_assess.engine.cells import Cells, Floats, Ints
from change_assess.engine.design import Design, indicator_of, scale_rows
from change_assess.errors import DesignError

KINK_WIDTH = 2.0
"""|x| and min(x, y) are linearised only where x, or x - y, is further from zero than this many standard errors."""


@dataclass(frozen=True, eq=False)
class Part:
    """One sample with its design; `parents` lead from its cells to those of the surveys it was made from."""

    design: Design
    cells: Cells
    parents: tuple[tuple[Part, Ints], ...] = ()

    def column_of(self, ancestor: Part) -> Ints:
        """Cell of `ancestor` that each cell here belongs to."""
        if ancestor is self:
            return np.arange(len(self.cells))
        for parent, columns in self.parents:
            if ancestor is parent or parent.parents:
                with suppress(KeyError):
                    return parent.column_of(ancestor)[columns]
        raise KeyError("not made from this survey")

    def counts_of(self, ancestor: Part, count: Floats) -> Floats:
        """Counts, shape (..., c), of this part added up to the cells of `ancestor`."""
        columns = self.column_of(ancestor)
        adder = indicator_of(columns, np.ones(len(columns)), len(ancestor.cells))
        return np.asarray(count.reshape(-1, len(columns)) @ adder).reshape(*count.shape[:-1], len(ancestor.cells))


@dataclass(frozen=True, eq=False)
class Survey:
    """What scores refer to: one sample with its design, or several independent ones side by side."""

    parts: tuple[Part, ...]

    @classmethod
    def of(cls, design: Design, cells: Cells) -> Survey:
        """Survey of a single sample."""
        return cls((Part(design, cells),))

    @property
    def only(self) -> Part:
        """The single sample."""
        if len(self.parts) != 1:
            raise DesignError("This needs estimates from one sample; these combine independent samples.")
        return self.parts[0]

    def split(self, scores: sparse.csr_array) -> list[sparse.csr_array]:
        """Columns of each part."""
        if len(self.parts) == 1:
            return [scores]
        ends = np.cumsum([len(p.cells) for p in self.parts])
        return [scores[:, end - len(p.cells) : end] for p, end in zip(self.parts, ends, strict=True)]

    def components(self, u: sparse.csr_array) -> Floats:
        """Contribution of each stratum of each part to the variances, shape (p, strata of all parts)."""
        return np.concatenate(
            [p.design.components(x, p.cells) for p, x in zip(self.parts, self.split(u), strict=True)], axis=1
        )

    def covariance(self, u: sparse.csr_array, v: sparse.csr_array) -> Floats:
        """Covariance matrix, shape (p, q)."""
        pairs = zip(self.parts, self.split(u), self.split(v), strict=True)
        return np.asarray(sum(p.design.covariance(x, y, p.cells) for p, x, y in pairs))

    def df(self, u: sparse.csr_array) -> Floats:
        """Degrees of freedom of each row, shape (p,); of several samples, by Satterthwaite (1946)."""
        each = np.array([p.design.df(p.cells) for p in self.parts])
        if len(each) == 1:
            return np.full(u.shape[0], each[0])
        parts = zip(self.parts, self.split(u), strict=True)
        variance = np.stack([p.design.components(x, p.cells).sum(axis=1) for p, x in parts], axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(variance.sum(axis=1) ** 2 / (variance**2 / each).sum(axis=1))


def common(first: Survey, second: Survey) -> Survey:
    """Survey to which scores of both can be lifted: parts of one sample are joined, independent ones set apart.

    Raises
    ------
    DesignError
        If two parts of one sample use different units, so that their covariance is not defined.
    """
    if first is second:
        return first
    parts = list(first.parts)
    for part in second.parts:
        same = [i for i, p in enumerate(parts) if p.cells.sample_id == part.cells.sample_id]
        if same:
            parts[same[0]] = _join(parts[same[0]], part)
        else:
            parts.append(part)
    return Survey(tuple(parts))


def _join(a: Part, b: Part) -> Part:
    if a is b:
        return a
    left, right = a.cells.cell_by_unit_id, b.cells.cell_by_unit_id
    if left is None or right is None or not np.array_equal(left >= 0, right >= 0):
        raise DesignError(
            "Two estimates from one sample use different units, because labels are missing in one of them. "
            "Estimate both in one call, so that they share their units."
        )
    use = left >= 0
    distinct, at = np.unique(left[use] * len(b.cells) + right[use], return_inverse=True)
    from_a, from_b = distinct // len(b.cells), distinct % len(b.cells)
    if not a.design.same_sampling(a.cells, from_a, b.design, b.cells, from_b):
        raise DesignError(
            "Two estimates from one sample state different designs (finite population correction, collapsed strata or "
            "excluded strata), so their covariance is not defined. Estimate both in the same way."
        )
    cell_of_unit = np.full(len(left), -1, dtype=np.intp)
    cell_of_unit[use] = at
    cells = Cells(
        stratum=a.cells.stratum[from_a],
        labels=np.zeros((len(distinct), 0), dtype=np.intp),
        size_ha=a.cells.size_ha[from_a],
        count=np.bincount(at).astype(float),
        psu=None if a.cells.psu is None else a.cells.psu[from_a],
        cell_of_unit=cell_of_unit,
        sample_id=a.cells.sample_id,
    )
    return Part(replace(a.design, adjust=None), cells, ((a, from_a), (b, from_b)))


def lift(x: Linearised, survey: Survey) -> Linearised:
    """Write the scores of `x` for the cells of `survey`, which was made from the survey of `x` by `common`."""
    if x.survey is survey:
        return x
    pieces = dict(zip((id(p) for p in x.survey.parts), x.survey.split(x.scores), strict=True))
    columns = []
    for part in survey.parts:
        piece = sparse.csr_array((x.value.size, len(part.cells)))
        for old in x.survey.parts:
            with suppress(KeyError):
                piece = pieces[id(old)][:, part.column_of(old)]
        columns.append(piece)
    return Linearised(x.value, sparse.csr_array(sparse.hstack(columns)), survey, x.kink)


class Linearised:
    """Values with their linearised scores.

    Parameters
    ----------
    value : ndarray, any shape
    scores : csr_array, shape (value.size, c)
        Row i belongs to ``value.ravel()[i]``.
    survey : Survey
    kink : ndarray of bool, same shape as value, optional
        Where a value hangs on a |.| or min too close to its kink to be linearised.
    """

    __slots__ = ("kink", "scores", "survey", "value")

    def __init__(
        self, value: Floats, scores: sparse.csr_array, survey: Survey, kink: NDArray[np.bool_] | None = None
    ) -> None:
        self.value = np.asarray(value, dtype=float)
        self.scores = scores
        self.survey = survey
        self.kink = np.zeros(self.value.shape, bool) if kink is None else kink

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the values."""
        return self.value.shape

    @property
    def ndim(self) -> int:
        """Number of axes of the values."""
        return self.value.ndim

    def variance(self) -> Floats:
        """Variance of each value; NaN where it is not estimable or hangs on a kink."""
        parts = self.survey.components(self.scores)
        known = np.isfinite(self.value) & ~self.kink
        return np.where(known, parts.sum(axis=1).reshape(self.shape), np.nan)

    @property
    def se(self) -> Floats:
        """Standard error of each value."""
        return np.sqrt(self.variance())

    # -- shape -------------------------------------------------------------------------------------------

    def __getitem__(self, key: Any) -> Linearised:
        return self._take(np.arange(self.value.size).reshape(self.shape)[key])

    def swapaxes(self, first: int, second: int) -> Linearised:
        """Like `numpy.swapaxes`."""
        return self._take(np.arange(self.value.size).reshape(self.shape).swapaxes(first, second))

    def sum(self, axis: int = -1) -> Linearised:
        """Like `numpy.sum` over one axis."""
        at = np.arange(self.value.size).reshape(self.shape)
        kept = np.moveaxis(at, axis, -1).reshape(-1, self.shape[axis])
        result = self.value.sum(axis=axis)
        columns, rows = kept.ravel(), np.repeat(np.arange(len(kept)), kept.shape[1])
        adder = sparse.csr_array((np.ones(len(columns)), (rows, columns)), shape=(len(kept), self.value.size))
        return Linearised(
            result, sparse.csr_array(adder @ self.scores), self.survey, np.asarray(self.kink.any(axis=axis))
        )

    def __matmul__(self, groups: sparse.csr_array | Floats) -> Linearised:
        """Linear combinations of the values along the last (only) axis: ``x @ groups``, groups of shape (p, q)."""
        matrix = sparse.csr_array(groups)
        kink = np.asarray((self.kink.astype(float) @ abs(matrix)) > 0)
        return Linearised(self.value @ matrix, sparse.csr_array(matrix.T @ self.scores), self.survey, kink)

    def _take(self, at: NDArray[np.intp]) -> Linearised:
        flat = np.ravel(at)
        scores = (
            self.scores if flat.size == self.value.size and (flat == np.arange(flat.size)).all() else self.scores[flat]
        )
        return Linearised(
            self.value.ravel()[flat].reshape(np.shape(at)),
            scores,
            self.survey,
            self.kink.ravel()[flat].reshape(np.shape(at)),
        )

    def _spread(self, shape: tuple[int, ...]) -> Linearised:
        if shape == self.shape:
            return self
        return self._take(np.broadcast_to(np.arange(self.value.size).reshape(self.shape), shape))

    # -- arithmetic --------------------------------------------------------------------------------------

    def __array_ufunc__(self, ufunc: np.ufunc, method: str, *inputs: Any, **kwargs: Any) -> Any:
        """Give value and derivative of the functions in `RULES`; any other function is refused."""
        rule = RULES.get(ufunc)
        if rule is None or method != "__call__" or kwargs.get("out") is not None:
            return NotImplemented
        return rule(*inputs)

    def __add__(self, other: Any) -> Linearised:
        return _linear(np.add, self, other, 1.0, 1.0)

    def __sub__(self, other: Any) -> Linearised:
        return _linear(np.subtract, self, other, 1.0, -1.0)

    def __rsub__(self, other: Any) -> Linearised:
        return _linear(np.subtract, other, self, 1.0, -1.0)

    def __mul__(self, other: Any) -> Linearised:
        return _linear(np.multiply, self, other, _value(other), _value(self))

    def __truediv__(self, other: Any) -> Linearised:
        return _divide(self, other)

    def __rtruediv__(self, other: Any) -> Linearised:
        return _divide(other, self)

    def __neg__(self) -> Linearised:
        return _linear(np.multiply, self, -1.0, -1.0, 0.0)

    def __abs__(self) -> Linearised:
        return _absolute(self)

    def __pow__(self, power: float) -> Linearised:
        return _power(self, power)

    __radd__ = __add__
    __rmul__ = __mul__


def _value(x: Any) -> Any:
    return x.value if isinstance(x, Linearised) else x


def _linear(function: np.ufunc, x: Any, y: Any, dx: Any, dy: Any) -> Linearised:
    """Give `function(x, y)` with derivatives `dx` and `dy`; at least one argument is `Linearised`."""
    with np.errstate(divide="ignore", invalid="ignore"):
        value = np.asarray(function(_value(x), _value(y)), dtype=float)
    terms = [(arg, d) for arg, d in ((x, dx), (y, dy)) if isinstance(arg, Linearised)]
    survey = terms[0][0].survey if len(terms) == 1 else common(terms[0][0].survey, terms[1][0].survey)
    terms = [(lift(arg, survey), d) for arg, d in terms]
    kink = np.zeros(value.shape, bool)
    scores: sparse.csr_array | None = None
    for arg, derivative in terms:
        spread = arg._spread(value.shape)
        kink = kink | spread.kink
        factor = np.broadcast_to(np.asarray(derivative, float), value.shape).ravel()
        part = scale_rows(spread.scores, np.where(np.isfinite(factor), factor, 0.0))
        scores = part if scores is None else sparse.csr_array(scores + part)
    assert scores is not None
    return Linearised(value, scores, survey, kink)


def _divide(x: Any, y: Any) -> Linearised:
    """Give x / y; 0/0 and x/0 are not estimable, hence NaN."""
    top, bottom = np.asarray(_value(x), float), np.asarray(_value(y), float)
    with np.errstate(divide="ignore", invalid="ignore"):
        inverse = np.where(bottom == 0, np.nan, 1 / bottom)
        return _linear(lambda a, b: a * inverse, x, y, inverse, -top * inverse**2)  # type: ignore[arg-type]


def _log(x: Linearised) -> Linearised:
    with np.errstate(divide="ignore", invalid="ignore"):
        value = np.where(x.value > 0, np.log(x.value), np.nan)
        return _with(x, value, 1 / x.value)


def _exp(x: Linearised) -> Linearised:
    value = np.exp(x.value)
    return _with(x, value, value)


def _power(x: Linearised, power: float) -> Linearised:
    with np.errstate(divide="ignore", invalid="ignore"):
        return _with(x, x.value**power, power * x.value ** (power - 1))


def _with(x: Linearised, value: Floats, derivative: Floats) -> Linearised:
    factor = np.where(np.isfinite(derivative), derivative, 0.0).ravel()
    return Linearised(value, scale_rows(x.scores, factor), x.survey, x.kink)


def _absolute(x: Linearised) -> Linearised:
    """|x|, marked where x lies within `KINK_WIDTH` standard errors of zero."""
    result = _with(x, np.abs(x.value), np.sign(x.value))
    error = np.sqrt(np.nan_to_num(x.survey.components(x.scores).sum(axis=1))).reshape(x.shape)
    near = (np.abs(x.value) <= KINK_WIDTH * error) & (error > 0)
    return Linearised(result.value, result.scores, x.survey, x.kink | near)


def _minimum(x: Any, y: Any) -> Linearised:
    """min(x, y) = (x + y - |x - y|) / 2."""
    result: Linearised = (x + y - _absolute(x - y)) / 2.0
    return result


RULES: dict[np.ufunc, Callable[..., Linearised]] = {
    np.add: lambda x, y: _linear(np.add, x, y, 1.0, 1.0),
    np.subtract: lambda x, y: _linear(np.subtract, x, y, 1.0, -1.0),
    np.multiply: lambda x, y: _linear(np.multiply, x, y, _value(y), _value(x)),
    np.divide: _divide,
    np.negative: lambda x: -x,
    np.log: _log,
    np.exp: _exp,
    np.power: _power,
    np.sqrt: lambda x: _power(x, 0.5),
    np.absolute: _absolute,
    np.minimum: _minimum,
}
"""What a measure may do with totals besides sums and indexing."""


def linearised_totals(y: sparse.csr_array, survey: Survey) -> Linearised:
    """Totals of `y`, shape (p, c), with their scores; shape (p,)."""
    design, cells = survey.only.design, survey.only.cells
    return Linearised(design.totals(y, cells), design.scores(y, cells), survey)
