"""The study file: one TOML file that states a study, for every command.

A key is the flag's name with underscores, under ``[command]``. Keys under ``[study]`` (title, legend, dates,
change_class, column) serve every command that has such a flag. A flag beats the study file, the study file beats the
default. Paths are relative to the study file.
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pandas as pd

from change_assess import files
from change_assess.errors import InputError, nearest

FORMAT = 1

_TYPES: dict[str, tuple[tuple[type, ...], str]] = {
    "path": ((str,), "a path in quotes"),
    "paths": ((list,), "a list of paths in quotes"),
    "text": ((str,), "a text in quotes"),
    "texts": ((list,), "a list of texts in quotes"),
    "number": ((int, float), "a number"),
    "whole": ((int,), "a whole number"),
    "flag": ((bool,), "true or false"),
    "legend": ((str, list), 'a path in quotes, or a list of { code = 1, name = "forest" }'),
}

_SHARED = {"legend": "legend", "dates": "texts", "change_class": "texts", "column": "texts"}

SCHEMA: dict[str, dict[str, str]] = {
    "study": {"title": "text", **_SHARED},
    "tally": {"maps": "paths", "dates": "texts", "legend": "legend", "workers": "whole", "out": "path"},
    "stratify": {
        "maps": "paths",
        "dates": "texts",
        "legend": "legend",
        "change_class": "texts",
        "workers": "whole",
        "out": "path",
    },
    "draw": {
        "strata_raster": "path",
        "strata": "path",
        "size": "texts",
        "raster": "paths",
        "dates": "texts",
        "legend": "legend",
        "seed": "whole",
        "out": "path",
    },
    "reconcile": {
        "sample": "path",
        "labels": "paths",
        "rule": "text",
        "reference": "texts",
        "column": "texts",
        "out": "path",
    },
    "estimate": {
        "sample": "path",
        "strata": "path",
        "clusters": "path",
        "crossing": "path",
        "matrix": "path",
        "matrix_rows": "text",
        "raster": "paths",
        "map": "texts",
        "reference": "texts",
        "dates": "texts",
        "legend": "legend",
        "change_class": "texts",
        "column": "texts",
        "design": "text",
        "estimator": "text",
        "post_stratify": "text",
        "unsampled": "texts",
        "collapse": "texts",
        "fpc": "flag",
        "level": "number",
        "interval": "text",
        "kappa": "flag",
        "influence": "texts",
        "seed": "whole",
        "out": "path",
    },
}
"""Commands, their keys, and the kind of value of each."""


@dataclass(frozen=True)
class Study:
    """A study file as read: values by command, with paths resolved."""

    path: Path
    values: dict[str, dict[str, Any]] = field(default_factory=dict)

    def options(self, command: str) -> dict[str, Any]:
        """Values for one command: its own keys, and the shared ones it knows."""
        shared = {k: v for k, v in self.values.get("study", {}).items() if k in SCHEMA[command]}
        return shared | self.values.get(command, {})


def read_study(path: str | Path) -> Study:
    """Read and check a study file.

    Raises
    ------
    InputError
        For text that is not TOML, a newer format, an unknown command or key (names the nearest known one), or a
        value of the wrong kind.
    FileError
        If the file cannot be read.
    """
    path = Path(path)
    try:
        content = tomllib.loads(files.read_bytes(path).decode("utf-8-sig"))
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"this is not a valid study file ({error})", file=path.name, mend="Mend the line.") from None
    except UnicodeDecodeError:
        raise InputError("the text is not UTF-8", file=path.name, mend="Save the file in UTF-8.") from None
    _check_format(content.pop("format", None), path.name)
    values: dict[str, dict[str, Any]] = {}
    for command, keys in content.items():
        if command not in SCHEMA or not isinstance(keys, Mapping):
            known = [f"[{c}]" for c in SCHEMA]
            raise InputError(
                f"'{command}' is not a part of a study file",
                file=path.name,
                value=command,
                mend=f"Parts are: {', '.join(known)}.{nearest(f'[{command}]', known)}",
            )
        values[command] = {k: _checked(command, k, v, path) for k, v in keys.items()}
    return Study(path, values)


def _check_format(number: object, file: str) -> None:
    if number is None:
        raise InputError(
            "the study file does not say its format", file=file, mend=f"Add 'format = {FORMAT}' at the top."
        )
    if not isinstance(number, int) or isinstance(number, bool) or number < 1:
        raise InputError(f"'{number}' is not a format", file=file, value=number, mend=f"Write 'format = {FORMAT}'.")
    if number > FORMAT:
        raise InputError(
            f"the study file has format {number}; this version reads up to {FORMAT}",
            file=file,
            value=number,
            mend="Update change-assess.",
        )


def _checked(command: str, key: str, value: Any, path: Path) -> Any:
    known = SCHEMA[command]
    if key not in known:
        raise InputError(
            f"[{command}] has no key '{key}'",
            file=path.name,
            column=key,
            value=key,
            mend=f"Keys are: {', '.join(known)}.{nearest(key, known)}",
        )
    kind = known[key]
    types, wanted = _TYPES[kind]
    right = isinstance(value, types) and not (isinstance(value, bool) and kind != "flag")
    if kind in ("paths", "texts"):
        value = [str(v) for v in value] if right and all(isinstance(v, (str, int)) for v in value) else value
        right = right and all(isinstance(v, str) for v in value)
    if not right:
        raise InputError(
            f"[{command}] {key} must be {wanted}", file=path.name, column=key, value=value, mend=f"It is {value!r}."
        )
    if kind == "legend":
        return _legend(value, path)
    return _resolved(value, kind, path.parent)


def _legend(value: Any, path: Path) -> Any:
    if isinstance(value, str):
        return str(path.parent / value)
    if all(isinstance(v, Mapping) and {"code", "name"} <= set(v) for v in value):
        return pd.DataFrame([{k: str(x) for k, x in v.items()} for v in value]).fillna("")
    raise InputError(
        "the legend lists something that has no code and name",
        file=path.name,
        column="legend",
        mend='Write [ { code = 1, name = "forest" }, … ].',
    )


def _resolved(value: Any, kind: str, folder: Path) -> Any:
    if kind == "path":
        return str(folder / value)
    if kind == "paths":
        return [str(folder / v) for v in value]
    return value
