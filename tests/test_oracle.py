"""All cases of an independent survey-statistics implementation (R survey 4.1.1), to 1e-8 relative."""

import json

import numpy as np
import pytest
from oracle import CASES, Case

from change_assess.engine.intervals import normal


def agrees(found: float, wanted: float | None, scale: float) -> bool:
    if wanted is None:
        return bool(np.isnan(found))
    return abs(found - wanted) <= 1e-8 * abs(wanted) + 1e-12 * scale


@pytest.mark.parametrize("folder", CASES, ids=lambda p: p.name)
def test_every_estimate_and_standard_error_agrees(folder):
    """Each quantity of the case has the oracle's estimate and standard error."""
    case = Case(folder)
    area = case.strata["area_ha"].sum()
    wrong = []
    for item in case.expected:
        found = case.look_up(item["quantity"], item["class"], item["context"])
        scale = area if "_ha" in item["quantity"] else 1.0
        if not (agrees(found.value, item["estimate"], scale) and agrees(found.se, item["se"], scale)):
            wrong.append((item, found.value, found.se))
    assert not wrong, f"{len(wrong)} of {len(case.expected)} differ, first: {wrong[0]}"


def test_all_cases_are_there():
    """The 58 cases with their 5,000 and more quantities are all in the repository."""
    assert len(CASES) == 58
    assert sum(len(Case(folder).expected) for folder in CASES) > 5000


@pytest.mark.parametrize("folder", [c for c in CASES if (c / "intervals.json").exists()], ids=lambda p: p.name)
def test_normal_limits_agree(folder):
    """The normal interval is estimate ± z · SE, not clipped, as in the oracle's 'wald' rows."""
    case = Case(folder)
    checked = 0
    for item in json.loads((folder / "intervals.json").read_text()):
        if item["method"] != "wald" or item["df_rule"] != "normal" or item["lower"] is None:
            continue
        found = case.look_up(item["quantity"], item["class"], item["context"])
        lower, upper, *_ = found.interval(0.95, "normal")
        assert lower == pytest.approx(item["lower"], rel=1e-8, abs=1e-10)
        assert upper == pytest.approx(item["upper"], rel=1e-8, abs=1e-10)
        checked += 1
    assert checked >= 2


@pytest.mark.parametrize("folder", [c for c in CASES if (c / "intervals.json").exists()], ids=lambda p: p.name)
def test_t_limits_agree(folder):
    """With the degrees of freedom of the whole design the t interval is the oracle's 'mean' interval."""
    case = Case(folder)
    checked = 0
    for item in json.loads((folder / "intervals.json").read_text()):
        if item["method"] not in ("mean", "wald") or item["df_rule"] != "full" or item["lower"] is None:
            continue
        found = case.look_up(item["quantity"], item["class"], item["context"])
        assert found.df == item["df"]
        lower, upper, *_ = found.interval(0.95, "t")
        assert lower == pytest.approx(item["lower"], rel=1e-8, abs=1e-10)
        assert upper == pytest.approx(item["upper"], rel=1e-8, abs=1e-10)
        checked += 1
    assert checked >= 2


def test_normal_is_not_clipped():
    """A small share with a large error has a negative normal limit: it is shown, not hidden."""
    lower, upper = normal(np.array(0.01), np.array(0.02), np.array(10.0), 0.95)
    assert lower < 0 < upper
