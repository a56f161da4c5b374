"""The small tables that carry the work from one step to the next: columns, checks on reading, number and label parsing.

All tables are read as text first, so that nothing is guessed: codes stay codes, blanks stay blanks, and each value
that cannot be used is named with its file, row and column.
"""

from __future__ import annotations

import csv
import hashlib
import io
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from change_assess import files
from change_assess.errors import DesignError, InputError, nearest
from change_assess.legend import ARROW, Legend, LegendClass, check_class_name, whole_number

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
KEY_COLUMNS = ESTIMATE_COLUMNS[:8]
LABELLED, OUTSIDE = "labelled", "outside"
STATUS = {
    "labelled": LABELLED,
    "": LABELLED,
    "outside": OUTSIDE,
    "outside the target population": OUTSIDE,
    "not labelled": "",
    "partly labelled": "",
    "not visited yet": "",
    "cannot tell": "",
}
LOOKS_MISSING = {"na", "n/a", "nan", "none", "null", "<null>", "<na>", "-", "?"}


@dataclass(frozen=True)
class Notice:
    """Something the reader of a result must know: a stable code and the facts that `reporting.texts` words."""

    code: str
    facts: Mapping[str, Any] = field(default_factory=dict)


# -- reading ----------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class TextTable:
    """A table as it was read: all columns are text, blank where nothing stood."""

    frame: pd.DataFrame
    file: str
    notices: tuple[Notice, ...] = ()
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
        if whole:
            self._refuse(name, values != np.round(values), "must be a whole number", "Give a count.")
        return values

    def _refuse(self, name: str, wrong: NDArray[np.bool_], what: str, mend: str) -> None:
        for at in np.flatnonzero(wrong)[:1]:
            value = self.frame[name].iloc[at]
            raise InputError(f"'{value}' {what}", file=self.file, row=self.row(at), column=name, value=value, mend=mend)

    def _refuse_number(self, name: str, at: int) -> None:
        value = str(self.frame[name].iloc[at]).strip()
        mend = "Write a plain number such as 1234.5."
        if "," in value:
            mend = "Use a point as the decimal mark and no separator between thousands, as in 1234.5."
        what = "a number is missing" if not value else f"'{value}' is not a number"
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
        table = _read_csv(Path(source))
    if columns:
        table = TextTable(_rename(table, columns), table.file, table.notices)
    table.require(*required)
    if table.frame.empty:
        raise InputError(f"the {what} has no rows", file=table.file, mend="Check that the right file was named.")
    return table


def _rename(table: TextTable, columns: Mapping[str, str]) -> pd.DataFrame:
    theirs = {name: ours for ours, name in columns.items() if name in table.frame.columns and name != ours}
    for name, ours in theirs.items():
        if ours in table.frame.columns:
            raise InputError(
                f"the column '{name}' cannot be taken as '{ours}': there is a column '{ours}' already",
                file=table.file,
                column=ours,
                mend="Rename one of them in the file.",
            )
    return table.frame.rename(columns=theirs)


def _as_text(frame: pd.DataFrame, what: str) -> pd.DataFrame:
    text = {}
    for name in frame.columns[frame.columns.duplicated()][:1]:
        raise InputError(f"two columns are called '{name}'", file=what, column=str(name), mend="Rename one.")
    for name in frame.columns:
        column = frame[name]
        if pd.api.types.is_string_dtype(column) and not column.isna().any():
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


def _read_csv(path: Path) -> TextTable:
    data, notices = _decoded(path)
    header = _header(data, path.name)
    frame = _parsed(data, header, path.name)
    end = len(frame)
    while end and not any(frame.iloc[end - 1]):  # blank lines at the end of the file
        end -= 1
    return TextTable(frame.iloc[:end], path.name, notices)


def _parsed(data: bytes, header: list[str], file: str) -> pd.DataFrame:
    """All fields as text, by pyarrow's CSV reader: nothing is inferred, blank lines stay rows."""
    from pyarrow import ArrowInvalid, py_buffer, string
    from pyarrow import csv as arrow

    if b"\n\n" in data:
        data = re.sub(rb"\n(?=\n)", b"\n" + b"," * (len(header) - 1), data)
    if b', "' in data:
        data = re.sub(rb', +"', b',"', data)
    quoted = b'"' in data
    convert = arrow.ConvertOptions(column_types=dict.fromkeys(header, string()), strings_can_be_null=False)
    parse = arrow.ParseOptions(newlines_in_values=quoted, ignore_empty_lines=len(header) > 1)
    read = arrow.ReadOptions(column_names=header, skip_rows=1, block_size=len(data) + 1 if quoted else 1 << 20)
    try:
        table = arrow.read_csv(py_buffer(data), read_options=read, parse_options=parse, convert_options=convert)
    except ArrowInvalid as error:
        _refuse_ragged(data, len(header), file)
        reason = str(error).splitlines()[0]
        raise InputError(f"the table cannot be read ({reason})", file=file, mend="Save it again as CSV.") from None
    frame: pd.DataFrame = table.to_pandas(types_mapper={string(): pd.StringDtype("pyarrow")}.get)
    return frame


_BOM = b"\xef\xbb\xbf"


def _from_utf16(data: bytes, file: str) -> bytes:
    try:
        return data.decode("utf-16").encode("utf-8")
    except UnicodeDecodeError:
        raise InputError(
            "the text is said to be UTF-16 but is not, or is cut off", file=file, mend="Save it as CSV in UTF-8."
        ) from None


def _decoded(path: Path) -> tuple[bytes, tuple[Notice, ...]]:
    """Bytes of a text file as plain UTF-8 with newlines, and notices of what had to be read past."""
    data, notices = files.read_bytes(path), []
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        data = _from_utf16(data, path.name)
        notices.append(Notice("byte-order-mark", {"file": path.name, "encoding": "UTF-16"}))
    if data.startswith(_BOM):
        data = data[len(_BOM) :].removeprefix(_BOM)
        notices.append(Notice("byte-order-mark", {"file": path.name, "encoding": "UTF-8"}))
    if not data or data.isspace():
        raise InputError("the file is empty", file=path.name, mend="Check that the right file was named.")
    if b"\0" in data:
        raise InputError("this is not a text table", file=path.name, mend="Save it as CSV in UTF-8.")
    try:
        data.decode("utf-8")
    except UnicodeDecodeError as error:
        row = data[: error.start].count(b"\n") + 1
        raise InputError(
            f"the text is not UTF-8 (byte 0x{data[error.start]:02X})",
            file=path.name,
            row=row,
            mend="Save the file as CSV in UTF-8.",
        ) from None
    if b"\r\n" in data:
        data = data.replace(b"\r\n", b"\n")
    if b"\r" in data:
        data = data.replace(b"\r", b"\n")
        notices.append(Notice("carriage-return-lines", {"file": path.name}))
    return data, tuple(notices)


def _header(data: bytes, file: str) -> list[str]:
    line = data.split(b"\n", 1)[0].decode("utf-8").rstrip("\r")
    names = [n.strip() for n in next(csv.reader([line], skipinitialspace=True), [])]
    for delimiter, name in ((";", "semicolons"), ("\t", "tabs"), ("|", "bars")):
        if line.count(delimiter) > line.count(","):
            raise InputError(
                f"the columns are separated by {name}, not by commas",
                file=file,
                row=1,
                value=line[:60],
                mend="Save the table with commas between columns and points as decimal marks.",
            )
    for at, name in enumerate(names):
        if not name:
            raise InputError("a column has no name", file=file, row=1, mend=f"Name column {at + 1} or delete it.")
        if name in names[:at]:
            raise InputError(f"two columns are called '{name}'", file=file, row=1, column=name, mend="Rename one.")
    return names


def _refuse_ragged(data: bytes, columns: int, file: str) -> None:
    """Refuse the first row with more or fewer fields than the header (a decimal comma shows up here)."""
    for row, fields in _csv_rows(data, file):
        if len(fields) != columns and not (len(fields) == 0 or (columns > 1 and not any(fields))):
            comma = " A decimal comma makes two fields of one number: use points." if len(fields) > columns else ""
            raise InputError(
                f"this row has {len(fields)} fields, the header has {columns}",
                file=file,
                row=row,
                mend=f"Complete or quote the row.{comma}",
            )


def _csv_rows(data: bytes, file: str) -> Iterator[tuple[int, list[str]]]:
    reader = csv.reader(io.StringIO(data.decode("utf-8"), newline=""), skipinitialspace=True)
    row = 0
    try:
        for row, fields in enumerate(reader, start=1):
            yield row, fields
    except csv.Error as error:
        raise InputError(
            f"the row cannot be read ({error})",
            file=file,
            row=row + 1,
            mend="Look for a quotation mark that is not closed, or for mixed line ends.",
        ) from None


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
            _refuse_label(*found[word], word, f"'{word}' is not a class code", "Codes are whole numbers.")
    if numeric and len(numeric) < len(found):
        word = next(
            w
            for w in (numeric if len(numeric) * 2 <= len(found) else found)
            if (w in numeric) == (len(numeric) * 2 <= len(found))
        )
        kind = "a code among names" if word in numeric else "a name among codes"
        _refuse_label(*found[word], word, f"'{word}' is {kind}", "Use one kind of label, or give a legend with both.")
    for word, (table, name) in found.items():
        if ARROW in word:
            _refuse_label(
                table,
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


_NUMBER = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?|[+-]?inf")


def _is_number(word: str) -> bool:
    return _NUMBER.fullmatch(word) is not None


def _refuse_label(table: TextTable, column: str, word: str, what: str, mend: str) -> None:
    at = int(np.flatnonzero(table.frame[column].astype(str).str.strip() == word)[0])
    raise InputError(what, file=table.file, row=table.row(at), column=column, value=word, mend=mend)


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
            mend = f"Use a name or code of the legend.{nearest(word, known)}"
            _refuse_label(table, column, word, f"the label '{word}' is not in the legend", mend)
        positions[i] = -1 if position is None else position
    return positions[codes]


# -- the sample -------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Sample:
    """A probability sample and what is known of its population.

    Attributes
    ----------
    units : TextTable
        One row a sample unit.
    strata : DataFrame
        `stratum, units, area_ha[, clusters]`; `units` NaN where only areas are known.
    stratum : ndarray of int, shape (n,)
        Row of `strata` of each unit.
    area_ha : ndarray of float, shape (n,), or None
        Area of each unit where units differ in size.
    clusters : DataFrame or None
        `stratum, cluster, units[, sampled]` of the selected clusters, `stratum` as rows of `strata`.
    cluster : ndarray of int, shape (n,), or None
        Row of `clusters` of each unit.
    crossing : TextTable or None
        Exact areas of map classes, with `units` and `area_ha`.
    design : str
        simple, stratified, cluster or two-stage.
    sample_id : str
        Digest of units and strata; estimates from one sample share it.
    rows : str
        For a sample made from a matrix of counts: what its rows are.
    """

    units: TextTable
    strata: pd.DataFrame
    strata_file: str
    stratum: NDArray[np.intp]
    area_ha: NDArray[np.float64] | None
    clusters: pd.DataFrame | None
    cluster: NDArray[np.intp] | None
    crossing: TextTable | None
    design: str
    sample_id: str
    notices: tuple[Notice, ...] = ()
    rows: str = ""

    @property
    def n(self) -> int:
        """Number of selected units."""
        return len(self.stratum)


DESIGNS = ("simple", "stratified", "cluster", "two-stage")


def read_sample(
    sample: Table,
    strata: Table | None = None,
    *,
    clusters: Table | None = None,
    crossing: Table | None = None,
    columns: Mapping[str, str] | None = None,
    design: str | None = None,
) -> Sample:
    """Read a sample with the tables that describe its population, and check that they fit together.

    Parameters
    ----------
    sample : path or DataFrame
        `unit`, `stratum` (not needed in a simple random sample), optional `cluster`, `area_ha`, `label_status`, and
        label columns of any name.
    strata : path or DataFrame
        `stratum, area_ha` and `units` (population size; without it there is no finite population correction), in
        cluster designs also `clusters`. For a simple random sample a `crossing` table can stand in.
    clusters : path or DataFrame, optional
        `stratum, cluster, units` of each selected cluster.
    crossing : path or DataFrame, optional
        ``[stratum,] <map columns>, units, area_ha``: exact areas of the map.
    columns : mapping of our column name to theirs, optional
    design : {"simple", "stratified", "cluster", "two-stage"}, optional
        Taken from the tables if not given.

    Raises
    ------
    InputError
        For anything in a table that cannot be used: what, where, and how to mend it.
    DesignError
        If the tables contradict the design.
    """
    units = read_table(sample, "sample", required=["unit"], columns=columns)
    _check_unit_ids(units)
    cross = None if crossing is None else read_table(crossing, "crossing table", required=["area_ha"], columns=columns)
    if cross is not None:
        _check_crossing(cross)
    if strata is None:
        frame, strata_file = _one_stratum(cross), cross.file if cross else "strata"
        notices: tuple[Notice, ...] = ()
    else:
        table = read_table(strata, "strata table", required=["stratum", "area_ha"], columns=columns)
        frame, strata_file, notices = _strata_frame(table), table.file, table.notices
    stratum = _strata_of_units(units, frame, strata_file)
    area = units.numbers("area_ha") if "area_ha" in units.frame.columns else None
    cluster_frame, cluster = _read_clusters(clusters, units, frame, stratum, columns)
    kind = _design_kind(design, frame, cluster_frame, cluster)
    _check_population(frame, stratum, strata_file, cluster_frame)
    return Sample(
        units=units,
        strata=frame,
        strata_file=strata_file,
        stratum=stratum,
        area_ha=area,
        clusters=cluster_frame,
        cluster=cluster,
        crossing=cross,
        design=kind,
        sample_id=_sample_id(units, frame),
        notices=(*units.notices, *notices, *(cross.notices if cross else ())),
    )


PLACE_COLUMNS = ("unit", "stratum", "cluster", "area_ha", "x", "y", "longitude", "latitude")
"""Columns that tell one sample from another; labels may be added to a sample without making it another one."""


def _sample_id(units: TextTable, strata: pd.DataFrame) -> str:
    digest = hashlib.sha256(strata.to_csv().encode())
    for name in PLACE_COLUMNS:
        if name in units.frame.columns:
            digest.update(name.encode() + b"\0" + _column_bytes(units.frame[name]))
    return digest.hexdigest()[:16]


def _column_bytes(column: pd.Series[Any]) -> bytes:
    """All texts of a column, one a line."""
    import pyarrow as pa
    from pyarrow import compute

    texts = pa.array(column)
    texts = (texts.combine_chunks() if isinstance(texts, pa.ChunkedArray) else texts).cast(pa.string())
    return bytes(compute.binary_join(pa.ListArray.from_arrays([0, len(texts)], texts), "\n")[0].as_buffer())


def _check_unit_ids(units: TextTable) -> None:
    blank = np.asarray(units.frame["unit"].str.strip() == "")
    for at in np.flatnonzero(blank)[:1]:
        raise InputError("a unit has no id", file=units.file, row=units.row(at), column="unit", mend="Give it one.")
    _refuse_repeats(units, "unit", "Every unit needs an id of its own.")


def _refuse_repeats(table: TextTable, column: str, mend: str) -> None:
    texts = table.frame[column].str.strip()
    repeated = np.asarray(texts.duplicated())
    if repeated.any():
        at = int(np.flatnonzero(repeated)[0])
        value = texts.iloc[at]
        first = int(np.flatnonzero(np.asarray(texts == value))[0])
        raise InputError(
            f"'{value}' stands twice (first in row {table.row(first)})",
            file=table.file,
            row=table.row(at),
            column=column,
            value=value,
            mend=mend,
        )


def _check_crossing(cross: TextTable) -> None:
    cross.numbers("area_ha")
    if "units" in cross.frame.columns:
        cross.numbers("units", whole=True)


def _one_stratum(cross: TextTable | None) -> pd.DataFrame:
    if cross is None:
        raise InputError(
            "no strata table was given",
            mend="Name one with --strata (columns: stratum, units, area_ha); a simple random sample has one row.",
        )
    units = cross.numbers("units").sum() if "units" in cross.frame.columns else np.nan
    return pd.DataFrame({"stratum": ["all"], "units": [units], "area_ha": [cross.numbers("area_ha").sum()]})


def _strata_frame(table: TextTable) -> pd.DataFrame:
    _refuse_repeats(table, "stratum", "Give each stratum one row.")
    frame = pd.DataFrame({"stratum": table.frame["stratum"].astype(str).str.strip()})
    known = "units" in table.frame.columns
    frame["units"] = table.numbers("units", whole=True) if known else np.nan
    frame["area_ha"] = table.numbers("area_ha")
    if "clusters" in table.frame.columns:
        frame["clusters"] = table.numbers("clusters", whole=True)
    return frame


def _strata_of_units(units: TextTable, strata: pd.DataFrame, strata_file: str) -> NDArray[np.intp]:
    if "stratum" not in units.frame.columns:
        if len(strata) == 1:
            return np.zeros(len(units.frame), dtype=np.intp)
        units.require("stratum")
    codes, words = units.words("stratum")
    known = {name: i for i, name in enumerate(strata["stratum"])}
    for word in words:
        if word not in known:
            what = f"the stratum '{word}' is not in {strata_file}" if word else "the unit has no stratum"
            _refuse_label(units, "stratum", word, what, f"Add it to the strata table.{nearest(word, known)}")
    return np.array([known[w] for w in words], dtype=np.intp)[codes]


def _read_clusters(
    source: Table | None,
    units: TextTable,
    strata: pd.DataFrame,
    stratum: NDArray[np.intp],
    columns: Mapping[str, str] | None,
) -> tuple[pd.DataFrame | None, NDArray[np.intp] | None]:
    if source is None:
        return None, None
    units.require("cluster")
    table = read_table(source, "clusters table", required=["stratum", "cluster", "units"], columns=columns)
    _refuse_repeats(table, "cluster", "Give each selected cluster one row, and an id that is unique over all strata.")
    frame = pd.DataFrame({"cluster": table.frame["cluster"].astype(str).str.strip()})
    frame["stratum"] = _strata_of_units(table, strata, "the strata table")
    frame["units"] = table.numbers("units", whole=True)
    if "clusters" not in strata.columns:
        raise InputError(
            "the strata table does not say how many clusters each stratum holds",
            column="clusters",
            mend="Add a column 'clusters': the number of clusters in the population of each stratum.",
        )
    codes, words = units.words("cluster")
    known = {name: i for i, name in enumerate(frame["cluster"])}
    for word in words:
        if word not in known:
            _refuse_label(units, "cluster", word, f"the cluster '{word}' is not in {table.file}", nearest(word, known))
    cluster = np.array([known[w] for w in words], dtype=np.intp)[codes]
    _check_clusters(units, table, frame, stratum, cluster, strata)
    if "sampled" in table.frame.columns:
        frame["sampled"] = table.numbers("sampled", whole=True)
        seen = np.bincount(cluster, minlength=len(frame))
        differs = np.flatnonzero(frame["sampled"].to_numpy() != seen)
        for at in differs[:1]:
            raise InputError(
                f"{table.frame['sampled'].iloc[at]} units are said to be sampled, the sample table holds {seen[at]}",
                file=table.file,
                row=table.row(at),
                column="sampled",
                mend="Correct the count or add the units.",
            )
    return frame, cluster


def _check_clusters(
    units: TextTable,
    table: TextTable,
    frame: pd.DataFrame,
    stratum: NDArray[np.intp],
    cluster: NDArray[np.intp],
    strata: pd.DataFrame,
) -> None:
    crossing = np.flatnonzero(frame["stratum"].to_numpy()[cluster] != stratum)
    for at in crossing[:1]:
        name = frame["cluster"].iloc[cluster[at]]
        raise InputError(
            f"the cluster '{name}' lies in stratum '{strata['stratum'].iloc[frame['stratum'].iloc[cluster[at]]]}' by "
            f"the clusters table, this unit in '{strata['stratum'].iloc[stratum[at]]}'",
            file=units.file,
            row=units.row(at),
            column="cluster",
            value=name,
            mend="A cluster belongs to one stratum. Blocks that cross strata are a simple random sample of clusters: "
            "use one stratum, and the strata as post-strata.",
        )
    seen = np.bincount(cluster, minlength=len(frame))
    for at in np.flatnonzero(seen > frame["units"].to_numpy())[:1]:
        raise InputError(
            f"the cluster holds {frame['units'].iloc[at]:g} units, the sample has {seen[at]} of it",
            file=table.file,
            row=table.row(at),
            column="units",
            mend="Correct the size of the cluster.",
        )


def _design_kind(
    design: str | None, strata: pd.DataFrame, clusters: pd.DataFrame | None, cluster: NDArray[np.intp] | None
) -> str:
    if design is not None and design not in DESIGNS:
        raise InputError(
            f"there is no design '{design}'",
            value=design,
            mend=f"Use one of: {', '.join(DESIGNS)}.{nearest(design, DESIGNS)}",
        )
    if clusters is None or cluster is None:
        if design in ("cluster", "two-stage"):
            raise InputError(f"a {design} design needs the table of selected clusters", mend="Name it with --clusters.")
        found = "simple" if len(strata) == 1 else "stratified"
    else:
        whole = np.bincount(cluster, minlength=len(clusters)) >= clusters["units"].to_numpy()
        found = "cluster" if whole.all() else "two-stage"
    if design is None or design == found or (design, found) in (("stratified", "simple"), ("two-stage", "cluster")):
        return design or found
    why = {
        "simple": f"the strata table has {len(strata)} strata" if clusters is None else "there are clusters",
        "stratified": "a clusters table was given",
        "cluster": "some clusters have fewer units in the sample than in the population",
    }
    raise DesignError(f"The design is said to be {design}, but {why.get(design, 'the tables say ' + found)}.")


def _check_population(
    strata: pd.DataFrame, stratum: NDArray[np.intp], file: str, clusters: pd.DataFrame | None
) -> None:
    checks = [("units", np.bincount(stratum, minlength=len(strata)), "units")]
    if clusters is not None:
        checks.append(("clusters", np.bincount(clusters["stratum"], minlength=len(strata)), "clusters"))
    for column, seen, noun in checks:
        for at in np.flatnonzero(seen > strata[column].to_numpy())[:1]:
            raise InputError(
                f"the stratum '{strata['stratum'].iloc[at]}' holds {strata[column].iloc[at]:g} {noun}, "
                f"but the sample has {seen[at]} of it",
                file=file,
                row=int(at) + 2,
                column=column,
                value=strata[column].iloc[at],
                mend="The population cannot be smaller than the sample: correct the strata table.",
            )


# -- a plain matrix of counts -----------------------------------------------------------------------------


def read_matrix(matrix: Table, strata: Table, *, rows: str, columns: Mapping[str, str] | None = None) -> Sample:
    """Make a sample from a matrix of sample counts: rows are map classes, columns reference classes.

    Parameters
    ----------
    matrix : path or DataFrame
        First column: map class; one more column for each reference class, holding counts.
    strata : path or DataFrame
        `stratum, area_ha[, units]` with one row for each map class.
    rows : {"strata", "post-strata"}
        Whether the map classes were sampling strata, or a simple random (or systematic) sample was drawn and the
        map classes serve as post-strata. The counts alone cannot tell.

    Returns
    -------
    Sample
        With label columns ``map`` and ``reference``.
    """
    if rows not in ("strata", "post-strata"):
        raise InputError(
            "it is not said what the rows of the matrix are",
            value=rows,
            mend="Say 'strata' if units were drawn within map classes, 'post-strata' if they were drawn at random "
            "over the whole area (the standard errors differ).",
        )
    table = read_table(matrix, "matrix")
    names = list(table.frame.columns)
    classes = table.frame[names[0]].astype(str).str.strip()
    _refuse_repeats(table, names[0], "Give each map class one row.")
    counts = np.stack([table.numbers(c, whole=True, positive=False) for c in names[1:]], axis=1)
    if (counts < 0).any():
        row, column = np.argwhere(counts < 0)[0]
        raise InputError(
            "a count is negative", file=table.file, row=table.row(row), column=names[1 + column], mend="Correct it."
        )
    i, j = (np.repeat(a.ravel(), counts.astype(int).ravel()) for a in np.indices(counts.shape))
    map_label, reference = classes.to_numpy()[i], np.array(names[1:], dtype=object)[j]
    units = pd.DataFrame({"unit": np.arange(1, len(i) + 1).astype(str), "map": map_label, "reference": reference})
    for name in {*classes, *names[1:]}:
        check_class_name(name, file=table.file)
    if rows == "strata":
        sample = read_sample(units.assign(stratum=units["map"]), strata, columns=columns)
    else:
        table_of_strata = read_table(strata, "strata table", required=["stratum", "area_ha"], columns=columns)
        cross = table_of_strata.frame.rename(columns={"stratum": "map"})
        sample = read_sample(units, crossing=cross[[c for c in ("map", "units", "area_ha") if c in cross.columns]])
    from dataclasses import replace

    counted = hashlib.sha256(counts.tobytes() + sample.sample_id.encode()).hexdigest()
    return replace(sample, rows=rows, sample_id=counted[:16])


# -- strata from exact areas ------------------------------------------------------------------------------


def strata_from_crossing(crossing: pd.DataFrame, name_of: Mapping[tuple[str, ...], str]) -> pd.DataFrame:
    """Add up a crossing table to strata: `name_of` gives the stratum of each combination of map labels."""
    labels = [c for c in crossing.columns if c not in ("stratum", "units", "area_ha")]
    keys = [tuple(str(v) for v in row) for row in crossing[labels].itertuples(index=False)]
    named = crossing[["units", "area_ha"]].assign(stratum=[name_of[k] for k in keys])
    return named.groupby("stratum", sort=False, as_index=False)[["units", "area_ha"]].sum()
