"""The demo: every step runs on the invented region, is held against the truth, and can be run again from its files."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path
from xml.etree import ElementTree

import matplotlib.image
import numpy as np
import pandas as pd
import pytest
import rasterio
from commands import change_assess, contents, done, estimates

from change_assess.scenario import DATES
from change_assess.study import read_study
from change_assess.walkthrough import RECIPES, demo

SIZE = 500
PIXEL_HA = 0.04
PERIODS = ["2016-2019", "2019-2022", "2016-2022"]
CLASSES = ["stable forest", "forest loss", "forest gain", "other no change", "other change"]


@pytest.fixture(scope="module")
def built(tmp_path_factory) -> tuple[Path, str]:
    """The demo as its command builds it, and what it printed."""
    folder = tmp_path_factory.mktemp("velmora") / "demo"
    return folder, done("demo", folder, "--size", SIZE).out


@pytest.fixture(scope="module")
def folder(built) -> Path:
    return built[0]


def test_it_says_that_everything_is_invented(built):
    """The first line says so, the table of estimates and truth follows, and the end says where everything is."""
    folder, out = built
    assert out.startswith("The province of Velmora is invented, and so is all its data.\n")
    assert "Hectares: map, estimate and truth" in out
    assert "They say nothing about a single parcel." in out
    assert f"change-assess estimate --study {folder / 'study.toml'}" in " ".join(out.split())


def test_it_writes_every_step(folder):
    """Maps, tally, strata, sample, labels, results, figures, the legend and the study file are there; no left-overs."""
    written = set(contents(folder))
    people = ("I01", "I02", "I03")
    wanted = {
        *(f"maps/{kind}_{date}.tif" for kind in ("map", "truth") for date in DATES),
        "maps/districts.tif",
        *(f"tally/{name}" for name in ("trajectories.csv", "transitions.csv", "unmapped.csv", "tally.json")),
        *(f"strata/strata.{suffix}" for suffix in ("tif", "csv")),
        *(f"sample/{name}" for name in ("sample.csv", "sample.gpkg", "design_record.json")),
        *(f"labels/labels_{person}.csv" for person in people),
        *(f"labels/{name}.csv" for name in ("labelled_sample", "disagreements")),
        *(f"results/{name}" for name in ("estimates.csv", "estimates.json", "strata_account.csv")),
        "results/estimate_map_truth.csv",
        *(f"figures/{n}.{s}" for n in ("maps_and_sample", "estimate_map_truth", "matrix") for s in ("png", "svg")),
        *("legend.csv", "crossing.csv", "study.toml"),
    }
    assert wanted <= written
    assert all(n.startswith("results/matrix-") for n in written - wanted)
    assert not [n for n in written if Path(n).name.startswith(".")]


def test_figures_show_something(folder):
    """PNGs hold more than one colour and SVGs are well-formed drawings."""
    for path in sorted((folder / "figures").iterdir()):
        if path.suffix == ".png":
            picture = matplotlib.image.imread(path)
            assert min(picture.shape[:2]) > 300
            assert len(np.unique(picture[::3, ::3].mean(axis=2).round(3))) > 20
        else:
            root = ElementTree.parse(path).getroot()
            assert root.tag.endswith("svg")
            assert len(list(root.iter())) > 50


def test_estimates_are_held_against_the_truth(folder):
    """Each period and class has estimate, interval, mapped and true area; the truth is that of the true maps."""
    table = pd.read_csv(folder / "results" / "estimate_map_truth.csv")
    assert list(table.columns) == (
        ["period", "class", "estimate", "se", "lower", "upper", "interval", "map_area_ha", "true_area_ha"]
    )
    assert table["period"].drop_duplicates().tolist() == PERIODS
    assert table["class"].tolist() == CLASSES * 3
    truth = {}
    for date in DATES:
        with rasterio.open(folder / "maps" / f"truth_{date}.tif") as data:
            truth[date] = data.read(1)
    inside = truth["2016"] > 0
    for period, rows in table.groupby("period", sort=False):
        first, last = (truth[date] == 1 for date in period.split("-"))
        true = rows.set_index("class")["true_area_ha"]
        assert true["stable forest"] == pytest.approx((first & last).sum() * PIXEL_HA)
        assert true["forest loss"] == pytest.approx((first & ~last).sum() * PIXEL_HA)
        assert true["forest gain"] == pytest.approx((~first & last).sum() * PIXEL_HA)
        for column in ("true_area_ha", "map_area_ha", "estimate"):
            assert rows[column].sum() == pytest.approx(inside.sum() * PIXEL_HA)
    assert (table["lower"] < table["estimate"]).all()
    assert (table["upper"] > table["estimate"]).all()
    off = (table["estimate"] - table["true_area_ha"]).abs()
    stable = table["class"].isin(["stable forest", "other no change"])
    assert (off < 4 * table["se"])[stable].all()
    assert (off < 0.35 * table["true_area_ha"])[~stable].all()  # rare change in a small region: omissions decide


def test_the_study_file_gives_the_same_numbers(folder, tmp_path):
    """Estimating from the study file of the demo writes the very numbers of the demo, and records its inputs."""
    done("estimate", "--study", folder / "study.toml", "--out", tmp_path / "results", "--quiet")
    for name, content in contents(tmp_path / "results").items():
        if name != "estimates.json":
            assert content == (folder / "results" / name).read_bytes(), name
    content = json.loads((tmp_path / "results" / "estimates.json").read_text(encoding="utf-8"))
    assert set(content["inputs"]) == {"sample", "strata", "crossing", "legend", "study"}
    digest = hashlib.sha256((folder / "labels" / "labelled_sample.csv").read_bytes()).hexdigest()
    assert content["inputs"]["sample"] == {"file": "labelled_sample.csv", "sha256": digest}


@pytest.mark.parametrize(("command", "step"), [("tally", "tally"), ("reconcile", "labels")])
def test_other_steps_run_from_the_study_file_too(command, step, folder, tmp_path):
    """Tally and reconcile from the study file write the files of the demo."""
    done(command, "--study", folder / "study.toml", "--out", tmp_path / step, "--quiet")
    for name, content in contents(tmp_path / step).items():
        assert content == (folder / step / name).read_bytes(), name


def test_the_study_file_states_the_recipes_of_the_demo(folder):
    """Dates, recipes and legend stand in the study file as the demo used them."""
    options = read_study(folder / "study.toml").options("estimate")
    assert options["change_class"] == list(RECIPES)
    assert options["dates"] == list(DATES)
    names = pd.read_csv(options["legend"])["name"].tolist()
    assert names == ["forest", "plantation", "grassland", "cropland", "settlement", "water"]


def test_building_it_again_gives_the_same_files(folder, tmp_path, capsys):
    """The same size and seed give byte-identical tables, here through Python, which prints nothing on its own."""
    result, comparison = demo(tmp_path / "again", size=SIZE)
    assert capsys.readouterr().out == ""
    first, second = contents(folder), contents(tmp_path / "again")
    assert set(first) == set(second)
    same = [n for n in first if not n.endswith((".gpkg", ".png", ".svg", ".tif"))]
    assert len(same) > 20
    for name in same:
        assert first[name] == second[name], name
    for name in (n for n in first if n.endswith(".tif")):
        with rasterio.open(folder / name) as one, rasterio.open(tmp_path / "again" / name) as other:
            np.testing.assert_array_equal(one.read(), other.read())
    table = estimates(folder / "results")
    np.testing.assert_array_equal(result.table["estimate"], table["estimate"])
    assert comparison["class"].tolist() == CLASSES * 3


def test_another_seed_gives_another_region(folder, tmp_path):
    """The seed makes the maps; a region that is too small to hold rare change is refused in one line."""
    outcome = change_assess("demo", tmp_path / "small", "--size", 100)
    assert (outcome.code, outcome.out.count("\n")) == (1, 2)
    assert "a region of 100 × 100 pixels is too small" in outcome.err
    assert outcome.err.count("\n") == 1
    assert contents(tmp_path) == {}
    done("demo", tmp_path / "other", "--size", 200, "--seed", 7, "--quiet")
    truth = pd.read_csv(tmp_path / "other" / "results" / "estimate_map_truth.csv")["true_area_ha"]
    assert not np.allclose(truth, pd.read_csv(folder / "results" / "estimate_map_truth.csv")["true_area_ha"])
