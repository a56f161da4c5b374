"""Merge the labels that interpreters returned into one reference label per sample unit and date.

Nothing is dropped in silence: units without labels stay in the sample and say so in ``label_status``, and units on
which interpreters differ are listed with every label that was given.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np
import pandas as pd

from change_assess.errors import InputError, Notice, nearest
from change_assess.files import write_together
from change_assess.tables import Table, TextTable, read_table

Rule = Literal["first", "majority"]

LABELLED, PARTLY, UNLABELLED = "labelled", "partly labelled", "not labelled"
"""Values of ``label_status``: a label at every date, at some dates only, at none."""


@dataclass(frozen=True)
class Reconciled:
    """The sample with its reference labels, and how far interpreters agreed.

    Attributes
    ----------
    sample : DataFrame
        The rows and columns of the sample under their own names, then the reference columns (empty = not labelled)
        and ``label_status``.
    disagreements : DataFrame
        One row per interpreter and unit on which complete labels differ: ``unit, interpreter``, the label columns,
        ``taken`` (True where these labels went into the sample) and ``tied`` (True where the rule "majority" found
        no single most frequent label series).
    counts : dict of str to int
        Numbers of ``units, labelled, partly, unlabelled``, and among units that two or more interpreters labelled
        completely (``with_repeats``) those ``agreeing`` at every date and ``disagreeing``.
    warnings : tuple of Notice
        Stable codes with their numbers.
    """

    sample: pd.DataFrame
    disagreements: pd.DataFrame
    counts: dict[str, int]
    warnings: tuple[Notice, ...] = ()

    def save(self, folder: str | Path) -> list[Path]:
        """Write `labelled_sample.csv` and `disagreements.csv`; both or neither."""
        tables = {"labelled_sample.csv": self.sample, "disagreements.csv": self.disagreements}
        texts = {Path(folder) / name: t.to_csv(index=False, lineterminator="\n") for name, t in tables.items()}
        write_together(texts)
        return list(texts)


@dataclass(frozen=True)
class _Choice:
    """The labels taken for one unit, whose they are, and whether the majority was tied."""

    labels: tuple[str, ...]
    interpreter: str
    tied: bool = False


def reconcile(
    sample: Table,
    labels: Sequence[Table] | Table,
    *,
    rule: Rule = "first",
    reference: Sequence[str] | None = None,
    columns: Mapping[str, str] | None = None,
    changed: tuple[str, str, str] | None = None,
) -> Reconciled:
    """Merge label tables into a sample.

    Parameters
    ----------
    sample : DataFrame or path
        One row a sample unit, with a column ``unit``; not altered.
    labels : sequence of DataFrame or path
        Long tables, one row per unit and interpreter: ``unit, interpreter`` and a label column per date. An empty
        label is "not labelled".
    rule : {"first", "majority"}
        Where several interpreters labelled a unit: take the first of them (I2 comes before I10) who labelled all
        dates, or the label series given most often (a tie goes to the first interpreter and is listed).
    reference : sequence of str, optional
        Label columns, in order of time. By default the columns whose names start with ``ref``.
    columns : mapping, optional
        The tables' own names for ``unit`` and ``interpreter``, for example ``{"unit": "unit_id"}``.
    changed : (column, yes, no), optional
        A column in which interpreters ticked whether the unit changed, and its two words; contradictions with the
        labels become a warning.

    Returns
    -------
    Reconciled

    Raises
    ------
    InputError
        For missing columns, repeated sample units, labels of unknown units, two different labels of one unit by one
        interpreter, or a sample that already holds labels in a reference column.

    Examples
    --------
    >>> sample = pd.DataFrame({"unit": ["a", "b"]})
    >>> labels = pd.DataFrame({"unit": ["a", "a", "b"], "interpreter": ["I1", "I2", "I1"],
    ...                        "ref_2016": ["forest"] * 3, "ref_2019": ["forest", "crop", ""]})
    >>> merged = reconcile(sample, labels)
    >>> merged.sample["label_status"].tolist()
    ['labelled', 'partly labelled']
    >>> merged.counts["disagreeing"]
    1
    """
    if rule not in ("first", "majority"):
        raise InputError(f"'{rule}' is not a rule for merging labels", value=rule, mend="Use 'first' or 'majority'.")
    tables = [labels] if isinstance(labels, (pd.DataFrame, str, Path)) else list(labels)
    if not tables:
        raise InputError("there are no label tables", mend="Give at least one table of returned labels.")
    frame = sample.reset_index(drop=True) if isinstance(sample, pd.DataFrame) else read_table(sample, "sample").frame
    units, sample_name = _read_units(sample, columns)
    pieces = [_read_labels(t, i, reference, columns, changed) for i, t in enumerate(tables, start=1)]
    dates = _same_columns(pieces)
    given = pd.concat([piece.frame for piece in pieces], ignore_index=True)
    _check_units(given, units, sample_name)
    given, repeated = _without_repeats(given, dates)
    choices = _choose(given, dates, rule)
    merged = _fill(frame, units, choices, dates, sample_name)
    disagreements, counts = _compare(given, choices, dates, units)
    counts = _status_counts(merged) | counts
    return Reconciled(merged, disagreements, counts, tuple(_warnings(given, choices, dates, changed, counts, repeated)))


# --- reading ---------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Labels:
    """One label table with text cells, its label columns, and where each row stood (``file``, ``row``)."""

    file: str
    frame: pd.DataFrame
    dates: list[str]


def _filled(table: TextTable, column: str) -> list[str]:
    """Cells of a key column, stripped; none may be empty."""
    cells = _stripped(table.frame[column])
    if "" in cells:
        at = cells.index("")
        raise InputError(
            f"the {column} is empty",
            file=table.file,
            row=table.row(at),
            column=column,
            mend="Fill it in or remove the row.",
        )
    return cells


def _stripped(column: pd.Series) -> list[str]:
    return [str(cell).strip() for cell in column]


def _read_units(sample: Table, columns: Mapping[str, str] | None) -> tuple[list[str], str]:
    """Unit names in the order of the sample, and the name of the table."""
    table = read_table(sample, "sample", required=["unit"], columns=columns)
    units = _filled(table, "unit")
    seen: dict[str, int] = {}
    for position, unit in enumerate(units):
        if unit in seen:
            raise InputError(
                f"unit '{unit}' stands twice in the sample (first in row {seen[unit]})",
                file=table.file,
                row=table.row(position),
                column="unit",
                value=unit,
                mend="Keep one row a unit.",
            )
        seen[unit] = table.row(position)
    return units, table.file


def _read_labels(
    source: Table,
    number: int,
    reference: Sequence[str] | None,
    columns: Mapping[str, str] | None,
    changed: tuple[str, str, str] | None,
) -> _Labels:
    table = read_table(source, f"labels table {number}", required=["unit", "interpreter"], columns=columns)
    dates = _label_columns(table.frame, reference, table.file)
    wanted = dates + ([changed[0]] if changed else [])
    table.require(*wanted)
    keys = {key: _filled(table, key) for key in ("unit", "interpreter")}
    cells = {column: _stripped(table.frame[column]) for column in wanted}
    places: dict[str, object] = {" file": table.file, " row": np.arange(len(table.frame)) + 2}
    return _Labels(table.file, pd.DataFrame({**keys, **cells, **places}), dates)


def _label_columns(frame: pd.DataFrame, reference: Sequence[str] | None, file: str) -> list[str]:
    if reference is not None:
        return [reference] if isinstance(reference, str) else list(reference)
    found = [str(c) for c in frame.columns if str(c).casefold().startswith("ref")]
    if not found:
        raise InputError(
            "no column name starts with 'ref'", file=file, mend="Name the label columns (reference=[…]), one a date."
        )
    return found


def _same_columns(pieces: Sequence[_Labels]) -> list[str]:
    first = pieces[0]
    for piece in pieces[1:]:
        if set(piece.dates) != set(first.dates):
            odd = sorted(set(piece.dates) ^ set(first.dates))[0]
            raise InputError(
                f"its label columns are {', '.join(piece.dates)}, those of {first.file} are {', '.join(first.dates)}",
                file=piece.file,
                column=odd,
                mend="Give every label table the same label columns.",
            )
    return first.dates


def _check_units(given: pd.DataFrame, units: Sequence[str], sample_name: str) -> None:
    unknown = np.flatnonzero(~given["unit"].isin(units).to_numpy())
    if unknown.size:
        row = given.iloc[unknown[0]]
        more = f" ({unknown.size} rows name unknown units)" if unknown.size > 1 else ""
        raise InputError(
            f"unit '{row['unit']}' is not in the {sample_name}{more}",
            file=str(row[" file"]),
            row=int(row[" row"]),
            column="unit",
            value=row["unit"],
            mend=f"Correct the unit, or give the sample these labels belong to.{nearest(row['unit'], units)}",
        )


def _without_repeats(given: pd.DataFrame, dates: Sequence[str]) -> tuple[pd.DataFrame, int]:
    """One row per unit and interpreter, and the number of rows that only repeated or completed another one."""
    keys = ["unit", "interpreter"]
    merged = given.copy()
    for _, rows in given[given.duplicated(keys, keep=False)].groupby(keys, sort=False):
        for column in dates:
            filled = rows[rows[column] != ""].drop_duplicates(column)
            if len(filled) > 1:
                raise _two_labels(filled.iloc[0], filled.iloc[1], column)
            if len(filled):
                merged.loc[rows.index, column] = filled[column].iloc[0]
    single = merged.drop_duplicates(keys).reset_index(drop=True)
    return single, len(merged) - len(single)


def _two_labels(first: pd.Series, second: pd.Series, column: str) -> InputError:
    return InputError(
        f"interpreter {second['interpreter']} labelled unit '{second['unit']}' twice: '{second[column]}' here, "
        f"'{first[column]}' in {first[' file']}, row {first[' row']}",
        file=str(second[" file"]),
        row=int(second[" row"]),
        column=column,
        value=second[column],
        mend="Keep the row that holds.",
    )


# --- choosing --------------------------------------------------------------------------------------------------------


def natural_key(text: str) -> tuple[tuple[int, int, str], ...]:
    """Sort key in which numbers inside a word count as numbers: I2 before I10."""
    parts = re.findall(r"\d+|\D+", text)
    return tuple((0, int(p), "") if p.isdecimal() else (1, 0, p.casefold()) for p in parts)


def _choose(given: pd.DataFrame, dates: Sequence[str], rule: Rule) -> dict[str, _Choice]:
    """The labels to take for each unit that has any."""
    series = list(given[list(dates)].itertuples(index=False, name=None))
    rows: dict[str, list[_Choice]] = {}
    for unit, interpreter, labels in zip(given["unit"], given["interpreter"], series, strict=True):
        if any(labels):
            rows.setdefault(unit, []).append(_Choice(labels, interpreter))
    return {unit: _pick(offers, rule) for unit, offers in rows.items()}


def _pick(offers: list[_Choice], rule: Rule) -> _Choice:
    """Among complete label series if there are any: the first interpreter's, or the most frequent."""
    complete = [o for o in offers if all(o.labels)] or offers
    ordered = sorted(complete, key=lambda o: (natural_key(o.interpreter), o.interpreter))
    if rule == "first":
        return ordered[0]
    votes = Counter(o.labels for o in ordered)
    most = max(votes.values())
    leading = [o for o in ordered if votes[o.labels] == most]
    return _Choice(leading[0].labels, leading[0].interpreter, tied=len({o.labels for o in leading}) > 1)


def _fill(
    frame: pd.DataFrame,
    units: Sequence[str],
    choices: Mapping[str, _Choice],
    dates: Sequence[str],
    sample_name: str,
) -> pd.DataFrame:
    """The sample with reference columns and ``label_status``."""
    for column in dates:
        if column in frame.columns and any(_stripped(frame[column].fillna(""))):
            raise InputError(
                "the sample already holds labels",
                file=sample_name,
                column=column,
                mend="Give the sample as it was drawn, or remove this column.",
            )
    merged = frame.drop(columns=[*(c for c in dates if c in frame.columns)])
    merged = merged.drop(columns="label_status", errors="ignore")
    empty = _Choice(("",) * len(dates), "")
    taken = [choices.get(unit, empty).labels for unit in units]
    for position, column in enumerate(dates):
        merged[column] = [labels[position] for labels in taken]
    merged["label_status"] = [LABELLED if all(labels) else PARTLY if any(labels) else UNLABELLED for labels in taken]
    return merged


# --- comparing -------------------------------------------------------------------------------------------------------


def _compare(
    given: pd.DataFrame, choices: Mapping[str, _Choice], dates: Sequence[str], units: Sequence[str]
) -> tuple[pd.DataFrame, dict[str, int]]:
    """Rows on which interpreters differ, and how many units were labelled completely by two or more."""
    wanted = list(dates)
    complete = given[(given[wanted] != "").all(axis=1)]
    people = Counter(complete["unit"])
    kinds = Counter(complete.drop_duplicates(["unit", *wanted])["unit"])
    repeats = [unit for unit, times in people.items() if times > 1]
    differing = [unit for unit, times in kinds.items() if times > 1]
    rows = complete.loc[complete["unit"].isin(differing), ["unit", "interpreter", *wanted]]
    place = {unit: i for i, unit in enumerate(units)}
    keys = [(place[u], natural_key(p)) for u, p in zip(rows["unit"], rows["interpreter"], strict=True)]
    rows = rows.iloc[sorted(range(len(rows)), key=keys.__getitem__)].reset_index(drop=True)
    series = list(rows[wanted].itertuples(index=False, name=None))
    rows["taken"] = [choices[u].labels == s for u, s in zip(rows["unit"], series, strict=True)]
    rows["tied"] = [choices[u].tied for u in rows["unit"]]
    counts = {
        "with_repeats": len(repeats),
        "agreeing": len(repeats) - len(differing),
        "disagreeing": len(differing),
    }
    return rows, counts


def _status_counts(merged: pd.DataFrame) -> dict[str, int]:
    status = merged["label_status"]
    kinds = {"labelled": LABELLED, "partly": PARTLY, "unlabelled": UNLABELLED}
    return {"units": len(merged), **{name: int((status == word).sum()) for name, word in kinds.items()}}


def _warnings(
    given: pd.DataFrame,
    choices: Mapping[str, _Choice],
    dates: Sequence[str],
    changed: tuple[str, str, str] | None,
    counts: Mapping[str, int],
    repeated: int,
) -> list[Notice]:
    found: list[Notice] = []
    if counts["unlabelled"] or counts["partly"]:
        found.append(Notice("units-without-labels", {"none": counts["unlabelled"], "some_dates": counts["partly"]}))
    if counts["disagreeing"]:
        found.append(Notice("interpreters-differ", {"units": counts["disagreeing"], "of": counts["with_repeats"]}))
    tied = [unit for unit, choice in choices.items() if choice.tied]
    if tied:
        found.append(Notice("labels-tied", {"units": len(tied), "examples": tied[:5]}))
    if repeated:
        found.append(Notice("label-rows-repeated", {"rows": repeated}))
    if changed:
        found += _contradictions(given, dates, changed)
    return found


def _contradictions(given: pd.DataFrame, dates: Sequence[str], changed: tuple[str, str, str]) -> list[Notice]:
    """Rows whose tick for "changed" does not fit their own labels."""
    column, yes, no = changed
    complete = given[(given[list(dates)] != "").all(axis=1)]
    differs = complete[list(dates)].ne(complete[dates[0]], axis=0).any(axis=1)
    ticked = complete[column]
    wrong = ((ticked == yes) & ~differs) | ((ticked == no) & differs)
    if not wrong.any():
        return []
    details: dict[str, object] = {
        "ticked_but_same": int(((ticked == yes) & ~differs).sum()),
        "not_ticked_but_different": int(((ticked == no) & differs).sum()),
        "units": complete.loc[wrong, "unit"].tolist(),
    }
    return [Notice("changed-tick-contradicts-labels", details)]
