"""What is reported: each measure is one plain function of design-weighted totals.

The functions run unchanged on `Linearised` totals (giving standard errors) and on plain arrays with leading
replicate axes (giving simulations). Rows are the map, columns the reference. A new measure is one more function;
`BY_CLASS`, `OVERALL` and `BY_PAIR` only say which ones `estimate` prints.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from change_assess.engine.cells import Floats, Ints, indicator
from change_assess.engine.linearise import Linearised, Survey, linearised_totals

Values = Any
"""A `Linearised`, or an ndarray with leading replicate axes; the last axis is classes or pairs of classes."""


@dataclass(frozen=True, eq=False)
class Totals:
    """Estimated areas, in hectares, of what map and reference say together.

    Attributes
    ----------
    joint : shape (..., P)
        Area of each observed pair (map class, reference class), in the order of `row` and `column`.
    mapped, reference, both : shape (..., K)
        Area of each class by the map, by the reference, and where both agree.
    everything : shape (...)
        Area of all of it.
    known_area_ha : float
        Area of the target population.
    expansion : bool
        Areas are expansion totals, not shares of the known area.
    row, column : ndarray of int, shape (P,)
        Map and reference class of each observed pair.
    """

    joint: Values
    mapped: Values
    reference: Values
    both: Values
    everything: Values
    known_area_ha: float
    expansion: bool
    row: Ints
    column: Ints

    @property
    def whole(self) -> Values:
        """Area that shares are shares of: the estimated total, or the known area under expansion; shape (...)."""
        return self.known_area_ha if self.expansion else self.everything

    @property
    def all(self) -> Values:
        """`whole` with a class axis of length one."""
        return self.known_area_ha if self.expansion else self.everything[..., None]

    @property
    def classes(self) -> int:
        """Number of classes K."""
        return int(self.mapped.shape[-1])

    @cached_property
    def twin(self) -> Ints:
        """Position of the pair with map and reference exchanged; -1 if it was not observed. Shape (P,)."""
        code, other = self.row * self.classes + self.column, self.column * self.classes + self.row
        order = np.argsort(code)
        at = np.clip(np.searchsorted(code[order], other), 0, max(len(code) - 1, 0))
        return np.where(code[order][at] == other, order[at], -1) if len(code) else np.zeros(0, np.intp)

    @cached_property
    def allocation(self) -> Values:
        """Twice the smaller of commission and omission of each class, as a share; shape (..., K)."""
        return 2 * np.minimum(self.mapped - self.both, self.reference - self.both) / self.all

    @cached_property
    def exchange(self) -> Values:
        """Twice the smaller of each pair of opposite confusions, added up by class, as a share; shape (..., K)."""
        at = np.flatnonzero(self.twin > np.arange(len(self.twin)))  # each pair once, counted for both its classes
        smaller = 2 * np.minimum(self.joint[..., at], self.joint[..., self.twin[at]])
        ones, pairs = np.ones(2 * len(at)), np.tile(np.arange(len(at)), 2)
        classes = np.concatenate([self.row[at], self.column[at]])
        return smaller @ sparse.csr_array((ones, (pairs, classes)), shape=(len(at), self.classes)) / self.all


# -- area -------------------------------------------------------------------------------------------------


def area_share(t: Totals) -> Values:
    """Share of the area that the reference puts in each class, corrected for map error; shape (..., K).

    Ratio of totals (combined ratio estimator: Cochran 1977, section 6.11; Olofsson et al. 2014, RSE 148, eq. 9).
    """
    return t.reference / t.all


def area_ha(t: Totals) -> Values:
    """Area of each class, in hectares: share times known area (Olofsson et al. 2014); shape (..., K)."""
    return area_share(t) * t.known_area_ha


def map_share(t: Totals) -> Values:
    """Share of the area that the map puts in each class, as the sample sees it; shape (..., K)."""
    return t.mapped / t.all


def map_area_ha(t: Totals) -> Values:
    """Mapped area of each class as the sample sees it, in hectares; shape (..., K)."""
    return map_share(t) * t.known_area_ha


def map_bias_ha(t: Totals) -> Values:
    """Mapped minus estimated area, in hectares; shape (..., K)."""
    return map_area_ha(t) - area_ha(t)


def joint_share(t: Totals) -> Values:
    """Share of the area in each observed pair (map class, reference class); shape (..., P)."""
    return t.joint / t.all


# -- accuracy ---------------------------------------------------------------------------------------------


def overall_accuracy(t: Totals) -> Values:
    """Share of the area where map and reference agree (Olofsson et al. 2014, eq. 1); shape (...)."""
    return t.both.sum(axis=-1) / t.whole


def users_accuracy(t: Totals) -> Values:
    """Of the area mapped as a class, the share that is that class (Story & Congalton 1986); shape (..., K)."""
    return t.both / t.mapped


def producers_accuracy(t: Totals) -> Values:
    """Of the area that is a class, the share mapped as that class (Story & Congalton 1986); shape (..., K)."""
    return t.both / t.reference


def commission_error(t: Totals) -> Values:
    """One minus user's accuracy; shape (..., K)."""
    return 1 - users_accuracy(t)


def omission_error(t: Totals) -> Values:
    """One minus producer's accuracy; shape (..., K)."""
    return 1 - producers_accuracy(t)


def f1(t: Totals) -> Values:
    """Harmonic mean of user's and producer's accuracy (van Rijsbergen 1979; Dice 1945); shape (..., K)."""
    return 2 * t.both / (t.mapped + t.reference)


# -- disagreement, per class; the overall figures are half the sums over classes ---------------------------


def quantity_by_class(t: Totals) -> Values:
    """|mapped - reference| share of each class (Pontius & Millones 2011, IJRS 32, eq. 2); shape (..., K)."""
    return np.abs(t.mapped - t.reference) / t.all


def allocation_by_class(t: Totals) -> Values:
    """Twice the smaller of commission and omission share (Pontius & Millones 2011, eq. 4); shape (..., K)."""
    return t.allocation


def exchange_by_class(t: Totals) -> Values:
    """Twice the smaller of each pair of opposite confusions (Pontius & Santacruz 2014, IJRS 35, 7543)."""
    return t.exchange


def shift_by_class(t: Totals) -> Values:
    """Allocation disagreement that is not exchange (Pontius & Santacruz 2014); shape (..., K)."""
    return allocation_by_class(t) - exchange_by_class(t)


def quantity_disagreement(t: Totals) -> Values:
    """Disagreement due to different amounts of the classes (Pontius & Millones 2011, eq. 3); shape (...)."""
    # what the map leaves empty is one more class, nowhere right
    return (quantity_by_class(t).sum(axis=-1) + unmapped_share(t)) / 2


def allocation_disagreement(t: Totals) -> Values:
    """Disagreement due to different places of the classes (Pontius & Millones 2011, eq. 5); shape (...)."""
    return allocation_by_class(t).sum(axis=-1) / 2


def exchange(t: Totals) -> Values:
    """Allocation disagreement between pairs of classes (Pontius & Santacruz 2014); shape (...)."""
    return exchange_by_class(t).sum(axis=-1) / 2


def shift(t: Totals) -> Values:
    """Allocation disagreement that takes three classes or more (Pontius & Santacruz 2014); shape (...)."""
    return shift_by_class(t).sum(axis=-1) / 2


def unmapped_share(t: Totals) -> Values:
    """Share of the area that the map leaves empty; printed where there is any; shape (...)."""
    return (t.everything - t.mapped.sum(axis=-1)) / t.whole


def kappa(t: Totals) -> Values:
    """Cohen's kappa from area shares (Cohen 1960), on request only; shape (...).

    Its use as an index of map accuracy is discouraged: Pontius & Millones 2011; Foody 2020, RSE 239, 111630.
    """
    agreement = overall_accuracy(t)
    chance = (t.mapped * t.reference).sum(axis=-1) / (t.whole * t.whole)
    return (agreement - chance) / (1 - chance)


Measure = Callable[[Totals], Values]

BY_CLASS: dict[str, Measure] = {
    "area_ha": area_ha,
    "area_share": area_share,
    "map_area_ha": map_area_ha,
    "map_bias_ha": map_bias_ha,
    "users_accuracy": users_accuracy,
    "producers_accuracy": producers_accuracy,
    "commission_error": commission_error,
    "omission_error": omission_error,
    "f1": f1,
    "quantity_disagreement": quantity_by_class,
    "allocation_disagreement": allocation_by_class,
    "exchange": exchange_by_class,
    "shift": shift_by_class,
}
OVERALL: dict[str, Measure] = {
    "overall_accuracy": overall_accuracy,
    "quantity_disagreement": quantity_disagreement,
    "allocation_disagreement": allocation_disagreement,
    "exchange": exchange,
    "shift": shift,
}
ON_REQUEST: dict[str, Measure] = {"kappa": kappa}
BY_PAIR: dict[str, Measure] = {"joint_share": joint_share}

AREAS = ("area_ha", "area_share")
IN_HECTARES = frozenset({"area_ha", "map_area_ha", "map_bias_ha"})


# -- totals of one map against one reference ---------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Contrast:
    """One map against one reference at one depth, on one sample.

    Parameters
    ----------
    survey : Survey
    map_class, reference_class : ndarray of int, shape (c,)
        Class of each cell, 0 to K-1, or -1 (then the cell counts in the total area only).
    classes : tuple of str, length K
    known_area_ha : float
    expansion : bool
    """

    survey: Survey
    map_class: Ints
    reference_class: Ints
    classes: tuple[str, ...]
    known_area_ha: float
    expansion: bool = False

    @cached_property
    def _pair(self) -> tuple[Ints, Ints]:
        """Code of each observed pair, sorted, and the position of each cell's pair among them (-1: none)."""
        seen = (self.map_class >= 0) & (self.reference_class >= 0)
        code = np.where(seen, self.map_class * len(self.classes) + self.reference_class, -1)
        distinct, at = np.unique(code, return_inverse=True)
        if len(distinct) and distinct[0] == -1:
            return distinct[1:], at - 1
        return distinct, at

    def _rows(self, position: Ints, rows: int) -> sparse.csr_array:
        size = self.survey.only.cells.size_ha
        marks = indicator(position, rows)
        return sparse.csr_array((marks.data * size[marks.indices], marks.indices, marks.indptr), shape=marks.shape)

    @cached_property
    def _variables(self) -> tuple[sparse.csr_array, dict[str, slice]]:
        """Area of one unit of each cell in every total that is wanted, stacked, and where each kind stands."""
        k = len(self.classes)
        agree = np.where(self.map_class == self.reference_class, self.map_class, -1)
        codes, position = self._pair
        kinds = {
            "joint": self._rows(position, len(codes)),
            "mapped": self._rows(self.map_class, k),
            "reference": self._rows(self.reference_class, k),
            "both": self._rows(agree, k),
            "everything": self._rows(np.zeros(len(agree), np.intp), 1),
        }
        ends = np.cumsum([rows.shape[0] for rows in kinds.values()]).tolist()
        places = {name: slice(end - rows.shape[0], end) for (name, rows), end in zip(kinds.items(), ends, strict=True)}
        return sparse.csr_array(sparse.vstack(list(kinds.values()), format="csr")), places

    def _assemble(self, values: Values) -> Totals:
        kinds = {name: values[..., place] for name, place in self._variables[1].items()}
        kinds["everything"] = kinds["everything"][..., 0]
        codes, k = self._pair[0], max(len(self.classes), 1)
        return Totals(
            **kinds, known_area_ha=self.known_area_ha, expansion=self.expansion, row=codes // k, column=codes % k
        )

    @cached_property
    def totals(self) -> Totals:
        """Totals with their scores."""
        return self._assemble(linearised_totals(self._variables[0], self.survey))

    def totals_at(self, count: Floats) -> Totals:
        """Totals for other counts, shape (..., c): plain arrays with the same leading axes."""
        part = self.survey.only
        return self._assemble(part.design.totals(self._variables[0], part.cells.with_count(count)))

    def sample_counts(self) -> NDArray[np.float64]:
        """Sample units by map class (rows) and reference class (columns), shape (K, K)."""
        k = len(self.classes)
        seen = (self.map_class >= 0) & (self.reference_class >= 0)
        code = self.map_class[seen] * k + self.reference_class[seen]
        return np.bincount(code, self.survey.only.cells.count[seen], minlength=k * k).reshape(k, k).astype(float)


def linearise(measure: Measure, contrast: Contrast) -> Linearised:
    """Evaluate `measure` with its scores, whatever it returns made `Linearised`."""
    result = measure(contrast.totals)
    return result if isinstance(result, Linearised) else _constant(result, contrast)


def _constant(value: Values, contrast: Contrast) -> Linearised:
    shape = np.shape(value)
    empty = sparse.csr_array((int(np.prod(shape)), len(contrast.survey.only.cells)))
    return Linearised(np.asarray(value, float), empty, contrast.survey)
