"""What every command does around its one function: settle options, show progress, say where it went."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from change_assess.errors import InputError

if TYPE_CHECKING:
    from rich.console import Console

Progress = Callable[[int, int], None]


def settled(command: str, study: Path | None, given: Mapping[str, Any]) -> dict[str, Any]:
    """Options of a command: what was given as flags, else what the study file says."""
    flags = {k: v for k, v in given.items() if v is not None and v != []}
    if study is None:
        return flags
    from change_assess.study import read_study

    return read_study(study).options(command) | flags


def require(options: Mapping[str, Any], **flags: str) -> None:
    """Refuse to go on without an option; `flags` maps its key to what to write on the command line."""
    for key, flag in flags.items():
        value = options.get(key)
        if value is None or (isinstance(value, (str, list)) and not value):
            raise InputError(f"{flag} is missing", mend=f"Give it as a flag, or as '{key}' in the study file.")


def parts(text: str | Sequence[str] | None) -> list[str] | None:
    """Split "a,b" (a flag) or take a list (the study file)."""
    if text is None:
        return None
    return [p.strip() for p in text.split(",") if p.strip()] if isinstance(text, str) else [str(t) for t in text]


def pairs(rules: Sequence[str], flag: str) -> dict[str, str]:
    """Read "NAME=VALUE" rules."""
    found = {}
    for rule in rules:
        name, equals, value = (p.strip() for p in rule.partition("="))
        if not (name and equals and value):
            raise InputError(f"'{rule}' cannot be read", value=rule, mend=f"Write {flag} NAME=VALUE.")
        found[name] = value
    return found


def console(*, quiet: bool) -> Console:
    """Console for tables; wide enough for them where the output is no terminal."""
    from rich.console import Console

    width = None if sys.stdout.isatty() else 160
    return Console(quiet=quiet, highlight=False, width=width, soft_wrap=False)


@contextmanager
def progress(label: str, *, quiet: bool) -> Iterator[Progress | None]:
    """Progress bar with rate and time left on standard error; nothing where that is no terminal."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, TaskProgressColumn, TextColumn, TimeRemainingColumn
    from rich.progress import Progress as Bar

    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        TaskProgressColumn(show_speed=True),
        TimeRemainingColumn(),
    )
    with Bar(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(label, total=None)
        yield lambda done, whole: bar.update(task, completed=done, total=whole)


def print_json(content: Any) -> None:
    """Print JSON on standard output."""
    print(content.rstrip() if isinstance(content, str) else json.dumps(content, indent=1, ensure_ascii=False))


def say_written(where: Console, paths: Sequence[Path]) -> None:
    """Say where results went."""
    if paths:
        names = ", ".join(p.name for p in paths[:4]) + (f" and {len(paths) - 4} more" if len(paths) > 4 else "")
        where.print(f"Written to {paths[0].parent}: {names}.", style="green")
