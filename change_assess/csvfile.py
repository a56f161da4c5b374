"""CSV files as tables of text: encodings, line ends, headers and ragged rows are dealt with here.

Nothing is inferred. What can be read without guessing about data is read, and said with a notice; everything else is
refused with its row.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterator
from pathlib import Path

import pandas as pd

from change_assess import files
from change_assess.errors import InputError, Notice


def read_csv(path: Path) -> tuple[pd.DataFrame, str, tuple[Notice, ...]]:
    """Read a CSV file as text.

    Returns
    -------
    frame : DataFrame of str
    file : str
        Name of the file, for messages.
    notices : tuple of Notice
        What was read past: byte-order marks, lone carriage returns.

    Raises
    ------
    InputError
        For an empty or binary file, text that is not UTF-8, wrong delimiters, repeated headers, ragged rows.
    FileError
        If the file cannot be read.
    """
    data, notices = _decoded(path)
    header = _header(data, path.name)
    frame = _parsed(data, header, path.name)
    end = len(frame)
    while end and not any(frame.iloc[end - 1]):  # blank lines at the end of the file
        end -= 1
    return frame.iloc[:end], path.name, notices


def _parsed(data: bytes, header: list[str], file: str) -> pd.DataFrame:
    """All fields as text; blank lines stay rows, so that rows keep their numbers."""
    from pyarrow import ArrowInvalid

    if b'"' in data:
        data = re.sub(rb', +"', b',"', data)
    try:
        return _fields(data, header)
    except ArrowInvalid:
        filled = re.sub(rb"\n(?=\n)", b"\n" + b"," * (len(header) - 1), data)
    try:
        return _fields(filled, header)
    except ArrowInvalid as error:
        _refuse_ragged(data, len(header), file)
        reason = str(error).splitlines()[0]
        raise InputError(f"the table cannot be read ({reason})", file=file, mend="Save it again as CSV.") from None


def _fields(data: bytes, header: list[str]) -> pd.DataFrame:
    """Read by pyarrow, which infers nothing here and refuses rows of another length than the header."""
    from pyarrow import csv as arrow
    from pyarrow import py_buffer, string

    quoted = b'"' in data
    convert = arrow.ConvertOptions(column_types=dict.fromkeys(header, string()), strings_can_be_null=False)
    parse = arrow.ParseOptions(newlines_in_values=quoted, ignore_empty_lines=False)
    block = len(data) + 1 if quoted else 1 << 20
    # without threads: pyarrow's pool can abort a process that ends while it winds down
    read = arrow.ReadOptions(use_threads=False, column_names=header, skip_rows=1, block_size=block)
    table = arrow.read_csv(py_buffer(data), read_options=read, parse_options=parse, convert_options=convert)
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
    if data.startswith(b"PK\x03\x04"):
        raise InputError("this is a workbook or an archive", file=path.name, mend="Save the table as CSV in UTF-8.")
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
    if b"\r" in data:
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
