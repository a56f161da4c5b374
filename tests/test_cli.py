"""The command line: help, exit codes, one plain line for what is at fault, and the files that it writes."""

from __future__ import annotations

import hashlib
import json
import subprocess
import sys
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pytest
from commands import (
    SAMPLE,
    STRATA,
    TABLES,
    as_flags,
    change_assess,
    contents,
    done,
    estimate_flags,
    estimates,
    refused,
    write,
)
from oracle import CASES, Case
from rasterio.transform import Affine
from rasters import write_map

import change_assess as ca

COMMANDS = ("demo", "start", "tally", "stratify", "draw", "reconcile", "estimate")
COLUMNS = [
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
EQUAL_AREA = {"crs": "EPSG:6933", "transform": Affine(20, 0, -2_000_000, 0, -20, -3_600_000)}
PIXEL_HA = 0.04


@pytest.fixture
def tables(tmp_path):
    """A folder with a small sample, its strata and a legend."""
    return write(tmp_path, TABLES)


# -- help and exit codes ----------------------------------------------------------------------------------


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_has_help_with_an_example(command):
    """Help says what a command does, lists its flags and shows how to call it."""
    text = done(command, "--help").out
    assert f"Example: change-assess {command} " in " ".join(text.split())
    assert "--help" in text


def test_help_lists_every_command():
    """`--help` names all commands, and there is no other one."""
    listed = done("--help").out.split("Commands:")[1].split("\n")
    assert {line.split()[0] for line in listed if line.strip() and line[2:3].strip()} == set(COMMANDS)


def test_version_is_printed():
    """`--version` prints the version of the package and stops."""
    assert done("--version").out == f"change-assess {ca.__version__}\n"


@pytest.mark.parametrize(
    "arguments",
    [
        ["estimat"],
        ["estimate", "--sampel", "sample.csv"],
        ["estimate", "--level", "high"],
        ["estimate", "--sample"],
        ["estimate", "sample.csv"],
        ["draw", "strata.tif", "--seed", "1.5"],
        ["demo"],
    ],
)
def test_wrong_usage_is_exit_code_two(arguments):
    """An unknown command or flag, a missing value or a word for a number is wrong usage."""
    outcome = change_assess(*arguments)
    assert outcome.code == 2
    assert outcome.out == ""
    assert "Error:" in outcome.err
    assert "Traceback" not in outcome.err


@pytest.mark.parametrize(
    ("arguments", "missing"),
    [
        (["estimate"], "--sample TABLE"),
        (["estimate", "--sample", "s.csv", "--strata", "t.csv"], ""),
        (["estimate", "--matrix", "m.csv"], "--strata TABLE"),
        (["tally"], "FIRST.tif SECOND.tif"),
        (["stratify", "a.tif", "b.tif"], "--legend TABLE"),
        (["draw", "strata.tif", "--strata", "s.csv", "--size", "a=2", "--out", "o"], "--seed NUMBER"),
        (["reconcile", "--sample", "s.csv"], "--labels TABLE"),
        (["start"], "there is nothing to start from"),
    ],
)
def test_what_is_missing_is_named(arguments, missing, tmp_path, monkeypatch):
    """A command without what it needs says which flag, in one line."""
    monkeypatch.chdir(tmp_path)
    assert missing in refused(*arguments)
    assert contents(tmp_path) == {}


def test_exit_codes_and_streams_of_the_real_process(tables):
    """As a process too: results go to standard output, faults as one line to standard error, codes are 0, 1 and 2."""

    def run(*arguments):
        return subprocess.run(
            [sys.executable, "-m", "change_assess", *map(str, arguments)], capture_output=True, text=True, check=False
        )

    good = run("estimate", *estimate_flags(tables))
    assert (good.returncode, good.stderr) == (0, "")
    assert "Area of classes, hectares" in good.stdout
    bad = run("estimate", *estimate_flags(tables, map="mapp"))
    assert (bad.returncode, bad.stdout) == (1, "")
    assert bad.stderr.startswith("change-assess: sample.csv, column 'mapp': there is no column 'mapp'.")
    assert bad.stderr.count("\n") == 1
    assert run("estimate", "--nonsense").returncode == 2


# -- what is refused --------------------------------------------------------------------------------------


def without_labels(sample: str) -> str:
    head, *rows = sample.splitlines()
    return "\n".join([head, *(row.rsplit(",", 1)[0] + "," for row in rows)]) + "\n"


CODED = SAMPLE.replace(",loss,loss\n", ",1,1\n").replace(",loss,stable\n", ",1,2\n")
CODED = CODED.replace(",stable,stable\n", ",2,2\n").replace(",stable,loss\n", ",2,1\n")
MATRIX = "map,loss,stable\nloss,2,1\nstable,1,3\n"
TWO_DATES = SAMPLE.replace("map,ref", "map_2016,ref_2016").replace("\n", ",loss\n").replace("6,loss", "6,ref_2019", 1)

BAD_INPUT = {
    "unknown label": (
        {"sample.csv": SAMPLE.replace("u5,stable,stable,loss", "u5,stable,stable,los")},
        {"legend": "legend.csv"},
        ("sample.csv, row 6, column 'ref': the label 'los' is not in the legend.", "Did you mean 'loss'?"),
    ),
    "duplicate ids": (
        {"sample.csv": SAMPLE.replace("u3,", "u1,")},
        {},
        ("sample.csv, row 4, column 'unit': 'u1' stands twice (first in row 2).",),
    ),
    "stratum missing from the strata table": (
        {"strata.csv": STRATA.replace("stable,900,85.25\n", "")},
        {},
        ("sample.csv, row 5, column 'stratum': the stratum 'stable' is not in strata.csv.",),
    ),
    "stratum missing from the sample": (
        {"strata.csv": STRATA + "water,50,4.75\n"},
        {},
        ("1 of 3 strata have no labelled unit (water): 5 ha, 4.8% of the area.", "--unsampled exclude"),
    ),
    "fewer units than sampled": (
        {"strata.csv": STRATA.replace("900", "3")},
        {},
        ("strata.csv, row 3, column 'units': the stratum 'stable' holds 3 units, but the sample has 4 of it.",),
    ),
    "negative area": (
        {"strata.csv": STRATA.replace("9.5", "-9.5")},
        {},
        ("strata.csv, row 2, column 'area_ha': '-9.5' must be greater than zero.",),
    ),
    "zero area": (
        {"strata.csv": STRATA.replace("9.5", "0")},
        {},
        ("strata.csv, row 2, column 'area_ha': '0' must be greater than zero.",),
    ),
    "empty sample": ({"sample.csv": ""}, {}, ("sample.csv: the file is empty.",)),
    "empty strata table": ({"strata.csv": ""}, {}, ("strata.csv: the file is empty.",)),
    "semicolons": (
        {"sample.csv": SAMPLE.replace(",", ";")},
        {},
        ("sample.csv, row 1: the columns are separated by semicolons, not by commas.",),
    ),
    "decimal comma, quoted": (
        {"strata.csv": STRATA.replace("9.5", '"9,5"')},
        {},
        ("strata.csv, row 2, column 'area_ha': '9,5' is not a number.", "Use a point as the decimal mark"),
    ),
    "decimal comma, bare": (
        {"strata.csv": STRATA.replace("9.5", "9,5")},
        {},
        ("strata.csv, row 2: this row has 4 fields, the header has 3.", "use points"),
    ),
    "half a code": (
        {"sample.csv": CODED.replace("u4,stable,2,2", "u4,stable,2,2.5")},
        {},
        ("sample.csv, row 5, column 'ref': '2.5' is not a class code.", "whole numbers"),
    ),
    "half a code, with a legend": (
        {"sample.csv": CODED.replace("u4,stable,2,2", "u4,stable,2,2.5")},
        {"legend": "legend.csv"},
        ("sample.csv, row 5, column 'ref': the label '2.5' is not in the legend.",),
    ),
    "codes among names": (
        {"sample.csv": SAMPLE.replace("u7,stable,stable,stable", "u7,stable,stable,2")},
        {},
        ("sample.csv, row 8, column 'ref': '2' is a code among names.",),
    ),
    "no labels": ({"sample.csv": without_labels(SAMPLE)}, {}, ("sample.csv: no unit has its reference label.",)),
    "unknown map column": (
        {},
        {"map": "mapp"},
        ("sample.csv, column 'mapp': there is no column 'mapp'.", "Did you mean 'map'?"),
    ),
    "unknown reference column": (
        {},
        {"reference": "truth"},
        ("there is no column 'truth'.", "unit, stratum, map, ref"),
    ),
    "missing file": ({}, {"sample": "nowhere.csv"}, ("nowhere.csv does not exist.",)),
    "a folder for a file": ({}, {"strata": "."}, ("cannot be read",)),
    "level as a percentage": ({}, {"level": 95}, ("the confidence level 95 is not between 0.5 and 1.",)),
    "level one": ({}, {"level": 1}, ("the confidence level 1 is not between 0.5 and 1.",)),
    "unknown interval": ({}, {"interval": "norml"}, ("no interval method 'norml'.", "Did you mean 'normal'?")),
    "unknown estimator": ({}, {"estimator": "seperate"}, ("there is no estimator 'seperate'.", "separate")),
    "unknown design": ({}, {"design": "stratifed"}, ("no design 'stratifed'.", "Did you mean 'stratified'?")),
    "unknown way to post-stratify": (
        {"crossing.csv": "map,units,area_ha\nloss,100,9.5\nstable,900,85.25\n"},
        {"post_stratify": "cell", "crossing": "crossing.csv"},
        ("'cell' is no way to post-stratify.", "cells, margins"),
    ),
    "post-strata without totals": ({}, {"post_stratify": "cells"}, ("--crossing",)),
    "clusters without their table": ({}, {"design": "cluster"}, ("--clusters",)),
    "unknown rule for unsampled strata": ({}, {"unsampled": "drop"}, ("'drop' does not say what to do",)),
    "unreadable rule for columns": ({}, {"column": "unit"}, ("'unit' cannot be read.", "--column NAME=VALUE")),
    "matrix without the meaning of its rows": (
        {"matrix.csv": MATRIX},
        {"matrix": "matrix.csv", "sample": None, "map": None, "reference": None},
        ("it is not said what the rows of the matrix are.", "strata", "post-strata"),
    ),
    "two maps of one name": ({}, {"map": ["map", "map"]}, ("two maps are called 'map'.",)),
    "two maps of one given name": ({}, {"map": ["a=map", "a=ref"]}, ("two maps are called 'a'.",)),
    "fewer map columns than dates": (
        {"sample.csv": TWO_DATES},
        {"map": "map_2016", "reference": "ref_2016,ref_2019"},
        ("map 'map_2016' has 1 columns, the reference 2.",),
    ),
    "more dates than columns": ({}, {"dates": "2016,2019"}, ("2 dates were given for 1 reference columns.",)),
    "unknown class in a recipe": (
        {"sample.csv": TWO_DATES},
        {"map": None, "reference": "ref_2016,ref_2019", "change_class": "x=los>*"},
        ("names 'los'", "Did you mean 'loss'?"),
    ),
    "unreadable recipe": (
        {"sample.csv": TWO_DATES},
        {"map": None, "reference": "ref_2016,ref_2019", "change_class": "loss"},
        ("the change class 'loss' cannot be read.",),
    ),
}
PATHS = ("sample", "strata", "legend", "crossing", "matrix")


@pytest.mark.parametrize(("files", "flags", "said"), BAD_INPUT.values(), ids=BAD_INPUT)
def test_bad_input_is_one_plain_line_and_nothing_is_written(files, flags, said, tables):
    """What is at fault is said in one line with its place and remedy; earlier results stay, new ones are not begun."""
    write(tables, files)
    kept = tables / "results" / "estimates.csv"
    kept.parent.mkdir()
    kept.write_text("of an earlier run\n")
    before = contents(tables)
    flags = {k: tables / v if k in PATHS and isinstance(v, str) else v for k, v in flags.items()}
    for folder in (kept.parent, tables / "new"):
        line = refused("estimate", *estimate_flags(tables, **flags, out=folder))
        for part in said:
            assert part in line
    assert contents(tables) == before
    assert not (tables / "new").exists()


def test_a_folder_that_cannot_be_made_is_one_plain_line(tables):
    """Where results cannot be written this is said, and no file is half written."""
    before = contents(tables)
    outcome = change_assess("estimate", *estimate_flags(tables, quiet=True, out=tables / "sample.csv" / "results"))
    assert outcome.code == 1
    assert "cannot be written" in outcome.err
    assert outcome.err.count("\n") == 1
    assert contents(tables) == before


# -- what is merely odd -----------------------------------------------------------------------------------

ODD_FILES = {
    "byte-order mark": (b"\xef\xbb\xbf" + SAMPLE.encode(), "begins with a byte-order mark (UTF-8)"),
    "UTF-16": (SAMPLE.encode("utf-16"), "begins with a byte-order mark (UTF-16)"),
    "carriage returns alone": (SAMPLE.replace("\n", "\r").encode(), "ends lines with carriage returns alone"),
}


@pytest.mark.parametrize(("content", "said"), ODD_FILES.values(), ids=ODD_FILES)
def test_odd_files_give_identical_numbers_and_a_notice(content, said, tables):
    """A byte-order mark or old line ends change no number, and it is said that they were there."""
    done("estimate", *estimate_flags(tables, out=tables / "plain"))
    write(tables, {"sample.csv": content})
    outcome = done("estimate", *estimate_flags(tables, out=tables / "odd"))
    assert f"! sample.csv {said}" in outcome.out
    plain, odd = contents(tables / "plain"), contents(tables / "odd")
    assert plain.pop("estimates.json") != odd.pop("estimates.json")
    assert plain == odd


def test_windows_line_ends_are_not_worth_a_word(tables):
    """CRLF is an ordinary line end: same numbers, no notice."""
    done("estimate", *estimate_flags(tables, out=tables / "plain"))
    write(tables, {"sample.csv": SAMPLE.replace("\n", "\r\n"), "strata.csv": STRATA.replace("\n", "\r\n")})
    assert "carriage" not in done("estimate", *estimate_flags(tables, out=tables / "windows")).out
    assert estimates(tables / "plain").equals(estimates(tables / "windows"))


def test_whole_number_floats_are_codes(tables):
    """2.0 is the code 2, with and without a legend."""
    write(tables, {"sample.csv": CODED})
    done("estimate", *estimate_flags(tables, out=tables / "whole"))
    write(tables, {"sample.csv": CODED.replace("1\n", "1.0\n").replace("2\n", "2.0\n")})
    done("estimate", *estimate_flags(tables, out=tables / "floats"))
    assert estimates(tables / "whole").equals(estimates(tables / "floats"))


# -- what is printed --------------------------------------------------------------------------------------


def test_tables_are_printed_for_people(tables):
    """Without flags for machines the areas, accuracies, matrices and cautions are printed."""
    text = done("estimate", *estimate_flags(tables)).out
    for part in (
        "Stratified sample: 7 units, 7 with reference labels, 2 strata, 95 ha; 5 degrees of freedom; with finite",
        "Area of classes, hectares",
        "95% interval",
        "Accuracy of classes",
        "rows the map, columns the reference",
        "They say nothing about a single parcel.",
    ):
        assert part in text


def test_json_prints_json_only(tables):
    """With --json all of standard output is one JSON document."""
    content = json.loads(done("estimate", *estimate_flags(tables, json=True)).out)
    assert content["format"] == 1
    assert len(content["estimates"]) > 20


def test_json_and_out_agree(tables):
    """What --json prints is what estimates.json holds."""
    outcome = done("estimate", *estimate_flags(tables, json=True, out=tables / "results"))
    assert outcome.out == (tables / "results" / "estimates.json").read_text(encoding="utf-8")


def test_quiet_prints_nothing(tables):
    """With --quiet the results are written and nothing is printed."""
    assert done("estimate", *estimate_flags(tables, quiet=True, out=tables / "results")).out == ""
    assert (tables / "results" / "estimates.csv").exists()


# -- what is written --------------------------------------------------------------------------------------


@pytest.fixture
def results(tables):
    """Results of the small sample."""
    done("estimate", *estimate_flags(tables, legend=tables / "legend.csv", out=tables / "results"))
    return tables / "results"


def test_out_writes_these_files(results):
    """Estimates as CSV and JSON, the account of the strata, and both matrices; no left-overs."""
    assert set(contents(results)) == {
        "estimates.csv",
        "estimates.json",
        "strata_account.csv",
        "matrix-sample-counts-map-label.csv",
        "matrix-area-shares-map-label.csv",
    }


def test_estimates_csv_has_its_columns_and_key(results):
    """The columns are those of the design, in its order; the first eight name each row uniquely."""
    table = estimates(results)
    assert list(table.columns) == COLUMNS
    assert not table.duplicated(COLUMNS[:8]).any()
    assert (results / "estimates.csv").read_bytes().count(b"\r") == 0


def test_estimates_json_holds_the_same_rows_and_the_trail(results):
    """The JSON has the numbers of the CSV, the resolved options, versions, hashes of the inputs and warnings."""
    content = json.loads((results / "estimates.json").read_text(encoding="utf-8"))
    table = estimates(results)
    assert content["format"] == 1
    rows = pd.DataFrame(content["estimates"])
    assert list(rows.columns) == COLUMNS
    for name in COLUMNS:
        numeric = name in COLUMNS[8:14] or name == "n"
        left, right = rows[name], table[name]
        if numeric:
            np.testing.assert_array_equal(left.astype(float), right.astype(float))
        else:
            assert left.fillna("").tolist() == right.fillna("").tolist()
    assert set(content["versions"]) >= {"change-assess", "python", "numpy", "scipy", "pandas"}
    assert content["versions"]["change-assess"] == ca.__version__
    options = content["options"]
    assert options["map"] == {"map": ["map"]}
    assert options["reference"] == ["ref"]
    assert options["legend"] == ["loss", "stable"]
    assert (options["fpc"], options["level"], options["interval"], options["estimator"]) == (
        True,
        0.95,
        "default",
        "combined",
    )
    folder = results.parent
    assert content["inputs"] == {
        role: {"file": f"{role}.csv", "sha256": hashlib.sha256((folder / f"{role}.csv").read_bytes()).hexdigest()}
        for role in ("sample", "strata", "legend")
    }
    assert [w["code"] for w in content["warnings"]] == ["near-kink"]
    assert content["design"] == {
        "kind": "stratified",
        "units": 7,
        "df": 5,
        "labelled": 7,
        "area_ha": 94.75,
        "adjustment": "",
    }


def test_strata_account_and_matrices(results):
    """The account lists every stratum, the matrices have the map in rows and add up."""
    account = pd.read_csv(results / "strata_account.csv")
    assert account[["stratum", "units", "area_ha", "selected", "labelled", "role"]].to_numpy().tolist() == [
        ["loss", 100, 9.5, 3, 3, "sampled"],
        ["stable", 900, 85.25, 4, 4, "sampled"],
    ]
    counts = pd.read_csv(results / "matrix-sample-counts-map-label.csv", index_col=0)
    assert counts.to_numpy().tolist() == [[2, 1], [1, 3]]
    assert counts.index.name == "map \\ reference"
    shares = pd.read_csv(results / "matrix-area-shares-map-label.csv", index_col=0)
    assert shares.to_numpy().sum() == pytest.approx(1)
    assert shares.to_numpy().sum(axis=1).tolist() == pytest.approx([9.5 / 94.75, 85.25 / 94.75])


def test_running_twice_gives_the_same_bytes(tables):
    """The same call writes byte-identical files, simulated limits included."""
    flags = estimate_flags(tables, kappa=True, seed=5)
    for name in ("first", "second"):
        done("estimate", *flags, "--out", tables / name)
    assert contents(tables / "first") == contents(tables / "second")


def test_options_reach_the_estimates(tables):
    """Level, finite population correction, interval and kappa do what their flags say."""

    def area_of_loss(**flags):
        done("estimate", *estimate_flags(tables, **flags, out=tables / "results"))
        table = estimates(tables / "results")
        return table[(table["measure"] == "area_ha") & (table["class"] == "loss")].iloc[0]

    plain, infinite = area_of_loss(), area_of_loss(no_fpc=True)
    assert infinite["se"] > plain["se"]
    assert area_of_loss(level=0.9)["upper"] < plain["upper"]
    assert area_of_loss(interval="t")["upper"] > plain["upper"]
    area_of_loss(kappa=True)
    assert "kappa" in set(estimates(tables / "results")["measure"])


# -- forms of input ---------------------------------------------------------------------------------------


def test_geopackage_and_geoparquet_samples_give_the_same_numbers(tables):
    """A sample may be a GeoPackage or a GeoParquet layer; geometry and other columns do not matter."""
    units = pd.read_csv(tables / "sample.csv")
    points = geopandas.GeoDataFrame(
        units.assign(visited=1.5), geometry=geopandas.points_from_xy(range(7), range(7)), crs="EPSG:6933"
    )
    points.to_file(tables / "sample.gpkg", driver="GPKG")
    points.to_parquet(tables / "sample.parquet")
    written = []
    for suffix in ("csv", "gpkg", "parquet"):
        flags = estimate_flags(tables, sample=tables / f"sample.{suffix}", out=tables / suffix, quiet=True)
        done("estimate", *flags)
        written.append((tables / suffix / "estimates.csv").read_bytes())
    assert written[0] == written[1] == written[2]


def test_their_column_names(tables):
    """--column takes over the names of somebody else's tables, in sample and strata alike."""
    done("estimate", *estimate_flags(tables, out=tables / "ours"))
    write(
        tables,
        {
            "sample.csv": SAMPLE.replace("unit,stratum", "plot_id,domain"),
            "strata.csv": STRATA.replace("stratum,units,area_ha", "domain,pixels,hectares"),
        },
    )
    names = ["unit=plot_id", "stratum=domain", "units=pixels", "area_ha=hectares"]
    done("estimate", *estimate_flags(tables, column=names, out=tables / "theirs"))
    ours, theirs = contents(tables / "ours"), contents(tables / "theirs")
    del ours["estimates.json"], theirs["estimates.json"]
    assert ours == theirs


def test_a_missing_column_says_how_to_map_it(tables):
    """A table with other names is answered with the flag that helps."""
    write(tables, {"sample.csv": SAMPLE.replace("unit,", "plot_id,")})
    assert "Use --column unit=THEIR_NAME" in refused("estimate", *estimate_flags(tables))


def unsimulated(table: pd.DataFrame) -> pd.DataFrame:
    """Rows without limits that come from random draws; these depend on what else is in the sample."""
    simulated = table["interval"] == "simulated"
    limits = ["lower", "upper"]
    return table.assign(**{n: table[n].mask(simulated) for n in limits}).reset_index(drop=True)


def test_several_maps_by_name(tables):
    """Each --map has its own rows; a map of one column is called by its column unless it is named."""
    rows = SAMPLE.splitlines()
    other = [rows[0] + ",second", *(f"{row},{'loss' if i % 2 else 'stable'}" for i, row in enumerate(rows[1:]))]
    write(tables, {"sample.csv": "\n".join(other) + "\n"})
    done("estimate", *estimate_flags(tables, map=["map", "revised=second"], out=tables / "both"))
    table = estimates(tables / "both")
    assert set(table["map"]) == {"map", "revised"}
    for name, column in (("map", "map"), ("revised", "revised=second")):
        done("estimate", *estimate_flags(tables, map=column, out=tables / name))
        alone = estimates(tables / name)
        mine = table[table["map"] == name]
        pd.testing.assert_frame_equal(unsimulated(mine), unsimulated(alone[alone["map"] == name]))
    assert len([n for n in contents(tables / "both") if n.startswith("matrix-")]) == 4


def test_without_a_map_there_are_areas_only(tables):
    """A sample with reference labels alone gives areas and no accuracy."""
    done("estimate", *estimate_flags(tables, map=None, out=tables / "results"))
    assert set(estimates(tables / "results")["measure"]) == {"area_ha", "area_share"}


def test_a_matrix_of_counts_gives_the_numbers_of_its_sample(tables):
    """Counts with rows said to be strata are the same as the sample that they were counted from."""
    write(tables, {"matrix.csv": MATRIX})
    done("estimate", *estimate_flags(tables, out=tables / "sample"))
    matrix = {"matrix": tables / "matrix.csv", "strata": tables / "strata.csv", "matrix_rows": "strata"}
    done("estimate", *as_flags(matrix | {"out": tables / "matrix"}))
    first, second = (estimates(tables / n).drop(columns=["reference"]) for n in ("sample", "matrix"))
    pd.testing.assert_frame_equal(first, second, rtol=1e-12)
    inputs = json.loads((tables / "matrix" / "estimates.json").read_text(encoding="utf-8"))["inputs"]
    assert set(inputs) == {"matrix", "strata"}


def test_unsampled_strata_can_be_left_out_or_filled(tables):
    """--unsampled exclude shrinks the target area; STRATUM=INTO keeps it and says what is assumed."""
    write(tables, {"strata.csv": STRATA + "water,50,4.75\n"})
    out = done("estimate", *estimate_flags(tables, unsampled="exclude", out=tables / "excluded")).out
    assert "Strata without a labelled unit, left out: 1, with 5 ha" in out
    out = done("estimate", *estimate_flags(tables, unsampled="water=stable", out=tables / "assumed")).out
    assert "are assumed, not sampled" in out
    for name, area in (("excluded", 94.75), ("assumed", 99.5)):
        table = estimates(tables / name)
        assert table[(table["measure"] == "area_ha")]["estimate"].sum() == pytest.approx(area)
        line = table[table["measure"] == "unsampled_area_ha"]
        assert line[["domain", "estimate"]].to_numpy().tolist() == [[f"{name}, not sampled", 4.75]]


# -- every design, against an independent implementation ----------------------------------------------------

QUANTITIES = {
    "area_share",
    "area_ha",
    "overall_accuracy",
    "users_accuracy",
    "producers_accuracy",
    "f1",
    "commission_error",
    "omission_error",
}
OTHER_NAMES = {"p_ij": "joint_share", "transition_area_ha": "area_ha"}


def oracle_flags(case: Case, folder: Path) -> dict[str, object]:
    """Flags of `estimate` for a case of the oracle; its strata table is given the numbers of clusters."""
    case.strata.to_csv(folder / "strata.csv", index=False)
    legend = pd.DataFrame({"code": range(1, len(case.design["classes"]) + 1), "name": case.design["classes"]})
    legend.to_csv(folder / "legend.csv", index=False)
    optional = {"clusters": "clusters.csv", "crossing": "poststrata.csv"}
    flags = {name: case.folder / file for name, file in optional.items() if (case.folder / file).exists()}
    header = (case.folder / "sample.csv").read_text().partition("\n")[0].split(",")
    if case.dates:
        labels = {n: ",".join(f"{n}_{d}" for d in case.dates) for n in ("map", "ref")}
    else:
        labels = {"map": [c for c in header if c.startswith("map")], "ref": "ref"}
    return flags | {
        "sample": case.folder / "sample.csv",
        "strata": folder / "strata.csv",
        "legend": folder / "legend.csv",
        "map": labels["map"],
        "reference": labels["ref"],
        "design": case.design.get("base", case.design["kind"]),
        "post_stratify": case.design.get("adjustment"),
        "no_fpc": None if case.design["fpc"] else True,
        "quiet": True,
    }


def oracle_key(item: dict, dated: bool) -> tuple[str, str, str, str, str, str] | None:
    """Measure, depth, class, against, map and period of an item of the oracle; None for what no row holds."""
    quantity, context = item["quantity"], item["context"]
    if quantity not in QUANTITIES | set(OTHER_NAMES):
        return None
    name, _, against = (item["class"] or "").partition("|")
    measure = OTHER_NAMES.get(quantity, quantity)
    if not dated:
        return (measure, "label", name, against, context if context.startswith("map") else "map", "")
    depth = "from-to" if "-" in context else "cover"
    return (measure, depth, name.replace("->", ">"), against, "map", context)


@pytest.mark.parametrize("folder", CASES, ids=lambda p: p.name)
def test_every_design_through_its_flags_agrees_with_the_oracle(folder, tmp_path):
    """Estimates and standard errors in estimates.csv are the oracle's, for every design, to 1e-8."""
    case = Case(folder)
    done("estimate", *as_flags(oracle_flags(case, tmp_path) | {"out": tmp_path / "results"}))
    table = estimates(tmp_path / "results")
    area = case.strata["area_ha"].sum()
    names = ["measure", "depth", "class", "against", "map", "period"]
    found = dict(zip(map(tuple, table[names].to_numpy()), table[["estimate", "se"]].to_numpy(), strict=True))
    checked, wrong = 0, []
    for item in case.expected:
        key = oracle_key(item, bool(case.dates))
        if key is None or (key not in found and item["quantity"] == "transition_area_ha"):  # occurs nowhere
            assert key is None or item["estimate"] == 0
            continue
        wanted = np.array([item["estimate"], item["se"]], dtype=float)
        slack = 1e-8 * np.abs(wanted) + 1e-12 * (area if "_ha" in key[0] else 1)
        same = np.isnan(found[key]) & np.isnan(wanted) | (np.abs(found[key] - wanted) <= slack)
        checked += 1
        wrong += [] if same.all() else [(key, found[key], wanted)]
    assert not wrong
    assert checked >= 15


# -- maps -------------------------------------------------------------------------------------------------


@pytest.fixture
def maps(tmp_path):
    """Two small maps of forest, cropland and water on an equal-area grid, and their legend."""
    rng = np.random.default_rng(3)
    first = np.kron(rng.choice([1, 2, 3], size=(6, 8), p=[0.6, 0.3, 0.1]), np.ones((8, 8), int)).astype("uint8")
    second = first.copy()
    second[10:18, 5:25] = np.where(first[10:18, 5:25] == 1, 2, first[10:18, 5:25])
    second[30:34, 40:60] = np.where(first[30:34, 40:60] == 2, 1, first[30:34, 40:60])
    for name, codes in (("map_2016.tif", first), ("map_2019.tif", second)):
        write_map(tmp_path / name, codes, nodata=0, place=EQUAL_AREA)
    write(tmp_path, {"legend.csv": "code,name\n1,forest\n2,cropland\n3,water\n"})
    return tmp_path


def mapped(folder: Path) -> pd.DataFrame:
    """Every pixel of the two maps with its class names, straight from the rasters."""
    import rasterio

    names = np.array(["", "forest", "cropland", "water"])
    codes = {}
    for year in ("2016", "2019"):
        with rasterio.open(folder / f"map_{year}.tif") as data:
            codes[f"map_{year}"] = names[data.read(1).ravel()]
    return pd.DataFrame(codes)


def rasters_of(folder: Path) -> list[Path]:
    return [folder / "map_2016.tif", folder / "map_2019.tif"]


def test_tally_writes_what_the_maps_hold(maps):
    """Trajectories and transitions are the counts of the pixels; nothing is printed with --quiet, JSON with --json."""
    legend = ["--legend", maps / "legend.csv"]
    out = done("tally", *rasters_of(maps), *legend, "--out", maps / "tally").out
    assert "Mapped transitions 2016-2019" in out
    assert set(contents(maps / "tally")) == {"trajectories.csv", "transitions.csv", "unmapped.csv", "tally.json"}
    counted = mapped(maps).value_counts()
    trajectories = pd.read_csv(maps / "tally" / "trajectories.csv")
    assert list(trajectories.columns) == ["2016", "2019", "units", "area_ha"]
    found = {(r[1], r[2]): (r[3], r[4]) for r in trajectories.itertuples()}
    assert found == {k: (n, pytest.approx(n * PIXEL_HA)) for k, n in counted.items()}
    transitions = pd.read_csv(maps / "tally" / "transitions.csv")
    assert list(transitions.columns) == ["period", "from", "to", "units", "area_ha"]
    assert set(transitions["period"]) == {"2016-2019"}
    assert transitions["units"].sum() == 48 * 64
    assert done("tally", *rasters_of(maps), *legend, "--quiet").out == ""
    content = json.loads(done("tally", *rasters_of(maps), *legend, "--json").out)
    assert content["format"] == 1
    assert pd.DataFrame(content["transitions"])["units"].sum() == 48 * 64
    assert content == json.loads((maps / "tally" / "tally.json").read_text(encoding="utf-8"))


def test_tally_refuses_maps_of_different_grids_and_unknown_codes(maps):
    """A map on another grid, a code outside the legend, or a missing map is one plain line, and nothing is written."""
    write_map(maps / "small_2019.tif", np.ones((5, 5), "uint8"), place=EQUAL_AREA)
    write(maps, {"short.csv": "code,name\n1,forest\n2,cropland\n"})
    before = contents(maps)
    first, second = rasters_of(maps)
    out = ["--out", maps / "tally"]
    assert "small_2019.tif" in refused("tally", first, maps / "small_2019.tif", *out)
    assert "codes that the legend does not: 3 " in refused("tally", first, second, "--legend", maps / "short.csv", *out)
    assert "map_2020.tif" in refused("tally", first, maps / "map_2020.tif", *out)
    assert "two or more" in refused("tally", first, *out)
    assert contents(maps) == before


def sample_of(pixels: pd.DataFrame, rng: np.random.Generator, each: int = 12) -> pd.DataFrame:
    """Pixels drawn by from-to stratum, and reference labels that are mostly those of the map."""
    named = pixels.assign(stratum=pixels["map_2016"] + ">" + pixels["map_2019"])
    drawn = named.groupby("stratum").sample(each, random_state=7).reset_index(drop=True)
    drawn.insert(0, "unit", [f"p{i}" for i in range(len(drawn))])
    for year in ("2016", "2019"):
        wrong = rng.random(len(drawn)) < 0.15
        drawn[f"ref_{year}"] = np.where(wrong, rng.permutation(drawn[f"map_{year}"]), drawn[f"map_{year}"])
    return drawn


LABELS = {"map": "map_2016,map_2019", "reference": "ref_2016,ref_2019", "change_class": ["forest loss=forest>*"]}


@pytest.mark.parametrize("scheme", ["from-to", "change class"])
def test_rasters_stand_in_for_the_tables(scheme, maps):
    """Strata and mapped areas counted from --raster give the numbers of a strata and a crossing table."""
    pixels = mapped(maps)
    sample = sample_of(pixels, np.random.default_rng(1))
    pixels["stratum"] = pixels["map_2016"] + ">" + pixels["map_2019"]
    if scheme == "change class":
        for table in (pixels, sample):
            lost = (table["map_2016"] == "forest") & (table["map_2019"] != "forest")
            same = table["map_2016"] == table["map_2019"]
            table["stratum"] = np.where(lost, "forest loss", np.where(same, "no change", "other change"))
    sample.to_csv(maps / "sample.csv", index=False)
    for name, keys in (("strata", ["stratum"]), ("crossing", ["map_2016", "map_2019"])):
        table = pixels.value_counts(keys).rename("units").reset_index()
        table.assign(area_ha=table["units"] * PIXEL_HA).to_csv(maps / f"{name}.csv", index=False)
    common = LABELS | {"sample": maps / "sample.csv", "legend": maps / "legend.csv"}
    given = {"strata": maps / "strata.csv", "crossing": maps / "crossing.csv"}
    done("estimate", *as_flags(common | given | {"out": maps / "tables"}))
    done("estimate", *as_flags(common | {"raster": rasters_of(maps), "out": maps / "rasters"}))
    by_tables, by_rasters = estimates(maps / "tables"), estimates(maps / "rasters")
    names = COLUMNS[:8]
    by_tables, by_rasters = (unsimulated(t.sort_values(names)) for t in (by_tables, by_rasters))
    pd.testing.assert_frame_equal(by_tables, by_rasters, rtol=1e-9, atol=1e-12)
    known = by_rasters[by_rasters["interval"] == "known"]
    assert set(known["depth"]) == {"cover", "from-to", "change-class", "change"}
    inputs = json.loads((maps / "rasters" / "estimates.json").read_text(encoding="utf-8"))["inputs"]
    digest = hashlib.sha256((maps / "map_2019.tif").read_bytes()).hexdigest()
    assert inputs["raster_2"] == {"file": "map_2019.tif", "sha256": digest}


def test_rasters_without_the_stratum_of_the_sample_are_refused(maps):
    """A stratum that the maps do not hold is named; so is a number of rasters that does not fit the columns."""
    sample = sample_of(mapped(maps), np.random.default_rng(1))
    sample.assign(stratum="forest>desert").to_csv(maps / "sample.csv", index=False)
    flags = LABELS | {"sample": maps / "sample.csv", "legend": maps / "legend.csv", "raster": rasters_of(maps)}
    assert "the maps hold no stratum 'forest>desert'" in refused("estimate", *as_flags(flags))
    flags["raster"] = rasters_of(maps)[:1]
    assert "1 rasters were given for 2 map columns" in refused("estimate", *as_flags(flags))


def test_from_maps_to_estimates(maps):
    """Tally, stratify, draw, label, reconcile and estimate follow one another by their files alone."""
    classes = as_flags({"legend": maps / "legend.csv", "change_class": LABELS["change_class"]})
    done("stratify", *rasters_of(maps), *classes, "--out", maps / "strata")
    assert set(contents(maps / "strata")) == {"strata.tif", "strata.csv"}
    strata = pd.read_csv(maps / "strata" / "strata.csv")
    assert strata["stratum"].tolist() == ["forest loss", "no change", "other change"]
    assert strata["units"].sum() == 48 * 64
    draw = {
        "strata": maps / "strata" / "strata.csv",
        "size": ["forest loss=30", "no change=60", "other change=20"],
        "raster": rasters_of(maps),
        "legend": maps / "legend.csv",
        "seed": 11,
    }
    for name in ("sample", "again"):
        done("draw", maps / "strata" / "strata.tif", *as_flags(draw | {"out": maps / name}))
    assert set(contents(maps / "sample")) == {"sample.csv", "sample.gpkg", "design_record.json"}
    for name in ("sample.csv", "design_record.json"):
        assert (maps / "sample" / name).read_bytes() == (maps / "again" / name).read_bytes()
    sample = pd.read_csv(maps / "sample" / "sample.csv")
    assert sample["stratum"].value_counts().to_dict() == {"no change": 60, "forest loss": 30, "other change": 20}
    for person, step in (("anna", 9), ("ben", 7)):
        labels = pd.DataFrame({"unit": sample["unit"], "interpreter": person})
        for year in ("2016", "2019"):
            seen = sample[f"map_{year}"].copy()
            seen.iloc[::step] = "cropland"
            labels[f"ref_{year}"] = seen
        labels.to_csv(maps / f"{person}.csv", index=False)
    merge = {"sample": maps / "sample" / "sample.csv", "labels": [maps / "anna.csv", maps / "ben.csv"]}
    out = done("reconcile", *as_flags(merge | {"out": maps / "labels"})).out
    assert "110 of 110 units labelled; of 110 labelled by several," in out
    assert set(contents(maps / "labels")) == {"labelled_sample.csv", "disagreements.csv"}
    estimate = LABELS | {"sample": maps / "labels" / "labelled_sample.csv", "strata": maps / "strata" / "strata.csv"}
    done("estimate", *as_flags(estimate | {"legend": maps / "legend.csv", "out": maps / "results"}))
    table = estimates(maps / "results")
    cover = table[(table["measure"] == "area_ha") & (table["depth"] == "change-class")]
    assert cover["estimate"].sum() == pytest.approx(48 * 64 * PIXEL_HA)
    merged = ca.reconcile(merge["sample"], merge["labels"])
    result = ca.estimate(
        merged.sample,
        strata=estimate["strata"],
        map=["map_2016", "map_2019"],
        reference=["ref_2016", "ref_2019"],
        legend=maps / "legend.csv",
        change_classes=["forest loss=forest>*"],
    )
    np.testing.assert_array_equal(result.table["estimate"], table["estimate"])


def test_reconcile_and_draw_refuse_in_one_line(maps):
    """A wrong rule, a size for no stratum, and a size that is no number are named; nothing is written."""
    done("stratify", *rasters_of(maps), "--legend", maps / "legend.csv", "--out", maps / "strata", "--quiet")
    write(maps, {"sample.csv": "unit\na\n", "labels.csv": "unit,interpreter,ref\na,I1,forest\n"})
    before = contents(maps)
    tables = ["--sample", maps / "sample.csv", "--labels", maps / "labels.csv", "--out", maps / "labels"]
    assert "'last' is not a rule" in refused("reconcile", *tables, "--rule", "last")
    draw = as_flags({"strata": maps / "strata" / "strata.csv", "seed": 1, "out": maps / "sample"})
    raster = maps / "strata" / "strata.tif"
    assert "Did you mean 'no change'?" in refused("draw", raster, *draw, "--size", "no chnage=20")
    assert "is not a whole number" in refused("draw", raster, *draw, "--size", "no change=2.5")
    assert "--size NAME=VALUE" in refused("draw", raster, *draw, "--size", "20")
    assert contents(maps) == before
