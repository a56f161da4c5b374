"""`start`: a commented study file from the maps or tables at hand, which the other commands then accept."""

from __future__ import annotations

import json
import tomllib

import numpy as np
import pandas as pd
import pytest
from commands import SAMPLE, TABLES, contents, done, estimates, refused, write
from rasters import write_map

import change_assess as ca
from change_assess.errors import InputError
from change_assess.first_study import start
from change_assess.study import read_study
from change_assess.tables import read_legend

PLACE = {"crs": "EPSG:6933", "transform": (20, 0, -2_000_000, 0, -20, -3_600_000)}
DATED = """unit,stratum,x,y,map_2016,map_2019,ref_2016,ref_2019,note
u1,loss,1.5,2.5,forest,crop,forest,crop,seen
u2,loss,2.5,2.5,forest,crop,forest,forest,seen
u3,loss,3.5,2.5,forest,crop,forest,crop,cloud
u4,stable,4.5,2.5,forest,forest,forest,forest,seen
u5,stable,5.5,2.5,forest,forest,forest,water,seen
u6,stable,6.5,2.5,crop,crop,crop,crop,seen
"""


@pytest.fixture
def maps(tmp_path):
    """Two maps with the codes 1, 2 and 7, no-data 0."""
    first = np.repeat([1, 2, 7, 0], 50).reshape(10, 20).astype("uint8")
    second = first.copy()
    second[:2, :5] = 2
    for name, codes in (("map_2016.tif", first), ("map_2019.tif", second)):
        write_map(tmp_path / name, codes, nodata=0, place=PLACE)
    return tmp_path


def test_from_maps_holds_the_codes_of_the_maps(maps):
    """The legend lists the codes that occur, no-data aside; the file reads back and tally and stratify run from it."""
    study = maps / "study.toml"
    out = done("start", maps / "map_2016.tif", maps / "map_2019.tif", "--out", study).out
    assert f"change-assess tally --study {study}" in " ".join(out.split())
    read = read_study(study)
    legend = read_legend(read.options("tally")["legend"])
    assert (legend.codes, legend.names) == ([1, 2, 7], ["class 1", "class 2", "class 7"])
    assert read.options("tally")["dates"] == ["2016", "2019"]
    done("tally", "--study", study, "--quiet")
    done("stratify", "--study", study, "--quiet")
    transitions = pd.read_csv(maps / "tally" / "transitions.csv")
    assert transitions[["from", "to", "units"]].to_numpy().tolist() == [
        ["class 1", "class 1", 40],
        ["class 1", "class 2", 10],
        ["class 2", "class 2", 50],
        ["class 7", "class 7", 50],
    ]
    assert pd.read_csv(maps / "strata" / "strata.csv")["units"].sum() == 150


def test_from_maps_with_a_legend_of_ones_own(maps):
    """A legend that is given is taken whole, with colours and groups."""
    write(maps, {"legend.csv": "code,name,colour,group\n1,forest,#00ff00,trees\n2,crop,,\n7,water,,\n9,ice,,\n"})
    study = start(
        maps / "study.toml", maps=[str(maps / "map_2016.tif"), str(maps / "map_2019.tif")], legend=maps / "legend.csv"
    )
    legend = read_legend(read_study(study).options("tally")["legend"])
    assert legend.classes == read_legend(maps / "legend.csv").classes
    done("tally", "--study", study, "--quiet")


def test_the_commented_draw_section_can_be_used(maps):
    """The lines that begin with # are keys that the commands know, once the # is gone."""
    study = start(maps / "study.toml", maps=[str(maps / "map_2016.tif"), str(maps / "map_2019.tif")])
    text = study.read_text(encoding="utf-8")
    head, draw = text.split("\n# [draw]\n")
    used = head + "\n[draw]\n" + draw.replace("# ", "")
    used = used.replace("# change_class = ", "change_class = ").replace("=forest>*", "=class 1>*")
    used = used.replace('"forest gain=*>forest"', '"gain=*>class 1"').replace("no change=500", "no change=60")
    study.write_text(used.replace("forest loss=150", "forest loss=10"), encoding="utf-8")
    done("stratify", "--study", study, "--quiet")
    done("draw", "--study", study, "--quiet")
    sample = pd.read_csv(maps / "sample" / "sample.csv")
    assert sample["stratum"].value_counts().to_dict() == {"no change": 60, "forest loss": 10}
    assert set(sample["map_2019"]) <= {"class 1", "class 2", "class 7"}


def test_from_tables_finds_the_label_columns_and_estimates(tmp_path):
    """Map and reference columns are found by their names, the legend by their labels, and the estimate runs."""
    folder = write(tmp_path, TABLES | {"sample.csv": DATED})
    study = folder / "studies" / "study.toml"
    out = done("start", "--sample", folder / "sample.csv", "--strata", folder / "strata.csv", "--out", study).out
    assert f"change-assess estimate --study {study}" in " ".join(out.split())
    options = read_study(study).options("estimate")
    assert options["map"] == ["map_2016,map_2019"]
    assert options["reference"] == ["ref_2016", "ref_2019"]
    assert read_legend(options["legend"]).names == ["crop", "forest", "water"]
    done("estimate", "--study", study, "--quiet")
    result = ca.estimate(
        folder / "sample.csv",
        strata=folder / "strata.csv",
        map=["map_2016", "map_2019"],
        reference=["ref_2016", "ref_2019"],
    )
    table = estimates(folder / "studies" / "results")
    np.testing.assert_array_equal(result.table["estimate"], table["estimate"])


def test_from_tables_with_one_label_and_codes(tmp_path):
    """A single pair of label columns with codes gives a legend of these codes."""
    coded = SAMPLE.replace(",loss,loss\n", ",1,1\n").replace(",loss,stable\n", ",1,2\n")
    coded = coded.replace(",stable,stable\n", ",2,2\n").replace(",stable,loss\n", ",2,1\n")
    folder = write(tmp_path, TABLES | {"sample.csv": coded})
    study = start(folder / "study.toml", sample=folder / "sample.csv", strata=folder / "strata.csv")
    assert read_legend(read_study(study).options("estimate")["legend"]).codes == [1, 2]
    content = json.loads(done("estimate", "--study", study, "--json").out)
    assert content["options"]["legend"] == ["1", "2"]


def test_from_tables_without_their_names(tmp_path):
    """Where no column looks like a label the study file names the columns and leaves the choice open."""
    folder = write(tmp_path, TABLES | {"sample.csv": SAMPLE.replace("map,ref", "kind,truth")})
    study = start(folder / "study.toml", sample=folder / "sample.csv", strata=folder / "strata.csv")
    text = study.read_text(encoding="utf-8")
    assert "The columns of the sample are: unit, stratum, kind, truth" in text
    assert '# map = ["map_2016,map_2019"]' in text
    assert "map" not in read_study(study).options("estimate")
    assert "--reference COLUMN is missing" in refused("estimate", "--study", study)


def test_awkward_class_names_survive(tmp_path):
    """Quotation marks, backslashes and letters of any language in class names are written so that they read back."""
    awkward = SAMPLE.replace("loss,loss\n", 'loss,"Wald ""alt"" \\ é"\n')
    folder = write(tmp_path, TABLES | {"sample.csv": awkward})
    study = start(folder / "study.toml", sample=folder / "sample.csv", strata=folder / "strata.csv")
    assert 'Wald "alt" \\ é' in read_legend(read_study(study).options("estimate")["legend"]).names
    done("estimate", "--study", study, "--quiet")


def test_the_file_is_commented_and_valid(tmp_path):
    """It states its format, explains its keys, and every value in it is valid TOML."""
    folder = write(tmp_path, TABLES)
    study = start(folder / "study.toml", sample=folder / "sample.csv", strata=folder / "strata.csv")
    text = study.read_text(encoding="utf-8")
    assert text.startswith("# Study file of change-assess")
    assert tomllib.loads(text)["format"] == 1
    assert "a flag on the command line beats this file" in text
    assert contents(folder) == contents(folder) | {"study.toml": text.encode()}


def test_an_existing_study_file_is_left_alone_without_force(tmp_path):
    """Nothing is overwritten unless --force says so."""
    folder = write(tmp_path, TABLES | {"study.toml": "mine\n"})
    flags = ["--sample", folder / "sample.csv", "--out", folder / "study.toml"]
    assert "exists already and was left as it is" in refused("start", *flags)
    assert "--force" in refused("start", *flags)
    assert (folder / "study.toml").read_text() == "mine\n"
    assert done("start", *flags, "--force", "--quiet").out == ""
    assert read_study(folder / "study.toml").options("estimate")["reference"] == ["ref"]


def test_nothing_to_start_from_is_refused(tmp_path):
    """Without maps and without a sample there is nothing to write, and nothing is written."""
    with pytest.raises(InputError, match="there is nothing to start from"):
        start(tmp_path / "study.toml")
    assert "does not exist" in refused("start", "--sample", tmp_path / "nowhere.csv", "--out", tmp_path / "study.toml")
    assert contents(tmp_path) == {}


def test_maps_and_a_sample_with_other_labels_can_both_be_used(maps):
    """Codes in the maps and names in the sample get a legend each, so that tally and estimate both run."""
    write(maps, TABLES)
    study = maps / "study.toml"
    done(
        "start",
        maps / "map_2016.tif",
        maps / "map_2019.tif",
        "--sample",
        maps / "sample.csv",
        "--strata",
        maps / "strata.csv",
        "--out",
        study,
    )
    done("tally", "--study", study, "--quiet")
    done("estimate", "--study", study, "--map", "map", "--reference", "ref", "--quiet")
    assert read_legend(read_study(study).options("tally")["legend"]).codes == [1, 2, 7]
    assert (maps / "results" / "estimates.csv").exists()
