"""The study file: its keys are the flags, what is wrong is named, and flags beat it."""

from __future__ import annotations

import hashlib
import json
import typing
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import typer
from commands import SAMPLE, TABLES, change_assess, contents, done, estimates, refused, write
from rasters import write_map

from change_assess.cli import app
from change_assess.errors import FileError, InputError
from change_assess.legend import Legend
from change_assess.study import SCHEMA, read_study
from change_assess.tables import read_legend

STUDY = """format = 1

[study]
title = "Small"
legend = "legend.csv"

[estimate]
sample = "sample.csv"
strata = "strata.csv"
map = ["map"]
reference = ["ref"]
out = "results"
"""
NO_KEYS = {"study", "quiet", "json", "help"}
"""Flags that say how one call behaves, not what the study is."""


@pytest.fixture
def study(tmp_path):
    """A folder with a small sample and its study file; gives the file."""
    return write(tmp_path, TABLES | {"study.toml": STUDY}) / "study.toml"


def amended(study, text: str):
    """Write other text to the study file."""
    study.write_text(text, encoding="utf-8")
    return study


# -- keys and flags ---------------------------------------------------------------------------------------


def parameters(command: str) -> dict[str, object]:
    """Parameters of a command by key: the long flag with underscores, or the name of an argument."""
    found = {}
    for parameter in typer.main.get_command(app).commands[command].params:
        flags = [o for o in parameter.opts if o.startswith("--")]
        found[flags[0].removeprefix("--").replace("-", "_") if flags else parameter.name] = parameter
    return found


@pytest.mark.parametrize("command", [c for c in SCHEMA if c != "study"])
def test_keys_of_a_command_are_its_flags(command):
    """Every flag of a command is a key of its part of the study file, under the flag's name, and none is more."""
    assert set(SCHEMA[command]) == set(parameters(command)) - NO_KEYS
    assert "study" in parameters(command)


def test_commands_without_a_part_of_the_study_file_have_no_study_flag():
    """Only `start`, which writes it, and `demo`, which brings its own, do without the study file."""
    without = set(typer.main.get_command(app).commands) - set(SCHEMA)
    assert without == {"start", "demo"}
    assert not any("study" in parameters(c) for c in without)


def test_shared_keys_serve_several_commands():
    """What stands under [study] is a key of more than one command, and of one kind in all of them."""
    for key, kind in SCHEMA["study"].items():
        kinds = [keys[key] for command, keys in SCHEMA.items() if command != "study" and key in keys]
        assert key == "title" or (len(kinds) > 1 and set(kinds) == {kind})


VALUES = {
    "path": {Path},
    "paths": {list},
    "text": {str},
    "texts": {list, str},
    "number": {float},
    "whole": {int},
    "flag": {bool},
    "legend": {Path},
}


@pytest.mark.parametrize("command", [c for c in SCHEMA if c != "study"])
def test_kinds_of_values_are_those_of_the_flags(command):
    """A key that is a number, a path, a list or true/false in the study file is that as a flag; a,b is a list too."""
    (function,) = [c.callback for c in app.registered_commands if c.callback.__name__ == command]
    hints = typing.get_type_hints(function)
    for key, kind in SCHEMA[command].items():
        (hint,) = set(typing.get_args(hints[parameters(command)[key].name])) - {type(None)}
        assert (typing.get_origin(hint) or hint) in VALUES[kind], key


# -- reading ----------------------------------------------------------------------------------------------


def test_a_study_file_is_read_with_paths_beside_it(study):
    """Paths are relative to the study file, whatever the working folder; other values stay as they are."""
    read = read_study(study)
    options = read.options("estimate")
    assert options["sample"] == str(study.parent / "sample.csv")
    assert options["legend"] == str(study.parent / "legend.csv")
    assert options["map"] == ["map"]
    assert "title" not in options
    assert set(read.options("tally")) == {"legend"}


def test_own_keys_beat_shared_ones(study):
    """A key of the command's own part wins over the same key under [study]."""
    amended(study, STUDY.replace('out = "results"', 'dates = ["b"]').replace('"Small"', '"Small"\ndates = ["a"]'))
    assert read_study(study).options("estimate")["dates"] == ["b"]
    assert read_study(study).options("tally")["dates"] == ["a"]


def test_years_may_be_numbers(study):
    """Dates written as numbers are read as texts."""
    amended(study, STUDY.replace('title = "Small"', "dates = [2016, 2019]"))
    assert read_study(study).options("tally")["dates"] == ["2016", "2019"]


def test_an_inline_legend_is_a_legend(study):
    """The legend may stand in the study file itself; colour and group are optional, codes may have any order."""
    inline = """legend = [
    { code = 2, name = "stable", group = "land" },
    { code = 1, name = "loss", colour = "#ff0000" },
]"""
    amended(study, STUDY.replace('legend = "legend.csv"', inline))
    legend = read_legend(read_study(study).options("estimate")["legend"])
    assert isinstance(legend, Legend)
    assert (legend.codes, legend.names) == ([2, 1], ["stable", "loss"])
    assert [(c.colour, c.group) for c in legend.classes] == [("", "land"), ("#ff0000", "")]
    done("estimate", "--study", study)
    content = json.loads((study.parent / "results" / "estimates.json").read_text(encoding="utf-8"))
    assert content["options"]["legend"] == ["stable", "loss"]
    assert "legend" not in content["inputs"]


def test_a_byte_order_mark_does_not_matter(study):
    """A study file saved with a byte-order mark is read alike."""
    plain = read_study(study)
    study.write_bytes(b"\xef\xbb\xbf" + STUDY.encode())
    assert read_study(study).values == plain.values


WRONG = {
    "unknown key": (('sample = "', 'sampel = "'), "[estimate] has no key 'sampel'", "Did you mean 'sample'?"),
    "flag's spelling for a key": (
        ('out = "results"', 'change-class = ["a=b>c"]'),
        "[estimate] has no key 'change-class'",
        "Did you mean 'change_class'?",
    ),
    "unknown part": (("[estimate]", "[estimates]"), "'estimates' is not a part", "Did you mean '[estimate]'?"),
    "key outside any part": (("format = 1", 'format = 1\ntitle = "x"'), "'title' is not a part", "[study]"),
    "text for a number": (('out = "results"', 'level = "0.9"'), "[estimate] level must be a number", "'0.9'"),
    "text for a switch": (('out = "results"', 'fpc = "no"'), "[estimate] fpc must be true or false", "'no'"),
    "number for a switch": (('out = "results"', "fpc = 0"), "[estimate] fpc must be true or false", "0"),
    "switch for a number": (('out = "results"', "level = true"), "[estimate] level must be a number", "True"),
    "fraction for a whole number": (('out = "results"', "seed = 1.5"), "seed must be a whole number", "1.5"),
    "text for a list": (('map = ["map"]', 'map = "map"'), "[estimate] map must be a list of texts", "'map'"),
    "list for a path": (('sample = "sample.csv"', 'sample = ["a"]'), "sample must be a path in quotes", "['a']"),
    "list of lists": (('map = ["map"]', 'map = [["map"]]'), "[estimate] map must be a list of texts", "[['map']]"),
    "legend of names": (('legend = "legend.csv"', 'legend = ["a", "b"]'), "no code and name", "code = 1"),
    "legend without a code": (('legend = "legend.csv"', 'legend = [{ name = "a" }]'), "no code and name", "code = 1"),
    "newer format": (("format = 1", "format = 2"), "has format 2; this version reads up to 1", "Update change-assess"),
    "no format": (("format = 1\n", ""), "does not say its format", "Add 'format = 1' at the top."),
    "format as text": (("format = 1", 'format = "1"'), "'1' is not a format", "format = 1"),
    "format zero": (("format = 1", "format = 0"), "'0' is not a format", "format = 1"),
    "not TOML": (('title = "Small"', "title = Small"), "this is not a valid study file", "line 4"),
    "a key twice": (('out = "results"', 'out = "a"\nout = "b"'), "this is not a valid study file", "line 13"),
}


@pytest.mark.parametrize(("change", "said", "mend"), WRONG.values(), ids=WRONG)
def test_what_is_wrong_in_a_study_file_is_named(change, said, mend, study):
    """Each fault is one plain line that names the file, what is wrong and how to mend it; nothing is written."""
    text = STUDY.replace(*change)
    assert text != STUDY
    amended(study, text)
    before = contents(study.parent)
    with pytest.raises(InputError) as caught:
        read_study(study)
    assert caught.value.file == "study.toml"
    line = refused("estimate", "--study", study)
    assert line.startswith("study.toml")
    assert said in line
    assert mend in line
    assert contents(study.parent) == before


def test_a_missing_or_unreadable_study_file_is_named(study, tmp_path):
    """A file that is not there, or is not UTF-8, is one plain line."""
    with pytest.raises(FileError, match=r"nowhere\.toml does not exist"):
        read_study(tmp_path / "nowhere.toml")
    study.write_bytes(STUDY.replace("Small", "Größe").encode("latin-1"))
    assert "not UTF-8" in refused("estimate", "--study", study)


def test_the_study_file_is_never_picked_up_unasked(study, monkeypatch):
    """A study.toml in the working folder counts only when it is named."""
    monkeypatch.chdir(study.parent)
    assert "--sample TABLE is missing" in refused("estimate")
    assert "'sample' in the study file" in refused("estimate")


# -- running from it ----------------------------------------------------------------------------------------


def options_of(study, *flags) -> dict:
    """Resolved options of an estimate from the study file."""
    content = json.loads(done("estimate", "--study", study, "--json", *flags).out)
    return content["options"]


def test_the_study_file_alone_runs_the_estimate(study):
    """The study file gives the numbers of the same call in flags, from any working folder."""
    folder = study.parent
    done("estimate", "--study", study)
    flags = ["--sample", folder / "sample.csv", "--strata", folder / "strata.csv", "--map", "map"]
    flags += ["--reference", "ref", "--legend", folder / "legend.csv", "--out", folder / "flags"]
    done("estimate", *flags)
    pd.testing.assert_frame_equal(estimates(folder / "results"), estimates(folder / "flags"))


def test_flag_beats_study_beats_default(study):
    """The level is the flag's, else the study file's, else 0.95; so with the switches and the lists."""
    assert options_of(study)["level"] == 0.95
    amended(study, STUDY + 'level = 0.9\nfpc = false\nkappa = true\nseed = 3\nestimator = "separate"\n')
    stated = options_of(study)
    assert [stated[k] for k in ("level", "fpc", "kappa", "seed", "estimator")] == [0.9, False, True, 3, "separate"]
    flags = ["--level", 0.8, "--fpc", "--no-kappa", "--seed", 0, "--estimator", "combined", "--map", "other=map"]
    given = options_of(study, *flags)
    assert [given[k] for k in ("level", "fpc", "kappa", "seed", "estimator")] == [0.8, True, False, 0, "combined"]
    assert given["map"] == {"other": ["map"]}


def test_a_fault_in_the_study_beaten_by_a_flag_does_not_matter(study):
    """A flag stands in for a value of the study file that could not be used."""
    amended(study, STUDY.replace('sample = "sample.csv"', 'sample = "nowhere.csv"'))
    assert "nowhere.csv does not exist" in refused("estimate", "--study", study)
    done("estimate", "--study", study, "--sample", study.parent / "sample.csv")


def test_the_hash_of_the_study_file_is_recorded(study):
    """The JSON names the study file with its SHA-256, beside those of the tables."""
    done("estimate", "--study", study)
    content = json.loads((study.parent / "results" / "estimates.json").read_text(encoding="utf-8"))
    assert content["inputs"]["study"] == {
        "file": "study.toml",
        "sha256": hashlib.sha256(study.read_bytes()).hexdigest(),
    }
    assert set(content["inputs"]) == {"study", "sample", "strata", "legend"}


def test_other_column_names_in_the_study_file(study):
    """A shared column rule serves the commands that read tables."""
    write(study.parent, {"sample.csv": SAMPLE.replace("unit,", "plot_id,")})
    amended(study, STUDY.replace('title = "Small"', 'column = ["unit=plot_id"]'))
    done("estimate", "--study", study)


def test_map_commands_run_from_a_study_file(tmp_path, monkeypatch):
    """Tally, stratify and draw take maps, dates, legend, recipes, sizes and seed from the study file."""
    first = np.repeat([1, 2], 200).reshape(20, 20).astype("uint8")
    second = first.copy()
    second[:3] = 2
    (tmp_path / "maps").mkdir()
    place = {"crs": "EPSG:6933", "transform": (20, 0, -2_000_000, 0, -20, -3_600_000)}
    for name, codes in (("a.tif", first), ("b.tif", second)):
        write_map(tmp_path / "maps" / name, codes, place=place)
    text = """format = 1
[study]
dates = ["2016", "2019"]
legend = [{ code = 1, name = "forest" }, { code = 2, name = "open" }]
change_class = ["forest loss=forest>*"]
[tally]
maps = ["maps/a.tif", "maps/b.tif"]
out = "tally"
[stratify]
maps = ["maps/a.tif", "maps/b.tif"]
out = "strata"
[draw]
strata_raster = "strata/strata.tif"
strata = "strata/strata.csv"
size = ["forest loss=10", "no change=30"]
raster = ["maps/a.tif", "maps/b.tif"]
seed = 4
out = "sample"
"""
    study = amended(tmp_path / "study.toml", text)
    monkeypatch.chdir(tmp_path / "maps")
    for command in ("tally", "stratify", "draw"):
        done(command, "--study", study, "--quiet")
    transitions = pd.read_csv(tmp_path / "tally" / "transitions.csv")
    assert transitions["period"].unique().tolist() == ["2016-2019"]
    assert dict(zip(transitions["from"] + ">" + transitions["to"], transitions["units"], strict=True)) == {
        "forest>forest": 140,
        "forest>open": 60,
        "open>open": 200,
    }
    sample = pd.read_csv(tmp_path / "sample" / "sample.csv")
    assert sample["stratum"].value_counts().to_dict() == {"no change": 30, "forest loss": 10}
    assert {"map_2016", "map_2019"} <= set(sample.columns)
    assert change_assess("draw", "--study", study, "--seed", 5, "--out", tmp_path / "other", "--quiet").code == 0
    assert not sample["x"].equals(pd.read_csv(tmp_path / "other" / "sample.csv")["x"])
