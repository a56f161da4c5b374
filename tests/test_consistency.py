"""What one table of results must keep consistent, and what `estimate` refuses or says when it cannot."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from commands import done, refused
from scipy.optimize import minimize

from change_assess.engine.intervals import zero_count_bound
from change_assess.errors import DesignError, InputError
from change_assess.results.estimate import estimate
from change_assess.samples import read_matrix, read_sample


def sample_of(seed: int = 0, n: int = 60) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Random sample of two strata, three classes, with unequal unit areas."""
    rng = np.random.default_rng(seed)
    names = np.array(["f", "g", "h"])
    units = pd.DataFrame(
        {
            "unit": [f"u{i:03d}" for i in range(n)],
            "stratum": np.where(np.arange(n) < n // 2, "a", "b"),
            "map": names[rng.integers(0, 3, n)],
            "ref": names[rng.integers(0, 3, n)],
        }
    )
    return units, pd.DataFrame({"stratum": ["a", "b"], "units": [500, 900], "area_ha": [5000.0, 9000.0]})


@pytest.mark.parametrize("change", ["rows", "strata rows", "extra strata column", "extra label"])
def test_one_sample_read_twice_keeps_its_covariance(change):
    """Order of rows and further columns do not make another sample: the difference to itself has no error."""
    units, strata = sample_of()
    others = {
        "rows": (units.sample(frac=1, random_state=1), strata),
        "strata rows": (units, strata[::-1]),
        "extra strata column": (units, strata.assign(note="x")),
        "extra label": (units.assign(other="f"), strata),
    }
    first = estimate(read_sample(units, strata), map="map", reference="ref")["f"].area_ha
    second = estimate(read_sample(*others[change]), map="map", reference="ref")["f"].area_ha
    assert (first - second).value == pytest.approx(0, abs=1e-9)
    assert (first - second).se == pytest.approx(0, abs=1e-9)


def test_different_designs_of_one_sample_have_no_covariance():
    """With and without finite population correction the covariance is not defined, whichever comes first."""
    units, strata = sample_of()
    a, b = (estimate(read_sample(units, strata), reference="ref", fpc=fpc)["f"].area_ha for fpc in (True, False))
    for difference in (a - b, b - a):
        with pytest.raises(DesignError, match="different designs"):
            _ = difference.se


def test_expansion_uses_one_denominator():
    """Under expansion the joint diagonal is the overall accuracy, and the total that units stand for is said."""
    units, strata = sample_of()
    units["area_ha"] = np.random.default_rng(1).uniform(5, 25, len(units))
    result = estimate(read_sample(units, strata), map="map", reference="ref", estimator="expansion")
    joint = result.table[result.table["measure"] == "joint_share"]
    assert joint.loc[joint["class"] == joint["against"], "estimate"].sum() == pytest.approx(
        result.overall_accuracy.value
    )
    shares = result.table[result.table["measure"] == "area_share"]["estimate"].sum()
    (notice,) = [w for w in result.warnings if w.code == "expansion-total"]
    assert notice.facts["estimated_ha"] / notice.facts["known_ha"] == pytest.approx(shares)


@pytest.mark.parametrize("options", [{}, {"estimator": "separate"}, {"post_stratify": "cells"}])
def test_worst_cases_hold_the_reported_limits(options):
    """Worst-case rows are made with the same weights as the table, and hold its limits."""
    units, strata = sample_of()
    units.loc[[3, 40], "ref"] = ""
    share = units["map"].value_counts(normalize=True)
    cross = pd.DataFrame({"map": share.index, "units": (share * 1400).round().astype(int), "area_ha": share * 14000})
    cross.loc[cross.index[0], "units"] += 1400 - cross["units"].sum()
    result = estimate(read_sample(units, strata, crossing=cross), map="map", reference="ref", **options)
    table = result.table.set_index("class")
    area, worst = (table[table["measure"] == m] for m in ("area_ha", "area_ha_worst_case"))
    assert (worst["lower"] <= area["lower"].clip(lower=0) + 1e-9).all()
    assert (worst["upper"] >= area["upper"] - 1e-9).all()


def test_units_without_a_map_label_have_their_row():
    """The share that the map leaves empty completes the joint shares, and counts as disagreement."""
    units, strata = sample_of()
    units.loc[units.index[::7], "map"] = ""
    table = estimate(read_sample(units, strata), map="map", reference="ref").table
    values = table[table["class"] == ""].set_index("measure")["estimate"]
    joint = table[table["measure"] == "joint_share"]["estimate"].sum()
    assert joint + values["unmapped_share"] == pytest.approx(1)
    disagreement = values["quantity_disagreement"] + values["allocation_disagreement"]
    assert disagreement == pytest.approx(1 - values["overall_accuracy"])


# -- zero counts and kinks --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("area", "n"), [([0.5, 0.5], [10, 10]), ([0.9, 0.08, 0.02], [300, 40, 60]), ([1 / 50] * 50, [2] * 50)]
)
def test_the_zero_count_bound_is_the_largest_area_not_excluded(area, n):
    """It equals the maximum found by a general optimiser over stratum rates with a 5 % chance of showing nothing."""
    area, n = np.array(area), np.array(n, float)
    found = zero_count_bound(area, n, 0.95)
    start = np.full(len(n), 1 - 0.05 ** (1 / n.sum()))
    chance = {"type": "ineq", "fun": lambda p: (n * np.log1p(-p)).sum() - np.log(0.05)}
    best = minimize(
        lambda p: -(area * p).sum(), start, bounds=[(0, 0.999)] * len(n), constraints=[chance], method="SLSQP"
    )
    assert found == pytest.approx(-best.fun, rel=1e-5)


def test_the_zero_count_bound_of_one_stratum_is_exact():
    """With one stratum it is the one-sided Clopper-Pearson limit, 1 - 0.05**(1/n)."""
    assert zero_count_bound(np.array([1.0]), np.array([300.0]), 0.95) == pytest.approx(1 - 0.05 ** (1 / 300))


def test_simulated_limits_of_quantity_can_reach_zero():
    """Where mapped and estimated area may be equal, the limits of quantity disagreement start at zero."""
    units, strata = sample_of(3)
    table = estimate(read_sample(units, strata), map="map", reference="ref").table
    rows = table[(table["measure"] == "quantity_disagreement") & (table["interval"] == "simulated")]
    assert len(rows)
    assert (rows["lower"] == 0).all()
    near = table[table["interval"] == "simulated"]
    assert (near["lower"] <= near["estimate"]).all()
    assert (near["upper"] >= near["estimate"]).all()


def test_simulated_limits_of_a_two_stage_sample_have_a_width():
    """With all clusters taken, what varies is the second stage: simulated limits show it."""
    rng = np.random.default_rng(2)
    labels = np.array(["f", "g"])
    units = pd.DataFrame(
        {"unit": [f"u{i:03d}" for i in range(120)], "stratum": "a", "cluster": np.repeat([*"pqrstu"], 20)}
    )
    units["map"], units["ref"] = labels[rng.integers(0, 2, 120)], labels[rng.integers(0, 2, 120)]
    strata = pd.DataFrame({"stratum": ["a"], "units": [30000], "area_ha": [3000.0], "clusters": [6]})
    clusters = pd.DataFrame({"stratum": "a", "cluster": [*"pqrstu"], "units": 5000})
    table = estimate(read_sample(units, strata, clusters=clusters), map="map", reference="ref").table
    near = table[(table["interval"] == "simulated") & (table["measure"] == "allocation_disagreement")]
    assert len(near)
    assert (near["upper"] - near["lower"] > 0.02).all()


def test_an_estimate_without_variance_has_no_normal_interval():
    """A class seen nowhere is not 0 ± 0; asked for by name, the conventional limits are given all the same."""
    units, strata = sample_of()
    never = estimate(read_sample(units, strata), map="map", reference="ref", legend=["f", "g", "h", "never"])["never"]
    assert np.isnan(never.area_ha.interval().upper)
    assert never.area_ha.interval(method="normal")[:2] == (0, 0)
    assert "no normal interval" in repr(never.area_ha)


def test_exact_limits_need_the_class_to_be_the_stratum():
    """Where the crossing table shows that a class lies in two strata, its user's accuracy gets no exact limits."""
    units, strata = sample_of()
    units["map"] = np.where(units["stratum"] == "a", "f", "g")
    apart = pd.DataFrame({"map": ["f", "g"], "units": [500, 900], "area_ha": [5000.0, 9000.0]})
    mixed = pd.DataFrame({"map": ["f", "g"], "units": [700, 700], "area_ha": [7000.0, 7000.0]})
    kinds = []
    for crossing in (apart, mixed):
        table = estimate(read_sample(units, strata, crossing=crossing), map="map", reference="ref").table
        rows = table[(table["measure"] == "users_accuracy") & (table["class"] == "f")]
        kinds.append(rows["interval"].item())
    assert kinds == ["exact", "normal"]


# -- refusals ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("how", ["cells", "margins"])
def test_known_totals_must_be_those_of_the_strata(how):
    """A crossing table of another population is refused, and one that repeats a row."""
    units, strata = sample_of()
    cross = pd.DataFrame({"map": ["f", "g", "h"], "units": [7000, 8000, 10], "area_ha": [1.0, 1.0, 1.0]})
    with pytest.raises(InputError, match="add up to 15,010 units, the strata table says 1,400"):
        estimate(read_sample(units, strata, crossing=cross), map="map", reference="ref", post_stratify=how)
    twice = pd.DataFrame({"map": ["f", "f", "g", "h"], "units": [300, 300, 400, 400], "area_ha": 1.0})
    with pytest.raises(InputError, match="stands twice"):
        estimate(read_sample(units, strata, crossing=twice), map="map", reference="ref", post_stratify=how)


def test_clusters_are_never_taken_for_independent_units():
    """A column of clusters without their table is refused, and clusters larger than their stratum."""
    units, strata = sample_of()
    units["cluster"] = np.where(np.arange(60) % 30 < 15, "p", "q") + units["stratum"]
    with pytest.raises(InputError, match="no table of the selected clusters"):
        read_sample(units, strata)
    clusters = pd.DataFrame({"stratum": ["a", "a", "b", "b"], "cluster": ["pa", "qa", "pb", "qb"], "units": 3000})
    with pytest.raises(InputError, match="hold 6000 units, the stratum 500"):
        read_sample(units, strata.assign(clusters=9), clusters=clusters)


@pytest.mark.parametrize("name", ["no change", "Other change", "change"])
def test_reserved_names_of_change_classes_are_refused(name):
    """A recipe cannot be called like what no recipe matches."""
    units, strata = sample_of()
    with pytest.raises(InputError, match="cannot be called"):
        estimate(read_sample(units, strata), map="map,ref", reference="ref,map", change_classes=f"{name}=f>g")


def test_change_classes_of_a_single_date_are_said_to_be_unused():
    """With one label column there is no change to name."""
    units, strata = sample_of()
    result = estimate(read_sample(units, strata), reference="ref", change_classes="loss=f>*")
    assert [w.code for w in result.warnings] == ["change-classes-unused"]


@pytest.mark.parametrize(
    ("matrix", "message"),
    [
        ({"map": ["f", "g", "Total"], "f": [1, 2, 3], "g": [2, 2, 4]}, "'Total' looks like a sum"),
        ({"map": ["f", "g"], "f": [1, 2], "g": [2, 2], "total": [3, 4]}, "'total' looks like a sum"),
        ({"map": ["f", "g"]}, "no column of counts"),
        ({"map": ["f", "g"], "f": [10**12, 2], "g": [2, 2]}, "counts 1,000,000,000,006 units"),
    ],
)
def test_matrices_that_are_none_are_refused(matrix, message):
    """Sums, missing counts and pixel counts are refused."""
    strata = pd.DataFrame({"stratum": ["f", "g"], "area_ha": [10.0, 20.0]})
    with pytest.raises(InputError, match=message):
        read_matrix(pd.DataFrame(matrix), strata, rows="strata")


@pytest.mark.parametrize("units", [1e18, 1e300])
def test_impossible_sizes_are_refused(units):
    """Numbers beyond any count or area are refused at once."""
    sample, strata = sample_of()
    with pytest.raises(InputError, match="too large"):
        read_sample(sample, strata.assign(units=units))


@pytest.mark.parametrize("seed", [-1, 1.5])
def test_a_seed_is_a_whole_number(seed):
    """Seeds below zero, or broken ones, are refused."""
    units, strata = sample_of()
    with pytest.raises(InputError, match="is not a seed"):
        estimate(read_sample(units, strata), reference="ref", seed=seed)


def test_maps_with_alike_names_keep_their_matrices(tmp_path):
    """Two maps whose names make the same file name both have their matrices written."""
    units, strata = sample_of()
    units["second"] = units["ref"]
    units.to_csv(tmp_path / "s.csv", index=False)
    strata.to_csv(tmp_path / "t.csv", index=False)
    common = ["estimate", "--sample", tmp_path / "s.csv", "--strata", tmp_path / "t.csv", "--reference", "ref"]
    done(*common, "--map", "a b=map", "--map", "a-b=second", "--out", tmp_path / "out", "--quiet")
    assert len(list((tmp_path / "out").glob("matrix-*.csv"))) == 4
    assert json.loads((tmp_path / "out" / "estimates.json").read_text())["format"] == 1
    assert "cannot be written" in refused(*common, "--out", tmp_path / "s.csv")
