"""The oracle's cases as this package sees them: a sample, the call of `estimate`, and each quantity looked up.

The cases in ``data/oracle`` and their answers were made with R's general-purpose survey package; see its README.
"""

from __future__ import annotations

import json
from functools import cached_property
from pathlib import Path

import pandas as pd

from change_assess.engine.estimate import Estimate
from change_assess.measures import area_share, map_share
from change_assess.results.estimate import estimate
from change_assess.results.result import Result, View
from change_assess.samples import Sample, read_sample

CASES = sorted((Path(__file__).parent / "data" / "oracle" / "cases").iterdir())


class Case:
    """One folder of the oracle."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.design = json.loads((folder / "design.json").read_text())
        self.expected = json.loads((folder / "expected.json").read_text())
        self._results: dict[tuple, Result] = {}

    @cached_property
    def strata(self) -> pd.DataFrame:
        strata = pd.read_csv(self.folder / "strata.csv")
        if "clusters_total" in self.design:
            strata["clusters"] = strata["stratum"].map(self.design["clusters_total"])
        return strata

    @cached_property
    def sample(self) -> Sample:
        optional = {"clusters": "clusters.csv", "crossing": "poststrata.csv"}
        tables = {name: self.folder / f for name, f in optional.items() if (self.folder / f).exists()}
        return read_sample(self.folder / "sample.csv", self.strata, **tables)

    @property
    def dates(self) -> list[int]:
        return self.design.get("dates", [])

    def result(self, estimator: str = "combined", change_classes: tuple[str, ...] = ()) -> Result:
        key = (estimator, change_classes)
        if key not in self._results:
            self._results[key] = self._estimate(estimator, change_classes)
        return self._results[key]

    def _estimate(self, estimator: str, change_classes: tuple[str, ...]) -> Result:
        columns = self.sample.units.frame.columns
        if self.dates:
            labels = {"map": {"map": [f"map_{d}" for d in self.dates]}, "reference": [f"ref_{d}" for d in self.dates]}
        else:
            labels = {"map": {c: c for c in ("map", "map_b") if c in columns}, "reference": "ref"}
        return estimate(
            self.sample,
            **labels,
            legend=self.design["classes"],
            fpc=self.design["fpc"],
            estimator=estimator,
            post_stratify=self.design.get("adjustment"),
            change_classes=change_classes,
        )

    def look_up(self, quantity: str, name: str | None, context: str) -> Estimate:
        """Estimate of one quantity of the oracle's README."""
        if quantity.startswith("diff_"):
            return self._difference(quantity.removeprefix("diff_"), name, context)
        if "-" in context:
            return self._change(quantity, name, context)
        if quantity in ("area_ha_ht", "area_ha_separate"):
            estimator = {"area_ha_ht": "expansion", "area_ha_separate": "separate"}[quantity]
            if estimator == "expansion" and self.design["kind"] == "post-stratified":
                return self._view(context).measure(reference_total)[name]
            return self._view(context, estimator)[name].area_ha
        return self._measure(self._view(context), quantity, name)

    def _view(self, context: str, estimator: str = "combined") -> View:
        if self.dates:
            return self.result(estimator).select(depth="cover", period=context)
        return self.result(estimator).select(map=context if context.startswith("map") else "map")

    @staticmethod
    def _measure(view: View, quantity: str, name: str | None) -> Estimate:
        if not name:
            return getattr(view, quantity)
        if quantity == "p_ij":
            return view.joint_share(*name.split("|"))
        if quantity == "map_share":
            return view.measure(map_share)[name]
        if quantity == "map_share_minus_ref_share":
            return view.measure(map_share)[name] - view.measure(area_share)[name]
        return getattr(view[name], quantity)

    def _difference(self, quantity: str, name: str | None, context: str) -> Estimate:
        if self.dates:
            later, earlier = context.split(" - ")
            if quantity == "loss_ha_per_year":
                rates = [self._change("loss_area_ha", name, p) / years(p) for p in (later, earlier)]
                return rates[0] - rates[1]
            return self._change(quantity, name, later) - self._change(quantity, name, earlier)
        second, first = (self._measure(self._view(m), quantity, name) for m in ("map_b", "map"))
        return second - first

    def _change(self, quantity: str, name: str, context: str) -> Estimate:
        if quantity == "transition_area_ha":
            return self._transition(name.replace("->", ">"), context)
        if quantity.startswith("loss_") and quantity != "loss_area_ha":
            recipes = (f"loss={name}>*",)
            view = self.result(change_classes=recipes).select(depth="change-class", period=context)
            return getattr(view["loss"], quantity.removeprefix("loss_"))
        others = [c for c in self.design["classes"] if c != name]
        loss = sum(self._transition(f"{name}>{c}", context) for c in others)
        gain = sum(self._transition(f"{c}>{name}", context) for c in others)
        return {"loss_area_ha": loss, "gain_area_ha": gain, "net_change_ha": gain - loss}[quantity]

    def _transition(self, name: str, period: str) -> Estimate:
        view = self.result().select(depth="from-to", period=period)
        return view[name].area_ha if name in view.classes else 0.0 * self.result().total_area_ha


def reference_total(t):
    """Plain expansion total of each reference class."""
    return t.reference


def years(period: str) -> float:
    first, last = period.split("-")
    return float(last) - float(first)
