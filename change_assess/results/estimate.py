"""Accuracy and area from a sample: the four depths, every measure, and a result that can be asked for more."""

from __future__ import annotations

import json
import platform
import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from change_assess import files
from change_assess.engine.estimate import Estimate, Known
from change_assess.engine.intervals import METHODS, check_level
from change_assess.engine.linearise import Linearised, Part, Survey
from change_assess.errors import DesignError, InputError, nearest
from change_assess.legend import CHANGE, NO_CHANGE, ChangeClass, ChangeClasses, Legend, pair_name
from change_assess.measures import BY_CLASS, ON_REQUEST, OVERALL, Contrast, Measure, Totals, joint_share, linearise
from change_assess.results.population import EXCLUDE, Population, labelled_units, population_of, survey_of
from change_assess.results.rows import ContrastRows, IntervalChoice, worst_case
from change_assess.tables import (
    ESTIMATE_COLUMNS,
    LegendSource,
    Notice,
    Sample,
    Table,
    TextTable,
    label_codes,
    legend_of_labels,
    read_legend,
    read_sample,
)

LABEL, COVER, FROM_TO, CHANGE_CLASS, CHANGE_DEPTH = "label", "cover", "from-to", "change-class", "change"
DEPTHS = (LABEL, COVER, FROM_TO, CHANGE_CLASS, CHANGE_DEPTH)
INTERVALS = ("default", *METHODS)
Columns = str | Sequence[str]


class Key(NamedTuple):
    """What names a contrast: map, reference, depth and period."""

    map: str
    reference: str
    depth: str
    period: str


def estimate(
    sample: Sample | Table,
    *,
    map: Columns | Mapping[str, Columns] | None = None,
    reference: Columns,
    strata: Table | None = None,
    dates: Sequence[str | int] | None = None,
    legend: LegendSource | None = None,
    change_classes: ChangeClasses | Iterable[str | ChangeClass] = (),
    fpc: bool = True,
    level: float = 0.95,
    interval: str = "default",
    estimator: str = "combined",
    post_stratify: str | None = None,
    unsampled: str | Sequence[str] | None = None,
    collapse: Sequence[str] = (),
    kappa: bool = False,
    seed: int = 0,
) -> Result:
    """Estimate areas and, where there is a map, its accuracy.

    Parameters
    ----------
    sample : Sample, path or DataFrame
        A path or DataFrame is read with `read_sample`, with `strata`.
    map : str, sequence of str, or mapping of name to either, optional
        Map label column, one a date; several maps by name.
    reference : str or sequence of str
        Reference label column, one a date.
    dates : sequence, optional
        Names of the dates; taken from the column names where these end in different years.
    legend : optional
        Legend, path, DataFrame or class names; by default the labels that occur.
    change_classes : iterable of str or ChangeClass
        Recipes such as ``"forest loss=forest>*"``, first match wins.
    fpc : bool
        Finite population correction.
    level : float
    interval : {"default", "normal", "t"}
        `default` takes exact limits where one stratum's proportion is asked and normal ones elsewhere.
    estimator : {"combined", "separate", "expansion"}
    post_stratify : {"cells", "margins"}, optional
        Make the weights reproduce the totals of the crossing table.
    unsampled : "exclude" or "STRATUM=INTO", optional
        What to do with strata that have no labelled unit.
    collapse : sequence of "STRATUM=INTO"
        Pool strata for variance estimation, where one has a single unit.
    kappa : bool
        Also give kappa.
    seed : int
        For simulated limits.

    Returns
    -------
    Result

    Raises
    ------
    InputError, DesignError
        With one message that says what is wrong, where, and how to mend it.
    """
    check_level(level)
    if interval not in INTERVALS:
        raise InputError(
            f"there is no interval method '{interval}'",
            value=interval,
            mend=f"Use one of: {', '.join(INTERVALS)}.{nearest(interval, INTERVALS)}",
        )
    data = sample if isinstance(sample, Sample) else read_sample(sample, strata)
    labels = _Labels.read(data, _map_columns(map), _columns(reference), dates, legend)
    if data.rows == "post-strata" and post_stratify is None:
        post_stratify = "cells"
    recipes = ChangeClasses.of(change_classes)
    use = labelled_units(data, labels.reference)
    population = population_of(data, use, fpc=fpc, unsampled=unsampled)
    post = labels.post_columns(data) if post_stratify else None
    survey = survey_of(
        data,
        population,
        labels.all_codes,
        use,
        calibration=post,
        estimator=estimator,
        post_stratify=post_stratify,
        legend=labels.legend,
        collapse=collapse,
    )
    choice = IntervalChoice(level, interval, seed)
    build = _Builder(data, labels, recipes, population, choice, expansion=estimator == "expansion", kappa=kappa)
    build.run(survey)
    if not use.all() or population.unsampled_ha:
        build.worst_cases(*_all_selected(data, labels, use, fpc))
    resolved = {
        "map": {name: list(cols) for name, cols in labels.maps.items()},
        "reference": list(labels.references),
        "dates": list(labels.dates),
        "legend": labels.legend.names,
        "change_classes": [f"{r.name}={','.join(r.before)}>{','.join(r.after)}" for r in recipes.recipes],
        "fpc": population.fpc,
        "level": level,
        "interval": interval,
        "estimator": estimator,
        "post_stratify": post_stratify,
        "unsampled": unsampled,
        "collapse": list(collapse),
        "kappa": kappa,
        "seed": seed,
    }
    return build.result(survey, resolved)


def _all_selected(sample: Sample, labels: _Labels, use: NDArray[np.bool_], fpc: bool) -> tuple[Survey, Population]:
    """Survey of all selected units, labelled or not, of the strata that have any labelled one."""
    sampled = population_of(sample, use, fpc=fpc, unsampled=EXCLUDE)
    return survey_of(sample, sampled, labels.all_codes, sampled.kept[sample.stratum]), sampled


# -- labels -----------------------------------------------------------------------------------------------


def _columns(columns: Columns) -> tuple[str, ...]:
    parts = columns.split(",") if isinstance(columns, str) else list(columns)
    return tuple(p.strip() for p in parts if p.strip())


def _map_columns(maps: Columns | Mapping[str, Columns] | None) -> dict[str, tuple[str, ...]]:
    if maps is None:
        return {}
    if isinstance(maps, Mapping):
        return {name: _columns(c) for name, c in maps.items()}
    columns = _columns(maps)
    return {columns[0] if len(columns) == 1 else "map": columns}


@dataclass(frozen=True, eq=False)
class _Labels:
    """Label columns, resolved against one legend."""

    legend: Legend
    maps: dict[str, tuple[str, ...]]
    references: tuple[str, ...]
    dates: tuple[str, ...]
    reference: NDArray[np.intp]
    map: dict[str, NDArray[np.intp]]

    @classmethod
    def read(
        cls,
        sample: Sample,
        maps: dict[str, tuple[str, ...]],
        references: tuple[str, ...],
        dates: Sequence[str | int] | None,
        legend: LegendSource | None,
    ) -> _Labels:
        if not references:
            raise InputError("no reference column was named", mend="Name it with --reference COLUMN.")
        for name, columns in maps.items():
            if len(columns) != len(references):
                raise InputError(
                    f"map '{name}' has {len(columns)} columns, the reference {len(references)}",
                    mend="Give each of them one column a date, in the same order.",
                )
        wanted = [*references, *(c for columns in maps.values() for c in columns)]
        sample.units.require(*wanted)
        sources: list[tuple[TextTable, Sequence[str]]] = [(sample.units, wanted)]
        if sample.crossing is not None:
            sources.append((sample.crossing, _class_columns(sample.crossing)))
        resolved = legend_of_labels(sources) if legend is None else read_legend(legend)
        codes = {c: label_codes(sample.units, c, resolved) for c in dict.fromkeys(wanted)}
        stack = {name: np.stack([codes[c] for c in columns], axis=1) for name, columns in maps.items()}
        return cls(
            resolved,
            maps,
            references,
            _date_names(dates, references),
            np.stack([codes[c] for c in references], axis=1),
            stack,
        )

    @property
    def all_codes(self) -> NDArray[np.intp]:
        """Label codes of all columns, shape (n, L): the reference dates, then each map's."""
        return np.concatenate([self.reference, *self.map.values()], axis=1)

    def position(self, name: str | None, date: int) -> int:
        """Column of `all_codes` of a map (None: the reference) and date."""
        width = len(self.references)
        return date if name is None else width * (1 + list(self.maps).index(name)) + date

    def post_columns(self, sample: Sample) -> dict[str, NDArray[np.intp]]:
        """Class of each unit in the columns of the crossing table that make post-strata."""
        if sample.crossing is None:
            raise InputError("post-stratification needs known totals", mend="Name the crossing table with --crossing.")
        sample.units.require(*_class_columns(sample.crossing))
        return {c: label_codes(sample.units, c, self.legend) for c in _class_columns(sample.crossing)}


def _class_columns(crossing: TextTable) -> list[str]:
    return [c for c in crossing.frame.columns if c not in ("stratum", "units", "area_ha")]


def _date_names(dates: Sequence[str | int] | None, references: tuple[str, ...]) -> tuple[str, ...]:
    if dates is not None:
        names = tuple(str(d).strip() for d in dates)
        if len(names) != len(references):
            raise InputError(
                f"{len(names)} dates were given for {len(references)} reference columns",
                value=list(names),
                mend="Give one date for each column of --reference.",
            )
        if len(set(names)) < len(names):
            raise InputError("a date is given twice", value=list(names), mend="Name each date once.")
        return names
    years = [re.search(r"(\d{4})$", c) for c in references]
    found = tuple(y.group(1) for y in years if y)
    return found if len(set(found)) == len(references) else references


# -- contrasts --------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Level:
    """One depth in one period: how label codes of cells become classes."""

    depth: str
    period: str
    reference: str
    classes: tuple[str, ...]
    classify: Callable[[NDArray[np.intp]], NDArray[np.intp]]
    dates: tuple[int, ...]


class _Builder:
    """Collect contrasts, rows, matrices and notices of one call of `estimate`."""

    def __init__(
        self,
        sample: Sample,
        labels: _Labels,
        recipes: ChangeClasses,
        population: Population,
        choice: IntervalChoice,
        *,
        expansion: bool,
        kappa: bool,
    ) -> None:
        self.sample, self.labels, self.recipes = sample, labels, recipes
        self.population, self.choice = population, choice
        self.expansion, self.kappa = expansion, kappa
        self.contrasts: dict[Key, Contrast] = {}
        self.frames: list[pd.DataFrame] = []
        self.notices: list[Notice] = [*sample.notices, *population.notices]
        self.levels: list[_Level] = []

    def run(self, survey: Survey) -> None:
        part = survey.only
        self.levels = list(self._levels(part))
        near_kink: list[str] = []
        for name in self.labels.maps or {"": ()}:
            for level in self.levels:
                contrast = self._contrast(survey, name, level)
                key = Key(name, level.reference, level.depth, level.period)
                self.contrasts[key] = contrast
                rows = ContrastRows(contrast, self._known_map(name, level), self.choice)
                self.frames.append(_named(rows.frame(self.kappa), key))
                near_kink += rows.near_kink
        self._notices(survey, near_kink)

    def worst_cases(self, survey: Survey, sampled: Population) -> None:
        """Add the rows that say what the unlabelled units and the unsampled strata could hide."""
        for level in self.levels:
            contrast = replace(self._contrast(survey, "", level), known_area_ha=sampled.area_ha)
            lower, upper = worst_case(contrast, self.choice.level)
            domains = {"sampled strata": upper}
            if sampled.unsampled_ha:
                domains["all strata"] = upper + sampled.unsampled_ha
            for domain, most in domains.items():
                frame = pd.DataFrame(
                    {
                        "measure": "area_ha_worst_case",
                        "class": contrast.classes,
                        "against": "",
                        "estimate": np.nan,
                        "se": np.nan,
                        "df": np.nan,
                        "lower": lower,
                        "upper": most,
                        "level": self.choice.level,
                        "interval": "worst-case",
                        "n": int(contrast.survey.only.cells.count.sum()),
                        "domain": domain,
                    }
                )
                self.frames.append(_named(frame, Key("", level.reference, level.depth, level.period)))

    def _unsampled(self) -> pd.DataFrame:
        """The lines that say how much area is excluded, or in the estimates by assumption only."""
        area = self.population.account.groupby("role")["area_ha"].sum()
        found = [role for role in ("excluded", "assumed") if role in area]
        frame = pd.DataFrame(
            {
                "measure": "unsampled_area_ha",
                "class": "",
                "against": "",
                "estimate": [area[r] for r in found],
                "se": np.nan,
                "df": np.nan,
                "lower": np.nan,
                "upper": np.nan,
                "level": self.choice.level,
                "interval": "",
                "n": 0,
                "domain": [f"{r}, not sampled" for r in found],
            }
        )
        return _named(frame, Key("", ",".join(self.labels.references), "", ""))

    def result(self, survey: Survey, options: dict[str, Any]) -> Result:
        self.frames.append(self._unsampled())
        table = pd.concat(self.frames, ignore_index=True)
        return Result(
            table=table[ESTIMATE_COLUMNS],
            contrasts=self.contrasts,
            warnings=tuple(self.notices),
            account=self.population.account,
            survey=survey,
            options=options,
            sample=self.sample,
        )

    # -- levels --------------------------------------------------------------------------------------------

    def _levels(self, part: Part) -> Iterable[_Level]:
        labels, legend = self.labels, self.labels.legend
        names = tuple(legend.names)
        if len(labels.references) == 1:
            yield _Level(LABEL, "", labels.references[0], names, lambda codes: codes[:, 0], (0,))
            return
        for t, date in enumerate(labels.dates):
            yield _Level(COVER, date, labels.references[t], names, lambda codes: codes[:, 0], (t,))
        table_names, table = self.recipes.table(legend)
        for period in self._periods():
            title = "-".join(labels.dates[t] for t in period)
            reference = ",".join(labels.references[t] for t in period)
            pairs, classify = self._from_to(part, period)
            yield _Level(FROM_TO, title, reference, pairs, classify, period)
            if self.recipes.recipes:
                yield _Level(CHANGE_CLASS, title, reference, tuple(table_names), _by_table(table), period)
            yield _Level(CHANGE_DEPTH, title, reference, (CHANGE, NO_CHANGE), _changed, period)

    def _periods(self) -> list[tuple[int, int]]:
        """Consecutive dates, and with more than two dates also the whole span."""
        last = len(self.labels.dates) - 1
        return [(t, t + 1) for t in range(last)] + ([(0, last)] if last > 1 else [])

    def _from_to(
        self, part: Part, period: tuple[int, int]
    ) -> tuple[tuple[str, ...], Callable[[NDArray[np.intp]], NDArray[np.intp]]]:
        """From-to classes that occur in the sample or the crossing table, and how pairs of codes become them."""
        k, names = len(self.labels.legend.classes), self.labels.legend.names
        found = [self._codes(part, name, period) for name in (None, *self.labels.maps)]
        for name in self.labels.maps:
            known = self._crossing_codes(name, period)
            found += [] if known is None else [known]
        pairs = np.unique(np.concatenate([_pair_codes(f, k) for f in found]))
        pairs = pairs[pairs >= 0]
        lookup = np.full(k * k + 1, -1, dtype=np.intp)
        lookup[pairs] = np.arange(len(pairs))
        classes = tuple(pair_name(names[p // k], names[p % k]) for p in pairs)
        return classes, lambda codes: lookup[_pair_codes(codes, k)]

    def _codes(self, part: Part, name: str | None, dates: tuple[int, ...]) -> NDArray[np.intp]:
        return part.cells.labels[:, [self.labels.position(name, t) for t in dates]]

    def _contrast(self, survey: Survey, name: str, level: _Level) -> Contrast:
        part = survey.only
        reference = level.classify(self._codes(part, None, level.dates))
        mapped = level.classify(self._codes(part, name, level.dates)) if name else np.full(len(part.cells), -1, np.intp)
        return Contrast(survey, mapped, reference, level.classes, self.population.area_ha, self.expansion)

    # -- exact areas of the map ------------------------------------------------------------------------------

    def _crossing_codes(self, name: str, dates: tuple[int, ...]) -> NDArray[np.intp] | None:
        """Codes of the rows of the crossing table, shape (rows, dates); None if it does not hold this map."""
        cross = self.sample.crossing
        if cross is None or not name:
            return None
        columns = [self.labels.maps[name][t] for t in dates]
        if not set(columns) <= set(cross.frame.columns):
            return None
        return np.stack([label_codes(cross, c, self.labels.legend) for c in columns], axis=1)

    def _known_map(self, name: str, level: _Level) -> NDArray[np.float64] | None:
        codes, cross = self._crossing_codes(name, level.dates), self.sample.crossing
        if codes is None or cross is None:
            return None
        use = np.ones(len(codes), bool)
        if not self.population.kept.all():
            if "stratum" not in cross.frame.columns:
                return None
            kept = set(self.population.account.loc[self.population.account["role"] != "excluded", "stratum"])
            use = np.array([s.strip() in kept for s in cross.frame["stratum"]])
        classes = level.classify(codes)
        use &= classes >= 0
        return np.bincount(classes[use], cross.numbers("area_ha")[use], minlength=len(level.classes)).astype(float)

    # -- what must be said ------------------------------------------------------------------------------------

    def _notices(self, survey: Survey, near_kink: list[str]) -> None:
        part = survey.only
        names = self.sample.strata["stratum"]
        strata, clusters = part.design.lonely(part.cells)
        if len(strata):
            self.notices.append(Notice("single-unit-strata", {"names": names.iloc[strata].tolist()}))
        if len(clusters) and self.sample.clusters is not None:
            ids = self.sample.clusters["cluster"].iloc[clusters].tolist()
            self.notices.append(Notice("single-unit-clusters", {"names": ids}))
        if near_kink:
            self.notices.append(Notice("near-kink", {"measures": sorted(set(near_kink))}))
        for name, codes in self.labels.map.items():
            blank = int((codes < 0).any(axis=1).sum())
            if blank:
                self.notices.append(Notice("units-without-map-label", {"map": name, "units": blank}))
        partly = (self.labels.reference >= 0).any(axis=1) & ~(self.labels.reference >= 0).all(axis=1)
        if partly.any():
            self.notices.append(Notice("partly-labelled-units", {"units": int(partly.sum())}))
        missing = [c for c in self.labels.legend.names if c.casefold() in _missing_words()]
        if missing:
            self.notices.append(Notice("label-looks-missing", {"labels": missing}))
        folded = pd.Series(self.labels.legend.names)
        same = folded[folded.str.casefold().duplicated(keep=False)].tolist()
        if same:
            self.notices.append(Notice("labels-differ-by-case", {"labels": same}))
        if self.kappa:
            self.notices.append(Notice("kappa"))
        self._area_notice()

    def _area_notice(self) -> None:
        cross = self.sample.crossing
        if cross is None:
            return
        known, whole = float(self.sample.strata["area_ha"].sum()), float(cross.numbers("area_ha").sum())
        if abs(known - whole) > 1e-6 * known:
            self.notices.append(Notice("crossing-area-differs", {"strata_ha": known, "crossing_ha": whole}))


def _missing_words() -> set[str]:
    from change_assess.tables import LOOKS_MISSING

    return LOOKS_MISSING


def _pair_codes(codes: NDArray[np.intp], k: int) -> NDArray[np.intp]:
    return np.where((codes >= 0).all(axis=1), codes[:, 0] * k + codes[:, 1], -1)


def _by_table(table: NDArray[np.intp]) -> Callable[[NDArray[np.intp]], NDArray[np.intp]]:
    return lambda codes: np.where((codes >= 0).all(axis=1), table[codes[:, 0], codes[:, 1]], -1)


def _changed(codes: NDArray[np.intp]) -> NDArray[np.intp]:
    return np.where((codes >= 0).all(axis=1), (codes[:, 0] == codes[:, 1]).astype(np.intp), -1)


def _named(rows: pd.DataFrame, key: Key) -> pd.DataFrame:
    named = rows.assign(depth=key.depth, map=key.map, reference=key.reference, period=key.period)
    return named if "domain" in rows else named.assign(domain="")


# -- the result -------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Measured:
    """Where an estimate's expression starts: one entry of a measure of one contrast."""

    contrast: Contrast
    measure: Measure
    index: int | None = None

    def linear(self) -> Linearised:
        """Value with scores, shape ()."""
        x = linearise(self.measure, self.contrast)
        return x if self.index is None else x[self.index]

    def at(self, survey: Survey, count: NDArray[np.float64]) -> NDArray[np.float64]:
        """Value for other counts over the cells of `survey`."""
        own = survey.only.counts_of(self.contrast.survey.only, count)
        x = np.asarray(self.measure(self.contrast.totals_at(own)))
        return x if self.index is None else x[..., self.index]


@dataclass(frozen=True, eq=False)
class ClassView:
    """The measures of one class as attributes, each an `Estimate`: ``result["forest loss"].area_ha``."""

    contrast: Contrast
    name: str
    level: float

    def __getattr__(self, measure: str) -> Estimate:
        if measure.startswith("_") or measure not in BY_CLASS:
            raise AttributeError(f"There is no measure '{measure}' of a class.{nearest(measure, BY_CLASS)}")
        return Estimate(Measured(self.contrast, BY_CLASS[measure], self.contrast.classes.index(self.name)), self.level)

    def __dir__(self) -> list[str]:
        return [*super().__dir__(), *BY_CLASS]


@dataclass(frozen=True, eq=False)
class View:
    """One map against one reference at one depth."""

    contrast: Contrast
    level: float

    @property
    def classes(self) -> tuple[str, ...]:
        """Class names."""
        return self.contrast.classes

    def __getitem__(self, name: str) -> ClassView:
        if name not in self.contrast.classes:
            raise InputError(f"there is no class '{name}'", value=name, mend=nearest(name, self.classes).strip())
        return ClassView(self.contrast, name, self.level)

    def __getattr__(self, measure: str) -> Estimate:
        every = OVERALL | ON_REQUEST
        if measure.startswith("_") or measure not in every:
            raise AttributeError(f"There is no overall measure '{measure}'.{nearest(measure, every)}")
        return Estimate(Measured(self.contrast, every[measure]), self.level)

    def joint_share(self, map_class: str, reference_class: str) -> Estimate:
        """Share of the area with this map and this reference class."""
        i, j = (self.contrast.classes.index(c) for c in (map_class, reference_class))
        totals = self.contrast.totals
        at = np.flatnonzero((totals.row == i) & (totals.column == j))
        if not len(at):
            return Estimate(Known(0.0, self.contrast.survey), self.level)
        return Estimate(Measured(self.contrast, joint_share, int(at[0])), self.level)

    def measure(self, function: Callable[[Totals], Any]) -> Estimate | dict[str, Estimate]:
        """Evaluate your own function of `Totals`: one estimate, or one for each class."""
        x = linearise(function, self.contrast)
        if x.ndim == 0:
            return Estimate(Measured(self.contrast, function), self.level)
        if x.shape != (len(self.classes),):
            raise InputError(
                f"the function returned an array of shape {x.shape}", mend="Return one number, or one a class."
            )
        return {c: Estimate(Measured(self.contrast, function, i), self.level) for i, c in enumerate(self.classes)}

    def counts(self) -> pd.DataFrame:
        """Sample counts: rows the map, columns the reference."""
        return self._matrix(self.contrast.sample_counts().astype(np.int64))

    def area_shares(self) -> pd.DataFrame:
        """Estimated shares of the area: rows the map, columns the reference."""
        k, totals = len(self.classes), self.contrast.totals
        shares = np.zeros((k, k))
        shares[totals.row, totals.column] = linearise(joint_share, self.contrast).value
        return self._matrix(shares)

    def _matrix(self, values: NDArray[Any]) -> pd.DataFrame:
        return pd.DataFrame(
            values, index=pd.Index(self.classes, name="map"), columns=pd.Index(self.classes, name="reference")
        )


@dataclass(frozen=True, eq=False)
class Result:
    """What `estimate` found.

    Attributes
    ----------
    table : DataFrame
        The rows of ``estimates.csv``; the first eight columns are a unique key.
    contrasts : dict of Key to Contrast
    warnings : tuple of Notice
        Codes and facts; `change_assess.reporting.texts` words them.
    account : DataFrame
        Strata with their population, selected and labelled units, and what was done with the unsampled ones.
    """

    table: pd.DataFrame
    contrasts: dict[Key, Contrast]
    warnings: tuple[Notice, ...]
    account: pd.DataFrame
    survey: Survey
    options: dict[str, Any]
    sample: Sample = field(repr=False)

    @property
    def level(self) -> float:
        """Confidence level of the table."""
        return float(self.options["level"])

    @cached_property
    def total_area_ha(self) -> Estimate:
        """Area of the target population, known."""
        return Estimate(Known(float(next(iter(self.contrasts.values())).known_area_ha), self.survey), self.level)

    def select(self, *, map: str | None = None, depth: str | None = None, period: str | None = None) -> View:
        """Choose one contrast by map, depth and period; what is not named must be unambiguous."""
        keys = self._matching(map=map, depth=depth, period=period)
        if len(keys) != 1:
            options = "; ".join(
                f"map={k.map!r}, depth={k.depth!r}, period={k.period!r}" for k in (keys or self.contrasts)
            )
            raise InputError(f"{'several tables fit' if keys else 'no table fits'}", mend=f"Choose one: {options}.")
        return View(self.contrasts[keys[0]], self.level)

    def _matching(self, **wanted: str | None) -> list[Key]:
        named = {name: value for name, value in wanted.items() if value is not None}
        return [k for k in self.contrasts if all(getattr(k, name) == value for name, value in named.items())]

    def __getitem__(self, name: str) -> ClassView:
        keys = [k for k, c in self.contrasts.items() if name in c.classes]
        if not keys:
            every = list(dict.fromkeys(c for x in self.contrasts.values() for c in x.classes))
            raise InputError(f"there is no class '{name}'", value=name, mend=nearest(name, every).strip())
        if len(keys) > 1:
            ways = "; ".join(f"map={k.map!r}, depth={k.depth!r}, period={k.period!r}" for k in keys)
            raise InputError(
                f"'{name}' stands in {len(keys)} tables", value=name, mend=f"Use result.select(...) with: {ways}."
            )
        return View(self.contrasts[keys[0]], self.level)[name]

    def __getattr__(self, measure: str) -> Estimate:
        if measure.startswith("_") or measure not in OVERALL | ON_REQUEST:
            raise AttributeError(f"A result has no '{measure}'.{nearest(measure, OVERALL | ON_REQUEST)}")
        estimate: Estimate = getattr(self.select(), measure)
        return estimate

    def measure(self, function: Callable[[Totals], Any], **which: str) -> Estimate | dict[str, Estimate]:
        """Evaluate your own function of `Totals`; `which` chooses the table as in `select`."""
        return self.select(**which).measure(function)

    # -- writing ---------------------------------------------------------------------------------------------

    def to_json(self, inputs: Mapping[str, str | Path] | None = None) -> str:
        """The rows with design, options, versions, hashes of input files and warnings."""
        frame = self.table.astype(object).where(self.table.notna(), None)
        part = self.survey.only
        adjust = part.design.adjust
        content = {
            "format": 1,
            "program": "change-assess",
            "versions": _versions(),
            "design": {
                "kind": self.sample.design,
                "units": self.sample.n,
                "df": part.design.df(part.cells),
                "labelled": int(part.cells.count.sum()),
                "area_ha": self.total_area_ha.value,
                "adjustment": adjust.name if adjust else "",
            },
            "options": self.options,
            "inputs": {name: {"file": Path(p).name, "sha256": files.sha256(p)} for name, p in (inputs or {}).items()},
            "warnings": [{"code": w.code, **w.facts} for w in self.warnings],
            "strata": self.account.astype(object).where(self.account.notna(), None).to_dict("records"),
            "estimates": frame.to_dict("records"),
        }
        return json.dumps(content, indent=1, ensure_ascii=False, default=_plain_number, allow_nan=False) + "\n"

    def save(self, folder: str | Path, inputs: Mapping[str, str | Path] | None = None) -> list[Path]:
        """Write `estimates.csv`, `estimates.json`, `strata_account.csv` and the matrices; all or nothing.

        Parameters
        ----------
        folder : path
        inputs : mapping of role to path, optional
            Input files whose SHA-256 go into the JSON.
        """
        folder = Path(folder)
        texts = {
            folder / "estimates.csv": self.table.to_csv(index=False, lineterminator="\n"),
            folder / "estimates.json": self.to_json(inputs),
            folder / "strata_account.csv": self.account.to_csv(index=False, lineterminator="\n"),
        }
        for key, contrast in self.contrasts.items():
            if key.map:
                view = View(contrast, self.level)
                name = re.sub(r"[^\w.-]+", "-", "-".join(p for p in (key.map, key.depth, key.period) if p))
                for kind, matrix in (("sample-counts", view.counts()), ("area-shares", view.area_shares())):
                    matrix.index.name = "map \\ reference"
                    texts[folder / f"matrix-{kind}-{name}.csv"] = matrix.to_csv(lineterminator="\n")
        files.write_together(texts)
        return list(texts)


def _plain_number(value: Any) -> Any:
    if isinstance(value, np.generic):
        return value.item()
    raise TypeError(type(value).__name__)


def _versions() -> dict[str, str]:
    from importlib.metadata import PackageNotFoundError, version

    found = {"python": platform.python_version()}
    for name in ("change-assess", "numpy", "scipy", "pandas"):
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "unknown"
    return found


__all__ = ["DEPTHS", "DesignError", "Estimate", "Key", "Result", "View", "estimate"]
