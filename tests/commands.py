"""Run `change-assess` inside the test's own process, and small tables to run it on."""

from __future__ import annotations

import contextlib
import io
import sys
from dataclasses import dataclass
from pathlib import Path
from unittest import mock

import pandas as pd

from change_assess.cli import main

SAMPLE = """unit,stratum,map,ref
u1,loss,loss,loss
u2,loss,loss,stable
u3,loss,loss,loss
u4,stable,stable,stable
u5,stable,stable,loss
u6,stable,stable,stable
u7,stable,stable,stable
"""
STRATA = """stratum,units,area_ha
loss,100,9.5
stable,900,85.25
"""
LEGEND = "code,name\n1,loss\n2,stable\n"
TABLES = {"sample.csv": SAMPLE, "strata.csv": STRATA, "legend.csv": LEGEND}


@dataclass(frozen=True)
class Outcome:
    """What a command left behind: exit code and what it printed."""

    code: int
    out: str
    err: str


def change_assess(*arguments: object) -> Outcome:
    """Run one command; only its own exits are caught, so that a traceback fails the test."""
    out, err = io.StringIO(), io.StringIO()
    command_line = ["change-assess", *map(str, arguments)]
    with (
        mock.patch.object(sys, "argv", command_line),
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
    ):
        try:
            main()
            code = 0
        except SystemExit as end:
            code = int(end.code or 0)
    return Outcome(code, out.getvalue(), err.getvalue())


def done(*arguments: object) -> Outcome:
    """Run a command that must succeed."""
    outcome = change_assess(*arguments)
    assert (outcome.code, outcome.err) == (0, ""), outcome.err
    return outcome


def refused(*arguments: object) -> str:
    """Run a command that must refuse its input: exit code 1, nothing printed but one plain line; give that line."""
    outcome = change_assess(*arguments)
    assert outcome.code == 1, outcome
    assert outcome.out == ""
    assert outcome.err.startswith("change-assess: ")
    assert outcome.err.count("\n") == 1
    assert outcome.err.endswith("\n")
    return outcome.err.removeprefix("change-assess: ").rstrip("\n")


def write(folder: Path, tables: dict[str, str | bytes]) -> Path:
    """Write texts or bytes to files of a folder, and give the folder."""
    for name, content in tables.items():
        (folder / name).write_bytes(content if isinstance(content, bytes) else content.encode("utf-8"))
    return folder


def estimate_flags(folder: Path, **other: object) -> list[object]:
    """Flags of `estimate` for the small tables in a folder; a flag that is None is left out."""
    flags = {"sample": folder / "sample.csv", "strata": folder / "strata.csv", "map": "map", "reference": "ref"}
    return as_flags(flags | other)


def as_flags(flags: dict[str, object]) -> list[object]:
    """Write a mapping as flags: lists repeat, True is a bare flag, None is left out."""
    words: list[object] = []
    for name, value in flags.items():
        flag = f"--{name.replace('_', '-')}"
        if value is True:
            words.append(flag)
        elif value is not None:
            words += [w for v in (value if isinstance(value, list) else [value]) for w in (flag, v)]
    return words


def estimates(folder: Path) -> pd.DataFrame:
    """Rows of `estimates.csv`, blanks of the key columns as empty texts."""
    table = pd.read_csv(folder / "estimates.csv")
    text = pd.read_csv(folder / "estimates.csv", dtype=str, keep_default_na=False)
    for name in ("estimate", "se", "df", "lower", "upper"):  # to the last digit, whatever pandas' own reader does
        table[name] = [float(v) if v else float("nan") for v in text[name]]
    keys = list(table.columns[:8])
    return table.astype(dict.fromkeys(keys, object)).fillna(dict.fromkeys(keys, "")).astype(dict.fromkeys(keys, str))


def contents(folder: Path) -> dict[str, bytes]:
    """Bytes of every file below a folder, hidden ones included."""
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}
