"""The rows of `estimates.csv`: every measure of a contrast with its standard error, interval and n."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from change_assess.engine import intervals
from change_assess.engine.linearise import Linearised
from change_assess.measures import (
    BY_CLASS,
    BY_PAIR,
    IN_HECTARES,
    ON_REQUEST,
    OVERALL,
    Contrast,
    Measure,
    Totals,
    area_ha,
    linearise,
    unmapped_share,
)

ALL_PAIRS_UP_TO = 50
"""With more classes, joint shares are listed for the pairs that occur."""

ROUNDING = 1e-15
"""Shares smaller than this are differences of equal numbers."""

SIMULATED_NUMBERS = 400_000
"""Random numbers that one simulation may draw; the number of simulated samples follows, at least 400."""


CAN_VANISH = ("quantity_disagreement", "shift")
"""Measures that are zero at a kink within reach."""

COMPLEMENTS = {"commission_error": "users_accuracy", "omission_error": "producers_accuracy"}
"""Measures that are one minus another, limits included."""


@dataclass(frozen=True)
class IntervalChoice:
    """How limits are made: `default` takes exact limits where they apply, else normal ones."""

    level: float = 0.95
    method: str = "default"
    seed: int = 0


@dataclass(frozen=True, eq=False)
class Column:
    """Values of one measure with what goes beside them; arrays of one length."""

    value: NDArray[np.float64]
    se: NDArray[np.float64]
    lower: NDArray[np.float64]
    upper: NDArray[np.float64]
    interval: NDArray[np.object_]
    n: NDArray[np.float64]


Block = dict[str, NDArray[Any]]
"""Columns of the rows of one measure."""


class ContrastRows:
    """Make the rows of one contrast.

    Parameters
    ----------
    contrast : Contrast
    known_map_ha : ndarray of float, shape (K,), or None
        Exact mapped area of each class, where it is known.
    choice : IntervalChoice
    """

    def __init__(self, contrast: Contrast, known_map_ha: NDArray[np.float64] | None, choice: IntervalChoice) -> None:
        self.contrast, self.known_map_ha, self.choice = contrast, known_map_ha, choice
        self.part = contrast.survey.only
        self.df = self.part.design.df(self.part.cells)
        self.has_map = bool((contrast.map_class >= 0).any())
        self.near_kink: list[str] = []
        self._simulated: Totals | None = None
        self._columns: dict[str, Column] = {}
        count = self.part.cells.count
        k = len(contrast.classes)
        self.n_all = float(count.sum())
        self.n_map = _class_counts(contrast.map_class, count, k)
        self.n_reference = _class_counts(contrast.reference_class, count, k)

    def frame(self, kappa: bool) -> pd.DataFrame:
        """All rows, without the columns that name the contrast."""
        classes = np.array(self.contrast.classes, dtype=object)
        blank, whole = np.full(len(classes), "", dtype=object), np.array([""], dtype=object)
        blocks = [self._block(name, self._by_class(name), classes, blank) for name in self._class_measures()]
        if self.has_map:
            overall = OVERALL | (ON_REQUEST if kappa else {})
            if (self.contrast.map_class[self.part.cells.count > 0] < 0).any():
                overall = overall | {"unmapped_share": unmapped_share}
            blocks += [self._block(name, self._overall(name, m), whole, whole) for name, m in overall.items()]
            blocks.append(self._joint_block())
        columns = {name: np.concatenate([block[name] for block in blocks]) for name in blocks[0]}
        return pd.DataFrame(columns).assign(df=self.df, level=self.choice.level)

    def _class_measures(self) -> list[str]:
        return list(BY_CLASS) if self.has_map else ["area_ha", "area_share"]

    @staticmethod
    def _block(name: str, c: Column, classes: NDArray[np.object_], against: NDArray[np.object_]) -> Block:
        return {
            "measure": np.full(len(classes), name, dtype=object),
            "class": classes,
            "against": against,
            "estimate": c.value,
            "se": c.se,
            "lower": c.lower,
            "upper": c.upper,
            "interval": c.interval,
            "n": c.n.astype(np.int64),
        }

    # -- one measure -------------------------------------------------------------------------------------

    def _by_class(self, name: str) -> Column:
        if name not in self._columns:
            self._columns[name] = self._made_by_class(name)
        return self._columns[name]

    def _made_by_class(self, name: str) -> Column:
        if self.known_map_ha is not None and name in ("map_area_ha", "map_bias_ha"):
            return self._known_map(name)
        if name in COMPLEMENTS:
            return _complement(self._by_class(COMPLEMENTS[name]))
        n = np.full(len(self.contrast.classes), self.n_all)
        if name == "users_accuracy":
            n = self.n_map
        elif name == "producers_accuracy":
            n = self.n_reference
        elif name == "f1":
            n = self.n_map + self.n_reference - np.diag(self.contrast.sample_counts())
        column = self._column(name, BY_CLASS[name], n)
        return self._exact_by_class(name, column) if self.choice.method == "default" else column

    def _overall(self, name: str, measure: Measure) -> Column:
        column = self._column(name, measure, np.array([self.n_all]))
        if self.choice.method == "default" and name == "overall_accuracy" and self._one_stratum_overall():
            agree = np.trace(self.contrast.sample_counts())
            return self._exact(column, np.array([agree]), np.array([self.n_all]), np.array([0]), np.ones(1))
        return column

    def _known_map(self, name: str) -> Column:
        assert self.known_map_ha is not None
        n = np.full(len(self.known_map_ha), self.n_all)
        if name == "map_area_ha":
            nothing = np.full(len(n), np.nan)
            return Column(self.known_map_ha, np.zeros(len(n)), nothing, nothing, np.full(len(n), "known", object), n)
        area = self._by_class("area_ha")
        value = self.known_map_ha - area.value
        zero = np.isnan(area.lower)
        return Column(
            value,
            area.se,
            np.where(zero, np.nan, self.known_map_ha - area.upper),
            np.where(zero, np.nan, self.known_map_ha - area.lower),
            area.interval,
            n,
        )

    def _column(self, name: str, measure: Measure, n: NDArray[np.float64]) -> Column:
        x = linearise(measure, self.contrast)
        value, se = np.atleast_1d(x.value), np.atleast_1d(x.se)
        value, se = (_without_rounding(x) if name not in IN_HECTARES else x for x in (value, se))
        value = np.where(np.isfinite(value), value, np.nan)
        method = "normal" if self.choice.method == "default" else self.choice.method
        lower, upper = intervals.METHODS[method](value, se, np.asarray(self.df), self.choice.level)
        used = np.where(np.isfinite(lower), method, "").astype(object)
        if self.choice.method == "default":  # a zero variance estimate is no reason for 0 ± 0
            flat = se == 0
            lower, upper, used = np.where(flat, np.nan, lower), np.where(flat, np.nan, upper), np.where(flat, "", used)
        column = Column(value, se, lower, upper, used, n)
        return self._simulate(name, measure, x, column) if x.kink.any() else column

    def _simulate(self, name: str, measure: Measure, x: Linearised, column: Column) -> Column:
        """Limits from simulated samples where a measure is too near a kink to be linearised.

        Percentiles of |x| never reach zero, though x may be zero: there the lower limit of what can vanish is zero.
        """
        self.near_kink.append(name)
        near = np.atleast_1d(x.kink)
        if self.part.design.collapse is not None:  # pooled strata have no sample size of their own to simulate with
            nothing = np.where(near, np.nan, column.lower), np.where(near, np.nan, column.upper)
            return replace(column, lower=nothing[0], upper=nothing[1], interval=np.where(near, "", column.interval))
        with np.errstate(divide="ignore", invalid="ignore"):
            replicates = np.asarray(measure(self._replicates()))
        lower, upper = (np.atleast_1d(_without_rounding(q)) for q in intervals.quantiles(replicates, self.choice.level))
        if name in CAN_VANISH:
            lower = np.zeros_like(lower)
        lower, upper = np.fmin(lower, column.value), np.fmax(upper, column.value)
        used = np.where(near & np.isfinite(upper), "simulated", np.where(near, "", column.interval))
        return replace(
            column, lower=np.where(near, lower, column.lower), upper=np.where(near, upper, column.upper), interval=used
        )

    def _replicates(self) -> Totals:
        if self._simulated is None:
            cells = self.part.cells
            draws = int(np.clip(SIMULATED_NUMBERS // len(cells), 400, intervals.DRAWS))
            rng = np.random.default_rng(self.choice.seed)
            self._simulated = self.contrast.totals_at(intervals.simulated_counts(self.part.design, cells, rng, draws))
        return self._simulated

    def _joint_block(self) -> Block:
        totals = self.contrast.totals
        column = self._column("joint_share", BY_PAIR["joint_share"], np.full(len(totals.row), self.n_all))
        names = np.array(self.contrast.classes, dtype=object)
        row, col, k = totals.row, totals.column, len(names)
        if k > ALL_PAIRS_UP_TO:
            return self._block("joint_share", column, names[row], names[col])
        at = row * k + col
        lonely = any(len(found) for found in self.part.design.lonely(self.part.cells))
        fill = {"value": 0.0, "se": np.nan if lonely else 0.0, "lower": np.nan, "upper": np.nan}
        numbers = {f: _spread(getattr(column, f), at, np.full(k * k, x)) for f, x in fill.items()}
        used = _spread(column.interval, at, np.full(k * k, "", dtype=object))
        full = Column(**numbers, interval=used, n=np.full(k * k, self.n_all))
        if self.choice.method == "default":
            full = self._zero_count(full, np.isin(np.arange(k * k), at, invert=True), 1.0)
        return self._block("joint_share", full, np.repeat(names, k), np.tile(names, k))

    # -- one-stratum and zero-count limits ----------------------------------------------------------------

    def _plain(self) -> bool:
        """Element sampling with yes/no labels, equal areas within strata and no calibration."""
        design, cells = self.part.design, self.part.cells
        if design.M is not None or design.adjust is not None or self.contrast.expansion:
            return False
        low, high = np.full(len(design.N), np.inf), np.full(len(design.N), -np.inf)
        np.minimum.at(low, cells.stratum, cells.size_ha)
        np.maximum.at(high, cells.stratum, cells.size_ha)
        return bool(np.all(high <= low * (1 + 1e-12)) | np.all(high == -np.inf))

    def _one_stratum_overall(self) -> bool:
        return self._plain() and np.count_nonzero(self.part.design.stratum_count(self.part.cells)) == 1

    def _exact_by_class(self, name: str, column: Column) -> Column:
        if not self._plain():
            return column
        counts = self.contrast.sample_counts()
        if name == "users_accuracy":
            right = np.diag(counts)
            return self._exact(column, right, self.n_map, self._stratum_of_map_class(), np.ones(len(right)))
        if name not in ("area_ha", "area_share"):
            return column
        scale = self.contrast.known_area_ha if name in IN_HECTARES else 1.0
        if self._one_stratum_overall():
            only = int(np.flatnonzero(self.part.design.stratum_count(self.part.cells))[0])
            k = len(self.n_reference)
            return self._exact(column, self.n_reference, np.full(k, self.n_all), np.full(k, only), np.full(k, scale))
        return self._zero_count(column, self.n_reference == 0, scale)

    def _stratum_of_map_class(self) -> NDArray[np.intp]:
        """Stratum that is one map class, by the sample and, if known, by mapped area; -1 where none is."""
        cells = self.part.cells
        k, strata = len(self.contrast.classes), len(self.part.design.N)
        table = np.zeros((k + 1, strata))
        np.add.at(table, (self.contrast.map_class, cells.stratum), cells.count)  # -1 is the last row
        alone = (table > 0).sum(axis=1)[:k] == 1
        stratum = table[:k].argmax(axis=1)
        whole = table[np.arange(k), stratum] == table.sum(axis=0)[stratum]
        if self.known_map_ha is not None:
            whole &= np.isclose(self.known_map_ha, self.part.design.A[stratum], rtol=1e-6)
        return np.where(alone & whole, stratum, -1)

    def _exact(
        self,
        column: Column,
        x: NDArray[np.float64],
        n: NDArray[np.float64],
        stratum: NDArray[np.intp],
        scale: NDArray[np.float64],
    ) -> Column:
        at = np.flatnonzero((stratum >= 0) & (n > 0))
        if not len(at):
            return column
        design = self.part.design
        size = design.N[stratum[at]] if design.fpc else None
        low, high = intervals.exact(x[at], n[at], size, self.choice.level)
        lower, upper, used = column.lower.copy(), column.upper.copy(), column.interval.astype(object)
        lower[at], upper[at], used[at] = low * scale[at], high * scale[at], "exact"
        return Column(column.value, column.se, lower, upper, used, column.n)

    def _zero_count(self, column: Column, unseen: NDArray[np.bool_], scale: float) -> Column:
        """One-sided bound of a class that was seen nowhere: the most that could be there unseen."""
        if not unseen.any() or not self._plain():
            return column
        design, cells = self.part.design, self.part.cells
        n = design.stratum_count(cells)
        open_to_doubt = (n > 0) & ~(design.fpc & (n >= design.N))  # a stratum wholly sampled hides nothing
        bound = 0.0
        if open_to_doubt.any():
            area = design.A[open_to_doubt]
            bound = intervals.zero_count_bound(area, n[open_to_doubt], self.choice.level) / design.A.sum() * scale
        return Column(
            np.where(unseen, 0.0, column.value),
            column.se,
            np.where(unseen, 0.0, column.lower),
            np.where(unseen, bound, column.upper),
            np.where(unseen, "zero-count", column.interval),
            column.n,
        )


def _spread(values: NDArray[Any], at: NDArray[np.intp], onto: NDArray[Any]) -> NDArray[Any]:
    onto[at] = values
    return onto


def _complement(c: Column) -> Column:
    return Column(1 - c.value, c.se, 1 - c.upper, 1 - c.lower, c.interval, c.n)


def _without_rounding(share: NDArray[np.float64]) -> NDArray[np.float64]:
    """Set to zero what is only the rounding of a difference of equal shares."""
    return np.where(np.abs(share) < ROUNDING, 0.0, share)


def _class_counts(classes: NDArray[np.intp], count: NDArray[np.float64], k: int) -> NDArray[np.float64]:
    seen = classes >= 0
    return np.bincount(classes[seen], count[seen], minlength=k).astype(float)


def worst_case(contrast: Contrast, level: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Area of each class if none, and if all, of the units without a reference label were of it; with sampling error.

    Returns
    -------
    lower, upper : ndarray, shape (K,)
        In hectares; normal limits of the two extreme estimates.
    """

    def most(t: Totals) -> Linearised:
        hidden = t.everything - t.reference.sum(axis=-1)
        result: Linearised = (t.reference + hidden[..., None]) / t.all * t.known_area_ha
        return result

    low, high = linearise(area_ha, contrast), linearise(most, contrast)
    df = np.asarray(contrast.survey.only.design.df(contrast.survey.only.cells))
    lower, _ = intervals.normal(low.value, low.se, df, level)
    _, upper = intervals.normal(high.value, high.se, df, level)
    return np.clip(lower, 0, None), np.clip(upper, None, contrast.known_area_ha)
