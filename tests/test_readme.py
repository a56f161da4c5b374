"""The README says what is true: its commands, its first result, its list of commands."""

from __future__ import annotations

import re
import shutil
import tomllib
from pathlib import Path

from commands import done

from change_assess import __version__
from change_assess.cli import app

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def block(language: str) -> str:
    """First fenced block of a language."""
    return re.search(rf"```{language}\n(.*?)```", README, re.S).group(1)


def test_the_first_result_is_what_is_printed(tmp_path, monkeypatch):
    """The README's first result is what its command prints, line by line."""
    for name in ("sample.csv", "strata.csv"):
        shutil.copy(ROOT / "examples" / "plain_tables" / name, tmp_path)
    command = re.search(r"^change-assess (estimate --sample sample.csv.*)$", README, re.M).group(1)
    monkeypatch.chdir(tmp_path)
    printed = [line.rstrip() for line in done(*command.split()).out.splitlines()]
    shown = block("text").splitlines()
    start = printed.index(shown[0])
    assert printed[start : start + len(shown)] == shown
    assert (tmp_path / "results" / "estimates.csv").exists()


def test_every_command_is_listed():
    """The README's table of commands holds all commands and no other."""
    table = README.partition("| command | does |")[2].partition("\n\n")[0]
    listed = re.findall(r"^\| `(\w+)[^|]*` \|", table, re.M)
    assert listed == [command.callback.__name__ for command in app.registered_commands]


def test_the_two_commands_come_first():
    """The first block of shell sets up and runs the demo, then sets up and runs the tests."""
    demo, tests = block("sh").strip().splitlines()
    assert demo.endswith(".venv/bin/change-assess demo demo")
    assert tests.endswith("'.[test]' && .venv/bin/pytest")


def test_versions_agree():
    """The version of the package is that of pyproject.toml, and has its change notes."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    assert project["version"] == __version__
    assert f"### {__version__}" in README


def test_the_developers_guide_maps_every_room():
    """Each module and folder of the package stands in the guide's map of the code."""
    guide = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    package = ROOT / "change_assess"
    rooms = {p.name + ("/" if p.is_dir() else "") for p in package.iterdir() if not p.name.startswith("_")}
    rooms -= {"LICENSE", "py.typed"}
    assert {room for room in rooms if f"`{room}`" not in guide} == set()
