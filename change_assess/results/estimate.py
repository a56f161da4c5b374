"""Accuracy and area from a sample: the four depths, every measure, and a result that can be asked for more."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from change_assess.engine.cells import Floats
from change_assess.engine.intervals import METHODS, check_level
from change_assess.engine.linearise import Part, Survey
from change_assess.errors import InputError, Notice, nearest
from change_assess.legend import CHANGE, NO_CHANGE, ChangeClass, ChangeClasses, Legend, pair_name
from change_assess.measures import Contrast
from change_assess.results.population import EXCLUDE, Population, Weighing, labelled_units, population_of, survey_of
from change_assess.results.result import Key, Result
from change_assess.results.rows import ContrastRows, IntervalChoice, worst_case
from change_assess.samples import Sample, read_sample
from change_assess.tables import (
    ESTIMATE_COLUMNS,
    LOOKS_MISSING,
    LegendSource,
    Table,
    TextTable,
    label_codes,
    legend_of_labels,
    read_legend,
)

LABEL, COVER, FROM_TO, CHANGE_CLASS, CHANGE_DEPTH = "label", "cover", "from-to", "change-class", "change"
DEPTHS = (LABEL, COVER, FROM_TO, CHANGE_CLASS, CHANGE_DEPTH)
INTERVALS = ("default", *METHODS)
Columns = str | Sequence[str]


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
    if not isinstance(seed, (int, np.integer)) or seed < 0:
        raise InputError(f"{seed!r} is not a seed", value=seed, mend="Use a whole number, 0 or more.")
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
    weighing = Weighing(estimator, post_stratify, tuple(collapse), labels.legend, post)
    survey = survey_of(data, population, labels.all_codes, use, weighing)
    choice = IntervalChoice(level, interval, seed)
    build = _Builder(data, labels, recipes, population, choice, expansion=estimator == "expansion", kappa=kappa)
    build.run(survey)
    if not use.all() or population.unsampled_ha:
        build.worst_cases(*_all_selected(data, labels, use, fpc, weighing))
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


def _all_selected(
    sample: Sample, labels: _Labels, use: NDArray[np.bool_], fpc: bool, weighing: Weighing
) -> tuple[Survey, Population]:
    """Survey of all selected units, labelled or not, of the strata that have any labelled one."""
    sampled = population_of(sample, use, fpc=fpc, unsampled=EXCLUDE)
    return survey_of(sample, sampled, labels.all_codes, sampled.kept[sample.stratum], weighing), sampled


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
        table = pd.concat(self.frames)
        areas = table[table["measure"] == "area_ha"]
        for level in self.levels:
            contrast = replace(self._contrast(survey, "", level), known_area_ha=sampled.area_ha)
            lower, upper = self._with_reported(areas, level, *worst_case(contrast, self.choice.level))
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

    def _with_reported(self, areas: pd.DataFrame, level: _Level, lower: Floats, upper: Floats) -> tuple[Floats, Floats]:
        """Worst-case limits that hold those reported for the sampled strata, such as a zero-count bound."""
        if (self.population.account["role"] == "assumed").any():
            return lower, upper
        mine = (areas["depth"] == level.depth) & (areas["period"] == level.period)
        reported = areas[mine].drop_duplicates("class").set_index("class").loc[list(level.classes)]
        least, most = (reported[c].to_numpy(float) for c in ("lower", "upper"))
        return np.fmin(lower, np.clip(least, 0, None)), np.fmax(upper, most)

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
        frames = [*self.frames, *([self._unsampled()] if self.population.unsampled_ha else [])]
        table = pd.concat(frames, ignore_index=True) if len(frames) > 1 else frames[0]
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
        missing = [c for c in self.labels.legend.names if c.casefold() in LOOKS_MISSING]
        if missing:
            self.notices.append(Notice("label-looks-missing", {"labels": missing}))
        folded = pd.Series(self.labels.legend.names)
        same = folded[folded.str.casefold().duplicated(keep=False)].tolist()
        if same:
            self.notices.append(Notice("labels-differ-by-case", {"labels": same}))
        if self.recipes.recipes and len(self.labels.dates) == 1:
            self.notices.append(Notice("change-classes-unused"))
        if self.expansion:
            design = part.design
            stands_for = float(((part.cells.count * part.cells.size_ha) * design.weights(part.cells)).sum())
            if abs(stands_for - self.population.area_ha) > 1e-6 * self.population.area_ha:
                facts = {"estimated_ha": stands_for, "known_ha": self.population.area_ha}
                self.notices.append(Notice("expansion-total", facts))
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


def _pair_codes(codes: NDArray[np.intp], k: int) -> NDArray[np.intp]:
    return np.where((codes >= 0).all(axis=1), codes[:, 0] * k + codes[:, 1], -1)


def _by_table(table: NDArray[np.intp]) -> Callable[[NDArray[np.intp]], NDArray[np.intp]]:
    return lambda codes: np.where((codes >= 0).all(axis=1), table[codes[:, 0], codes[:, 1]], -1)


def _changed(codes: NDArray[np.intp]) -> NDArray[np.intp]:
    return np.where((codes >= 0).all(axis=1), (codes[:, 0] == codes[:, 1]).astype(np.intp), -1)


def _named(rows: pd.DataFrame, key: Key) -> pd.DataFrame:
    named = rows.assign(depth=key.depth, map=key.map, reference=key.reference, period=key.period)
    return named if "domain" in rows else named.assign(domain="")
