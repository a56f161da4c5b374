"""Results on a terminal: rich tables, rounded to the precision of the standard error."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import pandas as pd
from rich.console import Console
from rich.table import Table
from rich.text import Text

from change_assess.errors import Notice
from change_assess.reporting import texts
from change_assess.results.influence import Influence
from change_assess.results.result import Key, Result, View

if TYPE_CHECKING:
    from change_assess.maps.tally import Tally

MOST_CLASSES = 12
"""Tables of more classes are left to the files."""

MOST_MATRIX_CLASSES = 8
SHOWN = ("area_ha", "users_accuracy", "producers_accuracy", "f1", "overall_accuracy", *texts.DISAGREEMENTS)
MARKS = {"exact": "ᵉ", "simulated": "ˢ", "zero-count": "ᶻ", "t": "ᵗ"}


def show_result(console: Console, result: Result, influences: Mapping[str, Influence] | None = None) -> None:
    """Print what was found: the sample, areas and accuracies at each depth, matrices, what must be known."""
    _show_sample(console, result)
    marks: set[str] = set()
    left_out = []
    for key, contrast in result.contrasts.items():
        if len(contrast.classes) > MOST_CLASSES:
            left_out.append(_title(key))
            continue
        rows = _rows_of(result.table, key)
        _show_area(console, rows, key, result.level)
        if key.map:
            _show_accuracy(console, rows, key, result.level)
            if len(contrast.classes) <= MOST_MATRIX_CLASSES:
                _show_matrices(console, View(contrast, result.level), key)
        marks |= set(rows.loc[rows["measure"].isin(SHOWN), "interval"]) & set(MARKS)
    _show_worst_case(console, result)
    for name, influence in (influences or {}).items():
        _show_influence(console, name, influence)
    console.print()
    for mark in sorted(marks):
        console.print(f"{MARKS[mark]} {texts.INTERVALS[mark]}.", style="dim")
    if left_out:
        console.print(f"More than {MOST_CLASSES} classes, in the files only: {'; '.join(left_out)}.", style="dim")
    show_notices(console, result.warnings)
    for caution in texts.CAUTIONS:
        console.print(caution, style="dim")


def show_notices(console: Console, notices: Iterable[Notice]) -> None:
    """Print each notice as a sentence."""
    for notice in notices:
        console.print(Text.assemble(("! ", "bold yellow"), texts.notice_text(notice)))


def _show_sample(console: Console, result: Result) -> None:
    part = result.survey.only
    labelled = int(part.cells.count.sum())
    strata = int((result.account["labelled"] > 0).sum())
    adjust = part.design.adjust
    console.print(
        f"{result.sample.design.capitalize()} sample: {result.sample.n:,} units, {labelled:,} with reference labels, "
        f"{strata} {'strata' if strata != 1 else 'stratum'}, {result.total_area_ha.value:,.0f} ha; "
        f"{part.design.df(part.cells):,.0f} degrees of freedom; "
        f"{'with' if part.design.fpc else 'without'} finite population correction"
        f"{'; weights adjusted to ' + adjust.name if adjust else ''}."
    )


def show_comparison(console: Console, rows: pd.DataFrame, level: float) -> None:
    """Print estimate and interval of each class and period, beside the mapped and the true area."""
    heads = ["class", "period", "mapped", "estimate", f"{level:.0%} interval", "truth", "truth inside?"]
    table = _new_table(heads)
    for row in _records(rows):
        step = _step(row)
        numbers = [rounded(row["map_area_ha"], min(step, 1.0)), rounded(row["estimate"], step)]
        inside = row["lower"] <= row["true_area_ha"] <= row["upper"]
        table.add_row(
            row["class"],
            row["period"],
            *numbers,
            _limits(row, step),
            rounded(row["true_area_ha"], min(step, 1.0)),
            "yes" if inside else "no",
        )
    _show(console, "Hectares: map, estimate and truth", table)
    console.print(texts.NORMAL_CAUTION, style="dim")


def _title(key: Key) -> str:
    names = [texts.DEPTHS[key.depth], key.period]
    return " ".join(n for n in names if n) + (f" (map '{key.map}')" if key.map not in ("", "map") else "")


def _rows_of(table: pd.DataFrame, key: Key) -> pd.DataFrame:
    mine = (table["map"] == key.map) & (table["depth"] == key.depth) & (table["period"] == key.period)
    return table[mine & (table["domain"] == "")]


def _show(console: Console, title: str, table: Table) -> None:
    console.print()
    console.print(title, style="bold")
    console.print(table)


def _new_table(columns: Sequence[str]) -> Table:
    table = Table(header_style="", box=None, pad_edge=False)
    for i, name in enumerate(columns):
        table.add_column(name, justify="left" if i == 0 else "right", no_wrap=i > 0, overflow="fold")
    return table


Row = dict[str, Any]


def _by_class(rows: pd.DataFrame, measure: str) -> dict[str, Row]:
    return {str(r["class"]): r for r in _records(rows[rows["measure"] == measure])}


def _records(rows: pd.DataFrame) -> list[Row]:
    return [{str(k): v for k, v in record.items()} for record in rows.to_dict("records")]


def _show_area(console: Console, rows: pd.DataFrame, key: Key, level: float) -> None:
    area, share, mapped, bias = (_by_class(rows, m) for m in ("area_ha", "area_share", "map_area_ha", "map_bias_ha"))
    heads = ["class", *(["mapped"] if mapped else []), "estimate", "SE", f"{level:.0%} interval", "share"]
    table = _new_table(heads + (["map bias"] if mapped else []))
    for name, row in area.items():
        step = _step(row)
        cells = [name, *([rounded(mapped[name]["estimate"], min(step, 1.0))] if mapped else [])]
        cells += [rounded(row["estimate"], step), rounded(row["se"], step), _limits(row, step)]
        cells += [_percent(share[name]["estimate"])]
        cells += [rounded(bias[name]["estimate"], step, sign=True)] if mapped else []
        table.add_row(*cells)
    _show(console, f"Area of {_title(key)}, hectares", table)


def _show_accuracy(console: Console, rows: pd.DataFrame, key: Key, level: float) -> None:
    overall = {r["measure"]: r for r in _records(rows[rows["class"] == ""])}
    table = _new_table(["class", "user's accuracy", "producer's accuracy", "F1"])
    measures = [_by_class(rows, m) for m in ("users_accuracy", "producers_accuracy", "f1")]
    for name in measures[0]:
        table.add_row(name, *(_with_limits(m[name]) for m in measures))
    _show(console, f"Accuracy of {_title(key)}, with {level:.0%} intervals", table)
    names = {"overall accuracy": "overall_accuracy", **{t: m for m, t in texts.DISAGREEMENTS.items()}}
    names |= {"kappa": "kappa"} if "kappa" in overall else {}
    console.print("; ".join(f"{title} {_with_limits(overall[m])}" for title, m in names.items()) + ".")


def _show_matrices(console: Console, view: View, key: Key) -> None:
    kinds = {
        "Sample counts": (view.counts(), "{:,.0f}"),
        "Area shares in per cent": (100 * view.area_shares(), "{:.3f}"),
    }
    for title, (matrix, form) in kinds.items():
        table = _new_table(["map", *map(str, matrix.columns)])
        for name, row in zip(matrix.index, matrix.to_numpy(), strict=True):
            table.add_row(str(name), *(form.format(v) for v in row))
        _show(console, f"{title} of {_title(key)}: rows the map, columns the reference", table)


def _show_worst_case(console: Console, result: Result) -> None:
    rows = result.table[result.table["measure"] == "area_ha_worst_case"]
    rows = rows[rows["depth"].isin(["label", "change-class", "change"])]
    if rows.empty:
        return
    table = _new_table(["class", "table", "period", "over", "at least", "at most"])
    for row in _records(rows):
        table.add_row(
            row["class"],
            texts.DEPTHS[row["depth"]],
            row["period"],
            row["domain"],
            rounded(row["lower"], 1),
            rounded(row["upper"], 1),
        )
    title = "Worst case for what has no label, hectares: none, or all, of it is of the class; sampling error included"
    _show(console, title, table)


def _show_influence(console: Console, name: str, influence: Influence) -> None:
    """The five most influential units, and what the largest strata carry and could hide."""
    step = _step({"se": influence.se, "upper": math.nan, "lower": math.nan})
    table = _new_table(["unit", "stratum", "map", "reference", "of variance", "estimate without it"])
    for row in _records(influence.units.head(5)):
        table.add_row(
            row["unit"],
            row["stratum"],
            row["map"],
            row["reference"],
            _percent(row["variance_share"]),
            rounded(row["without"], step),
        )
    _show(
        console, f"Units that carry {name} ({rounded(influence.value, step)}, SE {rounded(influence.se, step)})", table
    )
    if "hidden_ha" not in influence.strata:
        return
    table = _new_table(
        [
            "stratum",
            "n",
            "seen",
            "of variance",
            "one unit, ha",
            "could hide, ha",
            "more to double",
            "more to lose the map",
        ]
    )
    for row in _records(influence.strata.sort_values("area_ha", ascending=False, kind="stable").head(6)):
        whole = [rounded(row[c], 1) for c in ("omissions_to_double", "omissions_to_lose_map")]
        table.add_row(
            row["stratum"],
            f"{row['n']:,}",
            rounded(row["seen"], 1),
            _percent(row["variance_share"]),
            rounded(row["one_unit_ha"], 0.1),
            rounded(row["hidden_ha"], 1),
            *whole,
        )
    _show(console, f"Largest strata and what they could hide (one-sided bound at {influence.level:.0%})", table)


# -- numbers ----------------------------------------------------------------------------------------------


def _step(row: Row) -> float:
    """Precision to show: two figures of the SE, or of the half-width where there is no SE."""
    scale = row["se"]
    if not (math.isfinite(scale) and scale > 0):
        scale = (row["upper"] - row["lower"]) / 2
    if not (math.isfinite(scale) and scale > 0):
        return 1.0
    return float(min(10.0 ** (math.floor(math.log10(scale)) - 1), 1000.0))


def rounded(value: float, step: float, *, sign: bool = False) -> str:
    """Write a number to a precision of `step` (a power of ten); a dash for what is not there."""
    if not math.isfinite(value):
        return "–"
    digits = max(0, -round(math.log10(step)))
    shown = round(value / step) * step if step >= 1 else value
    return f"{shown:{'+' if sign else ''},.{digits}f}"


def _limits(row: Row, step: float) -> str:
    if not math.isfinite(row["upper"]):
        return "–"
    return f"{rounded(row['lower'], step)} to {rounded(row['upper'], step)}{MARKS.get(row['interval'], '')}"


def _with_limits(row: Row) -> str:
    if not math.isfinite(row["estimate"]):
        return "not estimable"
    limits = f" ({row['lower']:.3f} to {row['upper']:.3f}){MARKS.get(row['interval'], '')}"
    return f"{row['estimate']:.3f}" + (limits if math.isfinite(row["upper"]) else "")


def _percent(share: float) -> str:
    return f"{100 * share:#.3g} %".replace(". %", " %") if math.isfinite(share) else "–"


# -- tallies ----------------------------------------------------------------------------------------------


def show_tally(console: Console, tally: Tally) -> None:
    """Print transitions, largest first, and what no class covers."""
    for period, rows in tally.transitions.groupby("period", sort=False):
        changed = rows[rows["from"] != rows["to"]].sort_values("area_ha", ascending=False)
        share = changed["area_ha"].sum() / rows["area_ha"].sum()
        title = f"Mapped transitions {period}: {share:.3%} of {rows['area_ha'].sum():,.0f} ha changed class"
        table = _new_table(["from", "to", "pixels", "hectares"])
        for row in _records(changed.head(MOST_CLASSES)):
            table.add_row(str(row["from"]), str(row["to"]), f"{row['units']:,}", f"{row['area_ha']:,.1f}")
        _show(console, title, table)
        if len(changed) > MOST_CLASSES:
            console.print(f"{len(changed) - MOST_CLASSES} smaller transitions are in the files.", style="dim")
    unmapped = tally.unmapped
    if len(unmapped) and unmapped["area_ha"].sum() > 0:
        console.print(f"Without a class at one date or more: {unmapped['area_ha'].sum():,.1f} ha.", style="dim")
    show_notices(console, tally.warnings)
    console.print("Mapped areas are counts: they carry the map's errors and have no interval.", style="dim")
