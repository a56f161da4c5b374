"""Statistical machinery against printed examples: exact limits, survey examples, rates, paired tables.

Each JSON file in ``data/handbook`` (other than the ``data_`` files) holds one example with its citation and the
tolerance to which its printed figures are known. What the library does not compute is listed in `NOT_COVERED`.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from survey import DATA, cluster_survey, element_survey, from_matrix, load, positions, totals, units_of, values_with

from change_assess.engine.estimate import Estimate, Known, covariance
from change_assess.engine.intervals import exact, normal, student_t
from change_assess.results.estimate import estimate

EXAMPLES = sorted(p.stem for p in (DATA / "handbook").glob("*.json") if not p.stem.startswith("data_"))

NOT_COVERED = {
    "alloc_bethel1989_chromy_constructed": "allocation for several targets",
    "binom_agresti_coull_and_hypergeometric: AC": "no Agresti-Coull interval",
    "binom_bcd2001_jeffreys": "no Jeffreys interval",
    "binom_fagerland2017_13of16: Wilson, mid-P, Jeffreys, likelihood ratio": "only the exact interval is computed",
    "binom_newcombe1998_seven_methods: 2, 3, 4, 6, 7": "only the Wald and the exact interval are computed",
    "binom_rule_of_three_hanley1983: three_over_n": "an approximation of the exact bound",
    "holm_stepdown": "no adjustment of p-values",
    "paired_mcnemar_cavo_and_agresti: Z, p, p_cc, p_exact, p_midp": "no McNemar test",
    "paired_newcombe1998_difference": "no score interval of a paired difference",
    "paired_stuart_maxwell_bhapkar_bowker: bowker": "no test of symmetry",
    "rates_fay_feuer1997_gamma": "no gamma interval of weighted rates",
    "rates_garwood_exact_poisson": "no Poisson limits",
    "rule_ipcc_approach1": "reporting rule",
    "rule_trees_uncertainty": "reporting rule",
    "rule_vcs_discount": "reporting rule",
    "strat_wendell_schmee1996_pvalues": "no exact inference over several strata",
    "strat_wendell_schmee1996_upper_bounds": "no exact inference over several strata",
    "strat_yan_su2010_wilson": "no stratified Wilson interval",
    "survey_korn_graubard_and_logit: korn_graubard, logit": "no Korn-Graubard or logit interval",
}
"""Example, or example and what of it, and why the library does not compute it."""

CHECKED: set[str] = set()


def source(name: str) -> dict:
    """The example of this name."""
    return load("handbook", name)


def checks(*names: str):
    """Mark the examples that a test checks."""
    CHECKED.update(names)
    return lambda test: test


def pair(text: str) -> tuple[int, int]:
    x, n = text.split("/")
    return int(x), int(n)


# -- one proportion ---------------------------------------------------------------------------------------


@checks("binom_newcombe1998_seven_methods")
@pytest.mark.parametrize("data", source("binom_newcombe1998_seven_methods")["inputs"]["data_x_over_n"])
def test_exact_and_wald_limits_of_newcombe(data):
    """Newcombe (1998, Statistics in Medicine 17, 857), Table I, methods 1 and 5."""
    given = source("binom_newcombe1998_seven_methods")
    x, n = pair(data)
    printed, level, tolerance = given["outputs"][data], given["inputs"]["level"], given["tolerance"]
    assert np.ravel(exact(x, n, None, level)) == pytest.approx(printed[4], abs=tolerance)
    yes, units = totals(element_survey(n, 1, fpc=False, divisor="n"), np.arange(n) < x, 1.0)
    p = yes / units
    assert np.ravel(normal(p.value, p.se, np.inf, level)) == pytest.approx(printed[0], abs=tolerance)


@checks("binom_fagerland2017_13of16")
def test_exact_limits_of_fagerland():
    """Fagerland, Lydersen & Laake (2017), chapter 2: 13 of 16, Clopper-Pearson."""
    given = source("binom_fagerland2017_13of16")
    printed = given["outputs"][given["inputs"]["methods"].index("Clopper-Pearson")]
    assert np.ravel(exact(13, 16, None, given["inputs"]["level"])) == pytest.approx(printed, abs=5e-5)


@checks("binom_rule_of_three_hanley1983")
def test_one_sided_bound_of_no_event():
    """Hanley & Lippman-Hand (1983): 1 - 0.05^(1/n) is the upper limit of the two-sided 90 % interval."""
    given = source("binom_rule_of_three_hanley1983")
    n = np.array(given["inputs"]["n"])
    lower, upper = exact(np.zeros(len(n)), n, None, 0.90)
    assert (lower == 0).all()
    assert upper == pytest.approx(1 - 0.05 ** (1 / n), rel=1e-12)
    assert upper == pytest.approx(given["recomputed"]["exact_rounded"], rel=1e-9)
    digits = [2, 2, 2, 2, 2, 3, 3]
    assert [round(u, d) for u, d in zip(upper, digits, strict=True)] == given["outputs"]["exact_rounded"]


@checks("binom_agresti_coull_and_hypergeometric")
def test_hypergeometric_limits_are_the_enumerated_ones():
    """Cochran (1977), section 3.6: 37 of 100 seen in a population of 500."""
    given = source("binom_agresti_coull_and_hypergeometric")
    h = given["inputs"]["hyper"]
    found = np.ravel(exact(h["a"], h["n"], h["N"], 0.95)) * h["N"]
    assert found == pytest.approx(given["outputs"]["hyper_total_ones_95"], abs=1e-9)


@checks("pitfall_zero_omissions_huge_stratum")
def test_no_omission_seen_in_a_huge_stratum_is_no_proof():
    """Without an omission the variance is zero, and the exact bound shows what 0.57 % of the area could hide."""
    given = source("pitfall_zero_omissions_huge_stratum")
    w, n = given["inputs"]["W"], given["inputs"]["n"]
    counts, shares = [[40, 10], [0, n]], [1 - w, w]
    areas = np.array(shares) * 1e6
    result = from_matrix(counts, ["loss", "stable"], areas, fpc=False)
    assert result["loss"].area_share.variance_by_stratum()[1] == given["outputs"]["wald_se"]
    bound = w * float(exact(0, n, None, 0.90)[1])
    assert 100 * bound == pytest.approx(given["outputs"]["one_sided95_upper_share_of_total"], abs=0.005)
    rows = result.table[result.table["against"] == ""].set_index(["measure", "class"]).sort_index()
    assert rows.loc[("commission_error", "stable"), "upper"] == pytest.approx(
        float(exact(0, n, None, 0.95)[1]), rel=1e-12
    )


# -- textbook surveys -------------------------------------------------------------------------------------


@checks("cochran_49_cities_ratio")
def test_ratio_and_expansion_total_of_cities():
    """Cochran (1977), section 6.2: 49 of 196 cities."""
    given = source("cochran_49_cities_ratio")
    i, n = given["inputs"], given["inputs"]["n"]
    y, x, _ = totals(
        element_survey(n, i["N"]), values_with(n, i["y_total"] / n, 1), values_with(n, i["x_total"] / n, 1), 1.0
    )
    assert float((y / x * i["X"]).value) == pytest.approx(given["outputs"]["ratio_total"], abs=0.5)
    assert float(y.value) == pytest.approx(given["outputs"]["expansion_total"], abs=0.5)


@checks("cochran_64_cities_allocation")
def test_variances_of_three_allocations():
    """Cochran (1977), Table 5.1: simple random, proportional and optimum allocation of 24 cities."""
    given = source("cochran_64_cities_allocation")
    i, out = given["inputs"], given["outputs"]
    (srs,) = totals(element_survey(i["n"], sum(i["N"])), values_with(i["n"], 0, i["S2_all"]))
    found = [srs]
    for n in (i["prop"], i["opt"]):
        y = np.concatenate([values_with(a, 0, v) for a, v in zip(n, i["S2"], strict=True)])
        found += totals(element_survey(sum(n), i["N"], np.repeat([0, 1], n)), y)
    assert [float(x.variance()) for x in found] == pytest.approx([out["V_srs"], out["V_prop"], out["V_opt"]], abs=0.5)
    assert [float(x.se) for x in found] == pytest.approx(out["se"], abs=0.5)


@checks("lohr_agsrs_srs_and_ratio")
def test_simple_random_sample_of_counties():
    """Lohr (2010): 300 of 3,078 counties, expansion and ratio estimate of the total."""
    given = source("lohr_agsrs_srs_and_ratio")
    i, out = given["inputs"], given["outputs"]
    survey = element_survey(i["n"], i["N"])
    y, _ = totals(survey, values_with(i["n"], i["ybar"], i["s"] ** 2), 1.0)
    rel = given["tolerance"]["rel"]
    assert [float(y.value), float(y.se)] == pytest.approx([out["total"], out["se"]], rel=rel)
    x = values_with(i["n"], i["xbar"], 1e10)
    residual = values_with(i["n"], 0, i["s_e"] ** 2)
    slope = i["ybar"] / i["xbar"]
    total, base = totals(survey, slope * x + residual, x)
    ratio = total / base
    assert float(ratio.value) == pytest.approx(out["B"], abs=5e-7)
    assert float((ratio * i["X"]).value) == pytest.approx(out["ratio_total"], rel=rel)
    # the book's standard error of the ratio estimate has N times the sample mean of x where R·X has the known X
    assert float(ratio.se) * i["N"] * i["xbar"] == pytest.approx(out["se_ratio"], rel=rel)


@checks("lohr_agstrat")
def test_stratified_sample_of_counties():
    """Lohr (2010): 300 counties in four regions; the means are known to 0.01, which the tolerance allows for."""
    given = source("lohr_agstrat")
    i, out, rel = given["inputs"], given["outputs"], given["tolerance"]["rel"]
    y = np.concatenate([values_with(*stratum) for stratum in zip(i["n"], i["mean"], i["s2"], strict=True)])
    total, units = totals(element_survey(len(y), i["N"], np.repeat(np.arange(4), i["n"])), y, 1.0)
    assert [float(total.value), float(total.se)] == pytest.approx([out["total"], out["se_total"]], rel=rel)
    mean = total / units
    assert [float(mean.value), float(mean.se)] == pytest.approx([out["mean"], out["se_mean"]], rel=rel)


@checks("lohr_gpa_cluster")
def test_one_stage_cluster_sample_of_suites():
    """Lohr (2010): 5 of 100 suites of 4 students, from the suites' totals."""
    given = source("lohr_gpa_cluster")
    i, out, m = given["inputs"], given["outputs"], len(given["inputs"]["totals"])
    y = np.repeat(np.array(i["totals"]) / i["M"], i["M"])
    total, units = totals(cluster_survey(np.repeat(np.arange(m), i["M"]), i["N"]), y, 1.0)
    mean = total / units
    assert float(total.value) == pytest.approx(out["t_hat"], abs=0.05)
    assert float(total.variance()) * m / (i["N"] ** 2 * (1 - m / i["N"])) == pytest.approx(out["s2_t"], abs=5e-4)
    assert [float(mean.value), float(mean.se)] == pytest.approx([out["mean"], out["se_mean"]], abs=5e-4)


# -- schools of California: the data sets of R's survey package ---------------------------------------------


def column(data: dict, name: str) -> np.ndarray:
    return np.array(data[name], float)


@checks("survey_api_stratified")
def test_stratified_sample_of_schools():
    """R survey 4.1.1, apistrat: mean, total and ratio with finite population correction."""
    given, data = source("survey_api_stratified"), load("handbook", "data_apistrat")
    stratum = positions(data["stype"])
    N = [given["inputs"]["N"][k] for k in sorted(set(data["stype"]))]
    y = [column(data, name) for name in ("api00", "enroll", "api.stu")]
    score, enrolled, tested, schools = totals(element_survey(len(stratum), N, stratum), *y, 1.0)
    out = given["outputs"]
    found = [score / schools, enrolled, tested / enrolled]
    wanted = [("mean", "se"), ("total_enroll", "se_total"), ("ratio", "se_ratio")]
    for x, (value, se) in zip(found, wanted, strict=True):
        assert [float(x.value), float(x.se)] == pytest.approx([out[value], out[se]], rel=given["tolerance"]["rel"])


def districts(data: dict, units=None):
    cluster = positions(data["dnum"])
    return cluster_survey(cluster, 757, units)


@checks("survey_api_one_stage_cluster")
def test_cluster_sample_of_schools():
    """R survey documentation, apiclus1: its totals weigh each school 6194/183 instead of 757/15."""
    given, data = source("survey_api_one_stage_cluster"), load("handbook", "data_apiclus1")
    y = [column(data, name) for name in ("api00", "enroll", "api.stu")]
    elementary = np.array(data["stype"]) == "E"
    survey = districts(data)
    score, enrolled, tested, kind, schools = totals(survey, *y, elementary, 1.0)
    factor = data["pw"][0] / (757 / 15)
    found = [score / schools, enrolled * factor, kind / schools, tested / enrolled]
    wanted = [("mean_api00", "se"), ("total_enroll", "se_total"), ("prop_E", "se_E"), ("ratio", "se_ratio")]
    limits = np.reshape(given["tolerance"], (4, 2))
    for x, (value, se), (most, most_se) in zip(found, wanted, limits, strict=True):
        assert float(x.value) == pytest.approx(given["outputs"][value], abs=most)
        assert float(x.se) == pytest.approx(given["outputs"][se], abs=most_se)
    assert survey.only.design.df(survey.only.cells) == 14


@checks("survey_korn_graubard_and_logit")
def test_t_interval_of_a_proportion_from_clusters():
    """R survey 4.1.1, apiclus1: share of schools with a score above 800, t limits with 14 degrees of freedom."""
    given, data = source("survey_korn_graubard_and_logit"), load("handbook", "data_apiclus1")
    yes, schools = totals(districts(data), column(data, "api00") > 800, 1.0)
    p = yes / schools
    assert float(p.value) == pytest.approx(given["outputs"]["p"], rel=1e-9)
    limits = np.ravel(student_t(p.value, p.se, np.array(given["inputs"]["df"]), 0.95))
    assert limits == pytest.approx(given["outputs"]["wald"], abs=given["tolerance"])


def test_two_stage_sample_of_schools():
    """R survey vignette, apiclus2 (40 of 757 districts, up to 5 schools each): mean 670.81, SE 30.099."""
    data = load("handbook", "data_apiclus2")
    cluster = positions(data["dnum"])
    units = np.zeros(cluster.max() + 1)
    units[cluster] = data["fpc2"]
    survey = cluster_survey(cluster, 757, units)
    score, schools = totals(survey, column(data, "api00"), 1.0)
    mean = score / schools
    assert float(mean.value) == pytest.approx(670.81, abs=0.005)
    assert float(mean.se) == pytest.approx(30.099, abs=0.0005)


# -- paired tables ----------------------------------------------------------------------------------------


@checks("paired_mcnemar_cavo_and_agresti")
def test_interval_of_a_net_change():
    """Agresti (1990), section 10.1: Wald limits of the change, -0.06 to -0.02; its divisor is n."""
    given = source("paired_mcnemar_cavo_and_agresti")
    a, b, c, d = given["inputs"]["agresti"]
    (net,) = marginal_differences([[a, b], [c, d]])
    n = a + b + c + d
    se = net.se * np.sqrt((n - 1) / n)
    assert np.ravel(normal(net.value, se, np.inf, 0.95)) == pytest.approx(given["recomputed"]["agresti_ci"], abs=1e-8)
    assert np.ravel(normal(net.value, se, np.inf, 0.95)) == pytest.approx(given["outputs"]["agresti_ci"], abs=0.005)


def marginal_differences(counts) -> list[Estimate]:
    """Second minus first share of each class but the last, of one sample seen twice."""
    classes = [f"c{i}" for i in range(len(counts))]
    strata = pd.DataFrame({"stratum": ["all"], "area_ha": [1.0]})
    result = estimate(units_of(counts, classes, ("t1", "t2")), strata=strata, reference=["t1", "t2"])
    first, second = (result.select(depth="cover", period=p) for p in ("t1", "t2"))
    return [second[c].area_share - first[c].area_share for c in classes[:-1]]


@checks("paired_stuart_maxwell_bhapkar_bowker")
@pytest.mark.parametrize("table", ["peterson", "vision"])
def test_marginal_homogeneity_from_the_covariance_of_net_changes(table):
    """Bhapkar (1966) is the Wald statistic of all net changes, divisor n; Stuart (1955) follows as W/(1 + W/n)."""
    given = source("paired_stuart_maxwell_bhapkar_bowker")
    counts = np.array(given["inputs"][table])
    changes = marginal_differences(counts)
    n = counts.sum()
    d = np.array([x.value for x in changes])
    wald = d @ np.linalg.solve(covariance(*changes) * (n - 1) / n, d)
    printed, most = given["outputs"][table], 0.0005 if table == "peterson" else 0.005
    assert wald == pytest.approx(printed["bhapkar"], abs=most)
    assert wald / (1 + wald / n) == pytest.approx(printed["stuart"], abs=most)


# -- rates and areas --------------------------------------------------------------------------------------

CENSUS = element_survey(2, 2)


def known(value: float) -> Estimate:
    return Estimate(Known(value, CENSUS))


@checks("rates_puyravaud2003")
def test_logarithmic_annual_rate():
    """Puyravaud (2003): r = ln(A2/A1)/t; the compound rate is exp(r) - 1."""
    given = source("rates_puyravaud2003")
    i = given["inputs"]
    rate = (known(i["A2"]) / known(i["A1"])).log() / (i["t2"] - i["t1"])
    assert 100 * rate.value == pytest.approx(given["outputs"]["r_percent"], abs=0.005)
    assert 100 * (rate.exp() - 1).value == pytest.approx(-0.8589, abs=5e-5)
    assert rate.se == 0


@checks("rates_fao_fra2020")
def test_compound_annual_rate_and_net_change():
    """FAO (2020): forest of the world, net change a year and compound rate."""
    given = source("rates_fao_fra2020")
    areas, years = [known(a) for a in given["inputs"]["area"]], np.diff(given["inputs"]["years"])
    periods = list(zip(areas, areas[1:], years, strict=False))
    net = [((b - a) / t).value for a, b, t in periods]
    rates = [100 * (((b / a).log() / t).exp() - 1).value for a, b, t in periods]
    assert net == pytest.approx(given["outputs"]["net_change_per_year"], abs=0.5)
    assert rates == pytest.approx(given["outputs"]["rate_percent"], abs=0.005)
    assert (areas[0] - areas[-1]).value == given["outputs"]["total_loss"]


@checks("geo_cell_area_wgs84")
def test_cells_of_the_whole_ellipsoid_have_its_area():
    """Authalic zones of WGS84: all cells of a global one-degree grid add up to the surface of the Earth."""
    pyproj = pytest.importorskip("pyproj")
    from change_assess.maps.area import pixel_areas

    given = source("geo_cell_area_wgs84")
    areas = pixel_areas(pyproj.CRS(4326).to_wkt(), (1.0, 0.0, -180.0, 0.0, -1.0, 90.0), 180, 360, "earth")
    total_km2 = areas.hectares.sum() * 360 / 100
    assert total_km2 == pytest.approx(given["outputs"]["earth_area_km2"], rel=given["tolerance"]["rel"])


def test_every_example_is_checked_or_listed():
    """Each file is tested here or named with a reason, never both, and no name is left over."""
    whole = {name for name in NOT_COVERED if ":" not in name}
    assert CHECKED | whole == set(EXAMPLES)
    assert not CHECKED & whole
    assert {name.split(":")[0] for name in NOT_COVERED} <= set(EXAMPLES)
