"""The examples do what they say: their commands, their scripts, and the first lines anyone tries in Python."""

from __future__ import annotations

import json
import os
import re
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest
from commands import contents, done, estimates

import change_assess as ca
from change_assess.engine.estimate import Estimate

EXAMPLES = Path(__file__).parents[1] / "examples"
FOLDERS = sorted(p.parent for p in EXAMPLES.glob("*/README.md"))


@pytest.fixture
def copy(tmp_path, request):
    """A copy of an example's folder, with nothing that an earlier run left there."""
    source = request.param if hasattr(request, "param") else EXAMPLES / "plain_tables"
    return shutil.copytree(source, tmp_path / source.name, ignore=shutil.ignore_patterns("results", "study.toml"))


def blocks(text: str, language: str) -> list[str]:
    """Fenced blocks of one language of a Markdown text."""
    return re.findall(rf"^```{language}\n(.*?)^```", text, flags=re.MULTILINE | re.DOTALL)


def commands(text: str) -> list[str]:
    """Shell lines that call change-assess, continued lines joined."""
    lines = "".join(blocks(text, "sh")).replace("\\\n", " ").splitlines()
    return [line for line in lines if line.startswith("change-assess ")]


each_example = pytest.mark.parametrize("copy", FOLDERS, indirect=True, ids=lambda p: p.name)


@each_example
def test_readme_says_whether_data_are_invented_and_how_to_run(copy):
    """Each example names the origin of its data, and shows commands and the same in Python."""
    text = (copy / "README.md").read_text(encoding="utf-8")
    assert re.search(r"invented|licen[cs]e", text, flags=re.IGNORECASE)
    assert commands(text)
    assert blocks(text, "python")
    assert (copy / "run.py").exists()


@each_example
def test_commands_of_the_readme_run(copy, monkeypatch):
    """The shell lines run in order, in a fresh copy of the folder."""
    monkeypatch.chdir(copy)
    for line in commands((copy / "README.md").read_text(encoding="utf-8")):
        done(*shlex.split(line)[1:])
    assert (copy / "results" / "estimates.csv").exists()


@each_example
def test_python_of_the_readme_runs(copy, monkeypatch):
    """The Python lines run as they stand."""
    monkeypatch.chdir(copy)
    for block in blocks((copy / "README.md").read_text(encoding="utf-8"), "python"):
        exec(compile(block, "README.md", "exec"), {})


@each_example
def test_run_py_prints_what_the_readme_shows(copy, tmp_path):
    """run.py works from any folder, prints the lines of the README, and writes beside itself."""
    environment = os.environ | {"PYTHONPATH": str(Path(ca.__file__).parents[1])}
    command = [sys.executable, str(copy / "run.py")]
    ran = subprocess.run(command, capture_output=True, text=True, check=False, cwd=tmp_path, env=environment)
    assert (ran.returncode, ran.stderr) == (0, "")
    (shown,) = blocks((copy / "README.md").read_text(encoding="utf-8"), "text")
    assert ran.stdout == shown
    assert (copy / "results" / "estimates.csv").exists()


def test_shell_and_python_give_the_same_tables(copy, monkeypatch):
    """The first command of the README and run.py write the same tables; so does the study file."""
    monkeypatch.chdir(copy)
    first, *_, start, from_study = commands((copy / "README.md").read_text(encoding="utf-8"))
    done(*shlex.split(first)[1:])
    by_flags = contents(copy / "results")
    result = ca.estimate("sample.csv", strata="strata.csv", map="map", reference="ref")
    result.save(copy / "python")
    done(*shlex.split(start)[1:])
    done(*shlex.split(from_study)[1:])
    for written in (contents(copy / "python"), contents(copy / "results")):
        assert set(written) == set(by_flags)
        for name in (n for n in written if n.endswith(".csv")):
            assert written[name] == by_flags[name], name


def test_figures_named_in_the_readme_are_right(copy):
    """What the README points out is what the tables hold."""
    result = ca.estimate(copy / "sample.csv", strata=copy / "strata.csv", map="map", reference="ref")
    text = " ".join((copy / "README.md").read_text(encoding="utf-8").split())
    shares = result.select().joint_share
    total = result.total_area_ha
    seen, missed = (float(shares(m, "forest loss") * total) for m in ("forest loss", "stable forest"))
    assert f"that alone would make {seen:,.0f} ha" in text
    assert f"The other {missed:,.0f} ha rest on **one** unit" in text
    parts = result["forest loss"].area_ha.variance_by_stratum()
    assert parts[2] / parts.sum() > 0.95
    counts = result.select().counts()
    assert counts.loc["forest loss"].sum() == 70
    assert counts.loc["stable forest", "forest loss"] == 1
    assert counts["forest gain"].drop("forest gain").sum() == 0


def test_the_lines_for_strangers(copy, monkeypatch):
    """The lines in the package's docstring run on two plain tables and give what they promise."""
    monkeypatch.chdir(copy)
    lines = [line[4:] for line in ca.__doc__.splitlines() if line.startswith("    ")]
    assert lines[:3] == [
        "import change_assess as ca",
        'sample = ca.read_sample("sample.csv", strata="strata.csv")',
        'result = ca.estimate(sample, map="map", reference="ref")',
    ]
    values = {"my_function": lambda t: t.both[..., 0] / t.everything}
    found = []
    for line in lines:
        for statement in line.split("; "):
            try:
                code = compile(statement, "docstring", "eval")
            except SyntaxError:
                exec(statement, values)
            else:
                found.append(eval(code, values))
    table, interval, share, own = found
    assert isinstance(table, pd.DataFrame)
    assert table.columns[0] == "measure"
    loss = values["loss"]
    assert (round(loss.value), round(loss.se)) == (1285, 296)
    assert interval.lower < loss.value < interval.upper
    assert interval.level == 0.90
    assert isinstance(share, Estimate)
    assert share.value == pytest.approx(loss.value / 62_000)
    assert share.se == pytest.approx(loss.se / 62_000)
    assert isinstance(own, Estimate)
    assert 0 < own.value < 1


def test_inputs_of_the_lines_for_strangers_may_be_frames(copy):
    """DataFrames do wherever paths do, and are not altered."""
    sample, strata = (pd.read_csv(copy / f"{name}.csv") for name in ("sample", "strata"))
    before = sample.copy(), strata.copy()
    by_frames = ca.estimate(ca.read_sample(sample, strata=strata), map="map", reference="ref")
    by_paths = ca.estimate(copy / "sample.csv", strata=copy / "strata.csv", map="map", reference="ref")
    pd.testing.assert_frame_equal(by_frames.table, by_paths.table)
    pd.testing.assert_frame_equal(sample, before[0])
    pd.testing.assert_frame_equal(strata, before[1])
    by_paths.save(copy / "saved")
    assert len(estimates(copy / "saved")) == len(by_paths.table)
    assert json.loads(by_paths.to_json())["inputs"] == {}
