"""A result that can be asked for more: rows, single estimates with arithmetic, your own measures, files."""

from __future__ import annotations

import json
import platform
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from change_assess import files
from change_assess.engine.estimate import Estimate, Known
from change_assess.engine.linearise import Linearised, Survey
from change_assess.errors import InputError, Notice, nearest
from change_assess.measures import BY_CLASS, ON_REQUEST, OVERALL, Contrast, Measure, Totals, joint_share, linearise
from change_assess.results.influence import Influence, influence
from change_assess.samples import Sample


class Key(NamedTuple):
    """What names a contrast: map, reference, depth and period."""

    map: str
    reference: str
    depth: str
    period: str


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
            raise InputError(
                f"{'several tables fit' if keys else 'no table fits'}",
                mend=f"Choose one: {_ways(keys or self.contrasts)}.",
            )
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
            mend = f"Use result.select(...) with: {_ways(keys)}."
            raise InputError(f"'{name}' stands in {len(keys)} tables", value=name, mend=mend)
        return View(self.contrasts[keys[0]], self.level)[name]

    def __getattr__(self, measure: str) -> Estimate:
        if measure.startswith("_") or measure not in OVERALL | ON_REQUEST:
            raise AttributeError(f"A result has no '{measure}'.{nearest(measure, OVERALL | ON_REQUEST)}")
        estimate: Estimate = getattr(self.select(), measure)
        return estimate

    def measure(self, function: Callable[[Totals], Any], **which: str) -> Estimate | dict[str, Estimate]:
        """Evaluate your own function of `Totals`; `which` chooses the table as in `select`."""
        return self.select(**which).measure(function)

    def influence(
        self,
        measure: str,
        class_name: str = "",
        *,
        map: str | None = None,
        depth: str | None = None,
        period: str | None = None,
    ) -> Influence:
        """Units and strata that carry an estimate; `map`, `depth` and `period` choose the table as in `select`."""
        measures = BY_CLASS if class_name else OVERALL
        if measure not in measures:
            raise InputError(f"there is no measure '{measure}'", value=measure, mend=nearest(measure, measures).strip())
        keys = self._matching(map=map, depth=depth, period=period)
        keys = [k for k in keys if not class_name or class_name in self.contrasts[k].classes]
        if len(keys) != 1:
            raise InputError(
                f"{len(keys)} tables fit", value=class_name, mend=f"Choose one: {_ways(keys or self.contrasts)}."
            )
        key = keys[0]
        mapped = self.table[(self.table["measure"] == "map_area_ha") & (self.table["class"] == class_name)]
        mapped = mapped[(mapped[["map", "depth", "period"]] == [key.map, key.depth, key.period]).all(axis=1)]
        known = float(mapped["estimate"].iloc[0]) if len(mapped) else None
        return influence(self.contrasts[key], self.sample, measure, class_name, mapped_ha=known, level=self.level)

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
                name = files.slug("-".join(p for p in (key.map, key.depth, key.period) if p))
                while folder / f"matrix-sample-counts-{name}.csv" in texts:
                    name += "_"
                for kind, matrix in (("sample-counts", view.counts()), ("area-shares", view.area_shares())):
                    matrix.index.name = "map \\ reference"
                    texts[folder / f"matrix-{kind}-{name}.csv"] = matrix.to_csv(lineterminator="\n")
        files.write_together(texts)
        return list(texts)


def _ways(keys: Iterable[Key]) -> str:
    return "; ".join(f"map={k.map!r}, depth={k.depth!r}, period={k.period!r}" for k in keys)


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
