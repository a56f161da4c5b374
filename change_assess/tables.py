"""Tables of text: columns, numbers and labels, each parsed where its meaning is known.

All tables are read as text first, so that nothing is guessed: codes stay codes, blanks stay blanks, and each value
that cannot be used is named with its file, row and column.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, NoReturn

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from change_assess.csvfile import read_csv
from change_assess.errors import InputError, Notice, nearest
from change_assess.legend import ARROW, Legend, LegendClass, whole_number

Table = str | Path | pd.DataFrame
LegendSource = Table | Legend | Sequence[str]
ESTIMATE_COLUMNS = [
    "measure",
    "depth",
    "class",
    "against",
    "map",
    "reference",
    "period",
    "domain",
    "estimate",
    "se",
    "df",
    "lower",
    "upper",
    "level",
    "interval",
    "n",
]
LARGEST = 1e15
"""Above this, counts are no longer exact in double precision, and areas are larger than the Earth."""

LOOKS_MISSING = {"na", "n/a", "nan", "none", "null", "<null>", "<na>", "-", "?"}


# -- reading ----------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class TextTable:
    """A table as it was read: all columns are text, blank where nothing stood."""

    frame: pd.DataFrame
    file: str
    notices: tuple[Notice, ...] = ()
    renamed: frozenset[str] = frozenset()
    _words: dict[str, tuple[NDArray[np.intp], list[str]]] = field(default_factory=dict, repr=False)

    def require(self, *names: str) -> None:
        """Refuse the table if one of the columns is missing."""
        for name in names:
            if name not in self.frame.columns:
                raise InputError(
                    f"there is no column '{name}'",
                    file=self.file,
                    column=name,
                    mend=f"The columns are: {', '.join(map(str, self.frame.columns))}."
                    f"{nearest(name, self.frame.columns)} Use --column {name}=THEIR_NAME for another name.",
                )

    def row(self, position: int) -> int:
        """Row of the file (the header is row 1) for a position in the frame."""
        return int(position) + 2

    def numbers(self, name: str, *, whole: bool = False, positive: bool = True) -> NDArray[np.float64]:
        """Read one column as numbers, shape (n,); whole and positive (above zero) if asked."""
        text = self.frame[name]
        values = np.array(pd.to_numeric(text, errors="coerce"), dtype=float)
        bad = ~np.isfinite(values)
        if bad.any():
            self._refuse_number(name, int(np.flatnonzero(bad)[0]))
        wrong = (values <= 0) if positive else np.zeros(len(values), bool)
        if wrong.any():
            self._refuse(name, wrong, "must be greater than zero", "Give its true size, or leave the row out.")
        self._refuse(name, np.abs(values) > LARGEST, "is too large for a count or an area", "Correct it.")
        if whole:
            self._refuse(name, values != np.round(values), "must be a whole number", "Give a count.")
        return values

    def _refuse(self, name: str, wrong: NDArray[np.bool_], what: str, mend: str) -> None:
        for at in np.flatnonzero(wrong)[:1]:
            self.refuse_word_at(name, int(at), f"'{self.frame[name].iloc[at]}' {what}", mend)

    def _refuse_number(self, name: str, at: int) -> None:
        value = str(self.frame[name].iloc[at]).strip()
        mend = "Write a plain number such as 1234.5."
        if "," in value:
            mend = "Use a point as the decimal mark and no separator between thousands, as in 1234.5."
        self.refuse_word_at(name, at, f"'{value}' is not a number" if value else "a number is missing", mend)

    def refuse_word(self, name: str, word: str, what: str, mend: str) -> NoReturn:
        """Refuse a text of a column, naming the first row that holds it."""
        at = int(np.flatnonzero(np.asarray(self.frame[name].str.strip() == word))[0])
        self.refuse_word_at(name, at, what, mend)

    def refuse_blanks(self, name: str, what: str, mend: str) -> None:
        """Refuse a column in which nothing stands in some row."""
        for at in np.flatnonzero(np.asarray(self.frame[name].str.strip() == ""))[:1]:
            raise InputError(what, file=self.file, row=self.row(at), column=name, mend=mend)

    def refuse_repeats(self, name: str, mend: str) -> None:
        """Refuse a column in which a text stands twice."""
        texts = self.frame[name].str.strip()
        if in_strict_order(texts):  # none can stand twice
            return
        for at in np.flatnonzero(np.asarray(texts.duplicated()))[:1]:
            first = int(np.flatnonzero(np.asarray(texts == texts.iloc[at]))[0])
            what = f"'{texts.iloc[at]}' stands twice (first in row {self.row(first)})"
            self.refuse_word_at(name, int(at), what, mend)

    def refuse_word_at(self, name: str, at: int, what: str, mend: str) -> NoReturn:
        """Refuse the text of a column at a position of the frame."""
        value = str(self.frame[name].iloc[at]).strip()
        raise InputError(what, file=self.file, row=self.row(at), column=name, value=value, mend=mend)

    def words(self, name: str) -> tuple[NDArray[np.intp], list[str]]:
        """Distinct texts of a column (stripped) and the position of each row's text among them."""
        if name not in self._words:
            self._words[name] = self._distinct(name)
        return self._words[name]

    def _distinct(self, name: str) -> tuple[NDArray[np.intp], list[str]]:
        codes, distinct = pd.factorize(self.frame[name], use_na_sentinel=False)
        stripped = [str(w).strip() for w in distinct]
        if len(set(stripped)) == len(stripped):
            return codes, stripped
        unique = list(dict.fromkeys(stripped))
        return np.array([unique.index(w) for w in stripped], dtype=np.intp)[codes], unique


def in_strict_order(texts: pd.Series[Any]) -> bool:
    """Whether each text comes after the one before it."""
    before, after = texts.iloc[:-1].reset_index(drop=True), texts.iloc[1:].reset_index(drop=True)
    return bool((after > before).all())


def read_table(
    source: Table, what: str = "table", *, required: Sequence[str] = (), columns: Mapping[str, str] | None = None
) -> TextTable:
    """Read a CSV, GeoPackage or GeoParquet file, or take a DataFrame, as a table of text.

    Parameters
    ----------
    source : path or DataFrame
    what : str
        What to call a DataFrame in messages.
    required : sequence of str
        Columns that must be there.
    columns : mapping of our column name to theirs, optional
        Applied where the table has their name.

    Raises
    ------
    InputError
        For an empty file, a wrong delimiter, ragged rows, repeated headers, text that is not UTF-8, missing columns.
    FileError
        For a missing or unreadable file.
    """
    if isinstance(source, pd.DataFrame):
        table = TextTable(_as_text(source, what), what)
    elif Path(source).suffix.lower() in (".gpkg", ".parquet", ".geoparquet"):
        from change_assess import vectors

        table = TextTable(_as_text(vectors.read_attributes(source), what), Path(source).name)
    else:
        table = TextTable(*read_csv(Path(source)))
    if columns:
        frame, renamed = _rename(table, columns)
        table = TextTable(frame, table.file, table.notices, renamed)
    table.require(*required)
    if table.frame.empty:
        raise InputError(f"the {what} has no rows", file=table.file, mend="Check that the right file was named.")
    return table


def _rename(table: TextTable, columns: Mapping[str, str]) -> tuple[pd.DataFrame, frozenset[str]]:
    """The frame under our column names, and which of ours stand in it by their name."""
    found = frozenset(ours for ours, name in columns.items() if name in table.frame.columns)
    theirs = {name: ours for ours, name in columns.items() if name in table.frame.columns and name != ours}
    for name, ours in theirs.items():
        if ours in table.frame.columns:
            raise InputError(
                f"the column '{name}' cannot be taken as '{ours}': there is a column '{ours}' already",
                file=table.file,
                column=ours,
                mend="Rename one of them in the file.",
            )
    return table.frame.rename(columns=theirs), found


def _as_text(frame: pd.DataFrame, what: str) -> pd.DataFrame:
    text = {}
    for name in frame.columns[frame.columns.duplicated()][:1]:
        raise InputError(f"two columns are called '{name}'", file=what, column=str(name), mend="Rename one.")
    for name in frame.columns:
        column = frame[name]
        text_already = pd.api.types.is_string_dtype(column) and not isinstance(column.dtype, pd.CategoricalDtype)
        if text_already and not column.isna().any():
            text[str(name)] = column.reset_index(drop=True)
        else:
            text[str(name)] = pd.Series([_cell_text(v) for v in column.tolist()], dtype=object)
    return pd.DataFrame(text)


def _cell_text(value: Any) -> str:
    if isinstance(value, np.generic):
        value = value.item()
    if value is None or value is pd.NA or value is pd.NaT or (isinstance(value, float) and np.isnan(value)):
        return ""
    if isinstance(value, float):
        return str(int(value)) if value.is_integer() and abs(value) < 1e15 else repr(value)
    return str(value)


# -- legend -----------------------------------------------------------------------------------------------


def read_legend(source: LegendSource) -> Legend:
    """Read a legend: a table `code, name[, colour][, group]`, a sequence of class names, or a Legend as it is.

    Raises
    ------
    InputError
        For codes that are not whole numbers, repeated codes or names, and names that hold ``>``.
    """
    if isinstance(source, Legend):
        return source
    if not isinstance(source, (str, Path, pd.DataFrame)):
        return Legend.of_names(list(source))
    table = read_table(source, "legend", required=["code", "name"])
    codes = table.numbers("code", whole=True, positive=False).astype(int)
    extra = [
        table.frame[c] if c in table.frame else pd.Series("", index=table.frame.index) for c in ("colour", "group")
    ]
    rows = zip(codes.tolist(), table.frame["name"], *extra, strict=True)
    return Legend(tuple(LegendClass(c, n.strip(), k.strip(), g.strip()) for c, n, k, g in rows), table.file)


def legend_of_labels(tables: Sequence[tuple[TextTable, Sequence[str]]]) -> Legend:
    """Legend of the labels that occur in some columns: codes in numeric order, or names in alphabetical order.

    Raises
    ------
    InputError
        For a number that is no whole code, codes mixed with names, or ``>`` in a name.
    """
    found: dict[str, tuple[TextTable, str]] = {}
    for table, names in tables:
        for name in names:
            found |= {w: (table, name) for w in table.words(name)[1] if w and w not in found}
    numeric = {w: whole_number(w) for w in found if _is_number(w)}
    for word, code in numeric.items():
        if code is None:
            table, name = found[word]
            table.refuse_word(name, word, f"'{word}' is not a class code", "Codes are whole numbers.")
    if numeric and len(numeric) < len(found):
        _refuse_mixture(found, set(numeric))
    for word, (table, name) in found.items():
        if ARROW in word:
            table.refuse_word(
                name,
                word,
                f"the label '{word}' holds '{ARROW}', which stands between two dates' classes",
                "Give the two classes in two columns (--map FIRST,SECOND), or rename the label.",
            )
    if numeric:
        return Legend(
            tuple(LegendClass(code, str(code)) for code in sorted({c for c in numeric.values() if c is not None}))
        )
    return Legend.of_names(sorted(found))


def _refuse_mixture(found: Mapping[str, tuple[TextTable, str]], codes: set[str]) -> NoReturn:
    """Refuse codes mixed with names: the kind that is rarer is taken for the mistake."""
    rare = codes if 2 * len(codes) <= len(found) else set(found) - codes
    word = next(w for w in found if w in rare)
    table, name = found[word]
    kind = "a code among names" if word in codes else "a name among codes"
    table.refuse_word(name, word, f"'{word}' is {kind}", "Use one kind of label, or give a legend with both.")


_NUMBER = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?|[+-]?inf")


def _is_number(word: str) -> bool:
    return _NUMBER.fullmatch(word) is not None


def label_codes(table: TextTable, column: str, legend: Legend) -> NDArray[np.intp]:
    """Position in the legend of each label of a column, shape (n,); -1 where there is none.

    Raises
    ------
    InputError
        For a label that is neither a name nor a code of the legend; names the nearest one.
    """
    table.require(column)
    codes, words = table.words(column)
    positions = np.full(len(words), -1, dtype=np.intp)
    for i, word in enumerate(words):
        position = legend.index(word) if word else None
        if word and position is None:
            known = [*legend.names, *map(str, legend.codes)]
            near = (
                nearest(word, known)
                or f" It holds: {', '.join(legend.names[:8])}{', …' if len(legend.names) > 8 else ''}."
            )
            mend = f"Use a name or code of the legend.{near}"
            table.refuse_word(column, word, f"the label '{word}' is not in the legend", mend)
        positions[i] = -1 if position is None else position
    return positions[codes]
