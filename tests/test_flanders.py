"""A real sample with all its blemishes: land use in Flanders 2013 and 2016, several interpreters, unsampled strata.

The figures are those of `data/flanders/SOURCE.md`, computed apart from this package.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from commands import done, estimates, refused
from scipy.stats import norm

from change_assess.errors import DesignError
from change_assess.labels.reconcile import Reconciled, reconcile
from change_assess.reporting.texts import notice_text
from change_assess.results.estimate import estimate
from change_assess.results.result import Result
from change_assess.samples import Sample, read_sample

FLANDERS = Path(__file__).parent / "data" / "flanders"
RECIPES = ("forest loss=Bos>*", "forest gain=*>Bos")
SAMPLED_HA, UNSAMPLED_HA = 1_323_714, 384_887
UNSAMPLED = [f"{a}>8" for a in range(2, 8)] + [f"8>{b}" for b in range(1, 10)] + ["9>8"]
LABELS = {"map": ["map_2013", "map_2016"], "reference": ["ref_2013", "ref_2016"]}
COLUMNS = {"unit": "unit_id", "units": "pixels"}


@pytest.fixture(scope="module")
def strata() -> pd.DataFrame:
    return pd.read_csv(FLANDERS / "strata.csv")


@pytest.fixture(scope="module")
def labelled() -> Reconciled:
    return reconcile(FLANDERS / "units.csv", FLANDERS / "labels_long.csv", columns={"unit": "unit_id"})


@pytest.fixture(scope="module")
def sample(labelled: Reconciled, strata: pd.DataFrame) -> Sample:
    crossing = strata[["stratum", "map_2013", "map_2016", "pixels", "area_ha"]]
    return read_sample(labelled.sample, FLANDERS / "strata.csv", crossing=crossing, columns=COLUMNS)


def estimated(sample: Sample, **options) -> Result:
    return estimate(sample, **LABELS, change_classes=RECIPES, fpc=False, **options)


@pytest.fixture(scope="module")
def result(sample: Sample) -> Result:
    return estimated(sample, unsampled="exclude")


def rows(result: Result, measure: str, depth: str, domain: str = "") -> pd.DataFrame:
    """Rows of one measure at one depth, by class."""
    table = result.table
    mine = (table["measure"] == measure) & (table["depth"] == depth) & (table["domain"] == domain)
    return table[mine].set_index("class")


# -- figures ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("depth", "period", "name", "area", "se"),
    [
        ("change", "2013-2016", "change", 41_678, 3_146),
        ("change-class", "2013-2016", "forest loss", 1_764, 1_277),
        ("change-class", "2013-2016", "forest gain", 140, 58),
        ("cover", "2013", "Bos", 145_136, 3_020),
        ("cover", "2016", "Bos", 143_511, 3_267),
    ],
)
def test_areas_and_standard_errors(depth, period, name, area, se, result):
    """Estimated area and standard error, without finite population correction, to the hectare."""
    found = result.select(depth=depth, period=period)[name].area_ha
    assert (round(found.value), round(found.se)) == (area, se)


def test_accuracies(result):
    """Accuracy of change and no change, and overall accuracy of the nine classes at each date."""
    change = result.select(depth="change", period="2013-2016")
    assert round(change.overall_accuracy.value, 3) == 0.901
    assert round(change["change"].users_accuracy.value, 3) == 0.217
    assert round(change["change"].producers_accuracy.value, 3) == 0.819
    overall = [result.select(depth="cover", period=year).overall_accuracy.value for year in ("2013", "2016")]
    assert [round(x, 3) for x in overall] == [0.882, 0.877]


def test_mapped_areas_are_exact(result):
    """Mapped change and forest loss and gain come from the transition table, not from the sample."""
    mapped = {**rows(result, "map_area_ha", "change")["estimate"]}
    mapped |= {**rows(result, "map_area_ha", "change-class")["estimate"]}
    assert {n: round(mapped[n]) for n in ("change", "forest loss", "forest gain")} == {
        "change": 157_185,
        "forest loss": 3_722,
        "forest gain": 4_675,
    }
    assert set(rows(result, "map_area_ha", "change")["interval"]) == {"known"}


def test_one_unit_carries_most_of_the_forest_loss(labelled, strata, result):
    """One unit found cleared in the stratum of stable forest stands for 1,274 of 1,764 hectares."""
    full = labelled.sample[labelled.sample["label_status"] == "labelled"]
    stable = full[full["stratum"] == "2>2"]
    cleared = stable[(stable["ref_2013"] == "Bos") & (stable["ref_2016"] != "Bos")]
    assert (len(stable), len(cleared)) == (106, 1)
    hectares = strata.set_index("stratum").loc["2>2", "area_ha"] / len(stable)
    assert round(hectares) == 1274
    assert hectares / result["forest loss"].area_ha.value > 0.7
    assert result["forest loss"].area_ha.interval(method="normal").lower < 0


def test_the_command_line_gives_the_same(result, strata, tmp_path):
    """Reconcile and estimate through their commands give the rows of the same calls in Python."""
    column = ["--column", "unit=unit_id"]
    labels = ["--labels", FLANDERS / "labels_long.csv"]
    out = done("reconcile", "--sample", FLANDERS / "units.csv", *labels, *column, "--out", tmp_path / "labels").out
    assert "3,802 of 3,815 units labelled; of 303 labelled by several, 230 agree at every date." in out
    strata[["stratum", "map_2013", "map_2016", "pixels", "area_ha"]].to_csv(tmp_path / "crossing.csv", index=False)
    flags = ["--sample", tmp_path / "labels" / "labelled_sample.csv", "--strata", FLANDERS / "strata.csv"]
    flags += ["--crossing", tmp_path / "crossing.csv", *column, "--column", "units=pixels", "--no-fpc"]
    flags += ["--map", "map_2013,map_2016", "--reference", "ref_2013,ref_2016", "--out", tmp_path / "results"]
    flags += [word for recipe in RECIPES for word in ("--change-class", recipe)]
    line = refused("estimate", *flags)
    assert "16 of 81 strata have no labelled unit" in line
    out = done("estimate", *flags, "--unsampled", "exclude").out
    assert "Strata without a labelled unit, left out: 16, with 384,887 ha, 22.5% of the area" in out
    assert "13 of 3815 selected units in 12 strata have no complete reference label" in out
    table = estimates(tmp_path / "results")
    numbers = ["estimate", "se", "df", "lower", "upper", "n"]
    np.testing.assert_allclose(table[numbers], result.table[numbers], rtol=1e-12)
    assert table["class"].tolist() == result.table["class"].tolist()
    content = json.loads((tmp_path / "results" / "estimates.json").read_text(encoding="utf-8"))
    codes = [w["code"] for w in content["warnings"]]
    assert codes[:2] == ["unsampled-strata-excluded", "unlabelled-units"]
    assert content["warnings"][0]["names"] == UNSAMPLED


# -- what was not sampled -----------------------------------------------------------------------------------


def test_unsampled_strata_are_refused_unless_something_is_said(sample):
    """Sixteen strata without a unit, 22.5 % of the area, are not passed over in silence."""
    with pytest.raises(DesignError) as caught:
        estimated(sample)
    text = str(caught.value)
    assert text.startswith("16 of 81 strata have no labelled unit (2>8, 3>8, 4>8, 5>8, 6>8, 7>8, 8>1, 8>2 and 8 more)")
    assert "384,887 ha, 22.5% of the area" in text
    assert "--unsampled exclude" in text
    assert "--unsampled STRATUM=INTO" in text


def test_what_was_left_out_is_reported(result):
    """Codes and facts name all sixteen strata, their area, and the units without a complete label."""
    facts = {w.code: w.facts for w in result.warnings}
    excluded = facts["unsampled-strata-excluded"]
    assert (excluded["strata"], excluded["names"]) == (16, UNSAMPLED)
    assert round(excluded["area_ha"]) == UNSAMPLED_HA
    assert round(100 * excluded["share"], 1) == 22.5
    assert facts["unlabelled-units"] == {"units": 13, "selected": 3815, "strata": 12}
    assert facts["partly-labelled-units"] == {"units": 1}
    texts = " ".join(notice_text(w) for w in result.warnings)
    assert "384,887 ha, 22.5% of the area" in texts
    assert "13 of 3815 selected units in 12 strata" in texts


def test_estimates_and_mapped_areas_are_for_what_was_sampled(result):
    """The target area shrinks everywhere: estimates, mapped areas and total; the account says which strata are out."""
    assert round(result.total_area_ha.value) == SAMPLED_HA
    for measure in ("area_ha", "map_area_ha"):
        assert round(rows(result, measure, "change-class")["estimate"].sum()) == SAMPLED_HA
    account = result.account.set_index("stratum")
    assert account.index[account["role"] == "excluded"].tolist() == UNSAMPLED
    line = result.table[result.table["measure"] == "unsampled_area_ha"]
    assert line["domain"].tolist() == ["excluded, not sampled"]
    assert round(line["estimate"].iloc[0]) == UNSAMPLED_HA


def test_strata_filled_by_another_have_a_line_of_their_own(sample, strata, result):
    """Open water assumed to be like grassland: the hectares count, and are listed as assumed, apart from the rest."""
    filled = estimated(sample, unsampled=["8>8=3>3", "exclude"])
    area = strata.set_index("stratum")["area_ha"]
    lines = filled.table[filled.table["measure"] == "unsampled_area_ha"].set_index("domain")["estimate"]
    assert lines["assumed, not sampled"] == pytest.approx(area["8>8"])
    assert lines["excluded, not sampled"] == pytest.approx(area[UNSAMPLED].sum() - area["8>8"])
    assert filled.total_area_ha.value == pytest.approx(result.total_area_ha.value + area["8>8"])
    account = filled.account.set_index("stratum")
    assert (account.loc["8>8", "role"], account.loc["8>8", "filled_from"]) == ("assumed", "3>3")
    facts = {w.code: w.facts for w in filled.warnings}
    assert (facts["unsampled-strata-assumed"]["names"], facts["unsampled-strata-assumed"]["from"]) == (["8>8"], ["3>3"])
    assert facts["unsampled-strata-excluded"]["strata"] == 15
    grassland = sample.stratum == sample.strata["stratum"].tolist().index("3>3")
    full = (sample.units.frame["label_status"] == "labelled").to_numpy()
    ours = sample.units.frame[grassland & full]
    share = ((ours["ref_2013"] == "Grasland") & (ours["ref_2016"] == "Grasland")).mean()
    more = [r.select(depth="from-to")["Grasland>Grasland"].area_ha.value for r in (filled, result)]
    assert more[0] - more[1] == pytest.approx(area["8>8"] * share)


def test_a_rule_for_one_stratum_leaves_the_others_refused(sample):
    """Filling one stratum says nothing about the fifteen others."""
    with pytest.raises(DesignError, match="Nothing is said about 15 more strata"):
        estimated(sample, unsampled=["8>8=3>3"])


# -- worst cases --------------------------------------------------------------------------------------------

DEPTHS = ("cover", "from-to", "change-class", "change")


@pytest.mark.parametrize("depth", DEPTHS)
def test_worst_cases_enclose_the_estimates(depth, result):
    """Each class has its bounds over the sampled and over all strata; they hold its estimate."""
    area = result.table[(result.table["measure"] == "area_ha") & (result.table["depth"] == depth)]
    keys = ["class", "reference", "period"]
    for domain, more in (("sampled strata", 0), ("all strata", UNSAMPLED_HA)):
        bounds = result.table[(result.table["measure"] == "area_ha_worst_case") & (result.table["domain"] == domain)]
        both = area.merge(bounds[bounds["depth"] == depth], on=keys, suffixes=("", "_bound"), validate="1:1")
        assert len(both) == len(area) > 0
        slack = 1e-6
        assert (both["lower_bound"] <= both["estimate"] + slack).all()
        assert (both["upper_bound"] >= both["estimate"] - slack).all()
        assert (both["lower_bound"] >= 0).all()
        assert (both["upper_bound"] <= SAMPLED_HA + more + 1).all()
        assert both["estimate_bound"].isna().all()
        assert set(both["interval_bound"]) == {"worst-case"}


@pytest.mark.parametrize(
    ("depth", "name", "holds"),
    [
        ("change", "change", lambda first, second: first != second),
        ("change-class", "forest loss", lambda first, second: (first == "Bos") & (second != "Bos")),
        ("change-class", "forest gain", lambda first, second: (first != "Bos") & (second == "Bos")),
    ],
)
def test_worst_cases_by_direct_computation(depth, name, holds, labelled, strata, result):
    """None, or all, of the 13 units without a complete label are of the class; limits of that estimate by hand."""
    units = labelled.sample
    known = (units["label_status"] == "labelled").to_numpy()
    assert (~known).sum() == 13
    found = holds(units["ref_2013"], units["ref_2016"]).to_numpy() & known
    size = strata.set_index("stratum")["area_ha"]
    z = norm.ppf(0.975)
    limits = []
    for values, sign in ((found, -1), (found | ~known, 1)):
        by_stratum = pd.Series(values.astype(float)).groupby(units["stratum"])
        area = size[by_stratum.mean().index]
        total = (area * by_stratum.mean()).sum()
        se = np.sqrt((area**2 * by_stratum.var(ddof=1) / by_stratum.size()).sum())
        limits.append(total + sign * z * se)
    bounds = rows(result, "area_ha_worst_case", depth, "sampled strata").loc[name]
    assert bounds["lower"] == pytest.approx(max(limits[0], 0), rel=1e-9)
    assert bounds["upper"] == pytest.approx(limits[1], rel=1e-9)
    everywhere = rows(result, "area_ha_worst_case", depth, "all strata").loc[name]
    assert everywhere["lower"] == bounds["lower"]
    assert everywhere["upper"] == pytest.approx(bounds["upper"] + size[UNSAMPLED].sum())
