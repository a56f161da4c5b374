"""One root exception; every message says what is wrong, where, and how to mend it.

ChangeAssessError
├── InputError(ValueError)    a table, legend, raster or option holds something that cannot be used
├── DesignError(ValueError)   the stated sampling design and the data do not fit together
└── FileError(OSError)        a file is missing, unreadable or cannot be written
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from difflib import get_close_matches
from typing import Any


class ChangeAssessError(Exception):
    """Anything that the person who runs the program can mend."""


class InputError(ChangeAssessError, ValueError):
    """Unusable input, with the place where it was found.

    Parameters
    ----------
    message : str
        What is wrong, in one sentence without a full stop at the end being required.
    file, row, column, value : optional
        Where: file name, line of the file (the header is line 1), column name, offending value.
    mend : str
        How to put it right.
    """

    def __init__(
        self,
        message: str,
        *,
        file: str | None = None,
        row: int | None = None,
        column: str | None = None,
        value: object = None,
        mend: str = "",
    ) -> None:
        self.message, self.file, self.row, self.column, self.value, self.mend = (
            message,
            file,
            row,
            column,
            value,
            mend.strip(),
        )
        super().__init__(message)

    def __str__(self) -> str:
        where = [self.file] if self.file else []
        where += [f"row {self.row}"] if self.row is not None else []
        where += [f"column '{self.column}'"] if self.column is not None else []
        text = self.message.rstrip(". ") + "."
        place = ", ".join(where)
        return " ".join(part for part in (f"{place}: {text}" if place else text, self.mend) if part)


class DesignError(ChangeAssessError, ValueError):
    """The sampling design as stated cannot have produced this sample, or does not allow this estimate."""


class FileError(ChangeAssessError, OSError):
    """A file is missing, unreadable, or cannot be written."""


def nearest(word: object, known: Iterable[object]) -> str:
    """Return ``" Did you mean 'x'?"`` for the known word closest to `word`, or an empty string."""
    words = [str(k) for k in known]
    folded = {w.casefold(): w for w in reversed(words)}
    close = get_close_matches(str(word).casefold(), folded, n=1, cutoff=0.5)
    return f" Did you mean '{folded[close[0]]}'?" if close else ""


@dataclass(frozen=True)
class Notice:
    """Something the reader of a result must know: a stable code and the facts that `reporting.texts` words."""

    code: str
    facts: Mapping[str, Any] = field(default_factory=dict)
