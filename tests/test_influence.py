"""Influence: shares of variance, the estimate without each unit, relabelling and what strata could hide."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from commands import done
from oracle import CASES, Case

from change_assess.engine.intervals import exact
from change_assess.errors import InputError
from change_assess.results.estimate import estimate
from change_assess.samples import read_sample

CLASSES = ["forest_gain", "forest_loss", "stable_forest", "stable_other"]
MEASURES = [("area_ha", "forest_loss"), ("users_accuracy", "stable_forest"), ("producers_accuracy", "forest_loss")]
BY_CASE = {folder.name: folder for folder in CASES}


def case(name: str) -> Case:
    """One case of the oracle, by its name."""
    return Case(BY_CASE[name])


@pytest.mark.parametrize("name", ["02-four-strata-fpc", "30-srs-post", "36-cluster-fpc", "45-unequal-areas"])
@pytest.mark.parametrize(("measure", "class_name"), MEASURES)
def test_shares_of_variance_add_up(name, measure, class_name):
    """Shares of the variance add up to one over strata, and over primary units; to nothing where there is none."""
    result = case(name).result().influence(measure, class_name)
    whole = 1 if result.se > 0 else 0
    assert result.strata["variance_share"].sum() == pytest.approx(whole, rel=1e-9)
    if "cluster" not in name:
        assert result.units["variance_share"].sum() == pytest.approx(whole, rel=1e-9)


@pytest.mark.parametrize("name", ["02-four-strata-fpc", "45-unequal-areas", "20-buffer-stratum"])
@pytest.mark.parametrize(("measure", "class_name"), MEASURES)
def test_without_each_unit_equals_estimating_again(name, measure, class_name):
    """The estimate without a unit is what a sample without that row gives, to rounding (brute force on 12 units)."""
    this = case(name)
    found = this.result().influence(measure, class_name, map="map").units.set_index("unit")["without"]
    frame = this.sample.units.frame
    for at in np.linspace(0, len(frame) - 1, 12).astype(int):
        rest = frame.drop(index=frame.index[at]).reset_index(drop=True)
        again = estimate(
            read_sample(rest, this.strata), map="map", reference="ref", legend=CLASSES, fpc=this.design["fpc"]
        )
        assert found[frame["unit"].iloc[at]] == pytest.approx(getattr(again[class_name], measure).value, rel=1e-10)


def test_without_a_cluster_equals_estimating_again():
    """In a cluster design a unit's whole cluster is left out, and the others of its stratum weigh more."""
    this = case("36-cluster-fpc")
    found = this.result().influence("area_ha", "forest_loss").units.set_index("unit")["without"]
    frame, clusters = this.sample.units.frame, pd.read_csv(this.folder / "clusters.csv", dtype=str)
    for gone in clusters["cluster"].iloc[[0, 7]]:
        rest = frame[frame["cluster"] != gone].reset_index(drop=True)
        sample = read_sample(rest, this.strata, clusters=clusters[clusters["cluster"] != gone])
        again = estimate(sample, map="map", reference="ref", legend=CLASSES)["forest_loss"].area_ha.value
        for unit in frame.loc[frame["cluster"] == gone, "unit"].head(3):
            assert found[unit] == pytest.approx(again, rel=1e-10)


@pytest.mark.parametrize("name", ["02-four-strata-fpc", "30-srs-post"])
def test_relabelling_equals_estimating_again(name):
    """Giving a unit the label it names changes the estimate by what it says, and no other label changes it more."""
    this = case(name)
    result = this.result()
    table = result.influence("producers_accuracy", "forest_loss").units
    frame = this.sample.units.frame
    before = result["forest_loss"].producers_accuracy.value
    for row in [table.iloc[0], table.iloc[len(table) // 2], table.iloc[-1]]:
        changes = {}
        for label in CLASSES:
            changed = frame.assign(ref=frame["ref"].where(frame["unit"] != row["unit"], label))
            sample = read_sample(changed, this.strata, crossing=this.sample.crossing and this.sample.crossing.frame)
            again = estimate(
                sample,
                map="map",
                reference="ref",
                legend=CLASSES,
                fpc=this.design["fpc"],
                post_stratify=this.design.get("adjustment"),
            )
            changes[label] = again["forest_loss"].producers_accuracy.value - before
        largest = max(changes.values(), key=abs)
        assert row["change_relabelled"] == pytest.approx(largest, rel=1e-9, abs=1e-12)
        if row["relabelled_as"]:
            assert changes[row["relabelled_as"]] == pytest.approx(largest, rel=1e-9, abs=1e-12)


def test_what_a_stratum_could_hide_is_its_exact_bound():
    """Where no unit of the class was seen, the one-sided exact bound of the stratum times its area is shown."""
    this = case("03-omission-none")
    loss = next(c for c in this.design["classes"] if "loss" in c)
    table = this.result().influence("area_ha", loss).strata.set_index("stratum")
    unseen = table[table["seen"] == 0]
    assert len(unseen)
    for name, row in unseen.iterrows():
        population = float(this.strata.set_index("stratum").loc[name, "units"]) if this.design["fpc"] else None
        _, upper = exact(np.array(0.0), np.array(float(row["n"])), population, 0.90)
        assert row["hidden_ha"] == pytest.approx(float(upper) * row["area_ha"])
        assert row["one_unit_ha"] == pytest.approx(row["area_ha"] / row["n"])


def test_the_unit_found_cleared_in_stable_forest_comes_first(flanders):
    """One unit of the big stable-forest stratum carries 1,274 of 1,764 ha of forest loss and 99 % of its variance."""
    found = flanders.influence("area_ha", "forest loss")
    first = found.units.iloc[0]
    assert (first["unit"], first["stratum"]) == ("3371", "2>2")
    assert round(found.value) == 1764
    assert round(first["change_without"]) == -1274
    assert found.strata.set_index("stratum").loc["2>2", "variance_share"] > 0.99
    assert found.strata.set_index("stratum").loc["2>2", "omissions_to_double"] == 2


def test_the_list_for_looking_again_is_blind_and_mixed(flanders):
    """It holds the influential units and as many others of their strata, in random order, and tells neither apart."""
    found = flanders.influence("area_ha", "forest loss")
    again = found.relook(20, seed=4)
    top = set(found.units["unit"].head(20))
    assert list(again.columns) == ["unit", "x", "y"]
    assert top <= set(again["unit"])
    assert len(again) == len(set(again["unit"])) >= 35
    place = [i for i, unit in enumerate(again["unit"]) if unit in top]
    assert place != sorted(place)[: len(place)] or max(place) > 20
    pd.testing.assert_frame_equal(again, found.relook(20, seed=4))


def test_unknown_measures_and_classes_are_refused(flanders):
    """A measure or class that is not there is refused with the nearest one."""
    with pytest.raises(InputError, match="Did you mean 'area_ha'"):
        flanders.influence("area", "forest loss")
    with pytest.raises(InputError, match="0 tables fit"):
        flanders.influence("area_ha", "forrest loss")


def test_on_the_command_line(tmp_path):
    """`--influence` prints the units and writes tables and a figure."""
    folder = BY_CASE["02-four-strata-fpc"]
    out = done(
        "estimate",
        "--sample",
        folder / "sample.csv",
        "--strata",
        folder / "strata.csv",
        "--map",
        "map",
        "--reference",
        "ref",
        "--influence",
        "area_ha:forest_loss",
        "--influence",
        "overall_accuracy",
        "--out",
        tmp_path,
    ).out
    assert "Units that carry area_ha forest_loss" in out
    names = {p.name for p in tmp_path.iterdir()}
    assert {"influence-units-area_ha-forest_loss-map-label.csv", "influence-area_ha-forest_loss-map-label.png"} <= names
    assert len(pd.read_csv(tmp_path / "influence-units-overall_accuracy-map-label.csv")) == 360


@pytest.fixture(scope="module")
def flanders():
    """Flanders 2013-2016, first interpreter, unsampled strata left out."""
    from test_flanders import FLANDERS

    from change_assess.labels.reconcile import reconcile

    merged = reconcile(FLANDERS / "units.csv", [FLANDERS / "labels_long.csv"], columns={"unit": "unit_id"})
    sample = read_sample(merged.sample, FLANDERS / "strata.csv", columns={"unit": "unit_id", "units": "pixels"})
    return estimate(
        sample,
        map="map_2013,map_2016",
        reference="ref_2013,ref_2016",
        fpc=False,
        unsampled="exclude",
        change_classes=["forest loss=Bos>*", "forest gain=*>Bos"],
    )
