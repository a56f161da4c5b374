"""Worked examples printed in books and papers, recomputed by the library to the last printed digit.

Each JSON file in ``data/published`` holds one example with its citation. Its figures are computed here by one
function, in the order of the file's outputs, and compared in one place.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np
import pandas as pd
import pytest
from survey import (
    DATA,
    cluster_survey,
    element_survey,
    from_matrix,
    from_random_sample,
    load,
    totals,
    units_of,
    values_with,
)

from change_assess.engine.estimate import Estimate, Known
from change_assess.engine.intervals import exact
from change_assess.measures import map_share
from change_assess.results.estimate import estimate
from change_assess.results.result import Result

EXAMPLES = sorted(path.stem for path in (DATA / "published").glob("*.json"))

NOT_COVERED = {
    "agresti-approval-mcnemar-paired-change: McNemar chi-square, no correction": "no McNemar test",
    "agresti-approval-mcnemar-paired-change: McNemar chi-square, continuity corrected": "no McNemar test",
    "agresti-approval-mcnemar-paired-change: p-value, corrected": "no McNemar test",
    "berthouex-brown-2002-stratified: n for margin 1.0": "sample-size planning",
    "berthouex-brown-2002-stratified: allocation": "sample-size planning",
    "congalton-green-multinomial-sample-size": "sample-size planning, from the normal quantiles of multinomial shares",
    "congalton-green-normalized-matrix": "no iterative proportional fitting of matrices",
    "fitzpatrick-lins-1981-binomial-sample-size": "sample-size planning",
    "fleiss-1981-kappa-standard-errors: SE under kappa=0": "no test of kappa against zero",
    "fleiss-1981-kappa-standard-errors: z with rounded 0.68/0.076": "no test of kappa against zero",
    "manly-ecological-sampling-n-with-fpc": "sample-size planning",
    "newcombe-1998-single-proportion: Wilson score interval": "no score interval",
    "olofsson-2014-sample-size": "sample-size planning",
    "thompson-1987-multinomial-worst-case": "sample-size planning",
}
"""Example, or example and quantity, and why the library does not compute it."""

CUT_OFF = {
    ("cochran-1977-households-cluster-proportion", "cluster (ratio) variance", None),
    ("lillesand-kiefer-error-matrix", "user's accuracy", "corn"),
    ("scheaffer-cluster-renters", "residual variance", None),
}
"""Figures whose printed digits are those of the exact figure cut off, not rounded."""

FROM_ROUNDED_INPUTS = {
    # printed from unrounded stratum means; the means at hand are rounded to 0.1 acre, 3,078 counties in all
    ("lohr-agstrat-stratified-total", "total", None): 0.05 * 3078,
}
"""Largest difference that the rounding of the printed inputs can make."""


@dataclass(frozen=True)
class Figure:
    """What the library found for one printed output."""

    value: float = np.nan
    se: float = np.nan
    half_width: float = np.nan
    lower: float = np.nan
    upper: float = np.nan


CHECKS: dict[str, Callable[[dict], Iterable[Figure | None]]] = {}


def example(name: str):
    """Register the function that computes an example's outputs, in their order; None for those not covered."""

    def register(function):
        CHECKS[name] = function
        return function

    return register


def fig(x, multiplier: float = np.nan, scale: float = 1.0) -> Figure:
    """Figure of a `Linearised` or `Estimate`; the half-width is `multiplier` times the standard error."""
    return Figure(float(x.value) * scale, float(x.se) * scale, multiplier * float(x.se) * scale)


# -- matrices of counts -----------------------------------------------------------------------------------


@example("olofsson-2014-good-practices-4class")
def olofsson(given):
    pixels = np.array(given["map_area_pixels"])
    result = from_matrix(given["counts"], given["classes"], pixels * given["pixel_area_ha"], units=pixels, fpc=False)
    z, first = given["ci_multiplier"], given["classes"][0]
    yield from (fig(result[c].area_ha, z) for c in given["classes"])
    yield fig(result[first].area_ha / given["pixel_area_ha"], z)
    yield fig(result[first].area_share)
    yield fig(result.overall_accuracy, z)
    yield from (fig(result[c].users_accuracy, z) for c in given["classes"])
    yield from (fig(result[c].producers_accuracy, z) for c in given["classes"])


def matrix_figures(given, outputs) -> Iterable[Figure]:
    """Accuracies in percent, and kappa, of a simple random sample."""
    result = from_random_sample(given["counts"], given["classes"])
    for item in outputs:
        if item["quantity"] == "kappa":
            yield fig(result.kappa, scale=100 if item["unit"] == "percent" else 1)
        elif item["quantity"] == "overall accuracy":
            yield fig(result.overall_accuracy, scale=100)
        else:
            measure = item["quantity"].replace("'", "").replace(" ", "_")
            yield fig(getattr(result[item["class"]], measure), scale=100)


for matrix_example in (
    "congalton-1991-error-matrix",
    "jensen-error-matrix-kappa",
    "lillesand-kiefer-error-matrix",
    "story-congalton-1986-users-producers",
):
    CHECKS[matrix_example] = lambda given, name=matrix_example: matrix_figures(
        given, load("published", name)["outputs"]
    )


def kappa_se(result: Result, n: int) -> float:
    """Standard error of kappa with divisor n: the engine divides by n - 1, Fleiss, Cohen & Everitt (1969) by n."""
    return result.kappa.se * np.sqrt((n - 1) / n)


def fleiss_cohen_everitt(counts, transposed: bool = False) -> float:
    """Large-sample variance of kappa (Fleiss, Cohen & Everitt 1969; Bishop, Fienberg & Holland 1975)."""
    p = np.asarray(counts) / np.sum(counts)
    row, column = p.sum(axis=1), p.sum(axis=0)
    agree, chance = np.trace(p), row @ column
    t3 = np.diag(p) @ (row + column)
    margins = column[:, None] + row[None, :]  # cell (i, j): column total of i plus row total of j
    t4 = (p * (margins.T if transposed else margins) ** 2).sum()
    a, b = 1 - agree, 1 - chance
    first = agree * a / b**2
    second = 2 * a * (2 * agree * chance - t3) / b**3
    return (first + second + a**2 * (t4 - 4 * chance**2) / b**4) / np.sum(counts)


@example("congalton-green-two-matrix-kappa-z")
def two_matrices(given):
    """The book's variances follow from a transposed pairing of indices in the variance of kappa."""
    matrices = [given["counts_1"], given["counts_2"]]
    kappas = [from_random_sample(m, given["classes"]).kappa.value for m in matrices]
    variances = [fleiss_cohen_everitt(m, transposed=True) for m in matrices]
    yield from (Figure(k) for k in kappas)
    yield from (Figure(v) for v in variances)
    yield from (Figure(k / np.sqrt(v)) for k, v in zip(kappas, variances, strict=True))
    yield Figure((kappas[0] - kappas[1]) / np.sqrt(sum(variances)))


@example("cohen-1968-weighted-kappa")
def weighted_kappa(given):
    """Weighted kappa is a person's own measure, a plain function of totals."""
    counts = np.round(np.array(given["proportions"]) * given["n"]).astype(int)
    result = from_random_sample(counts, ["a", "b", "c"])
    yield fig(result.kappa)
    for name in ("disagreement_weights", "disagreement_weights_asymmetric"):
        weights = np.array(given[name])

        def own(t, weights=weights):
            seen = (t.joint * weights[t.row, t.column]).sum(axis=-1) / t.everything
            expected = ((t.mapped @ weights) * t.reference).sum(axis=-1) / (t.everything * t.everything)
            return 1 - seen / expected

        yield fig(result.measure(own))


@example("fleiss-1981-kappa-standard-errors")
def fleiss(given):
    """The book rounds kappa to 0.68 before it computes the standard error, .087; unrounded it is .0877."""
    counts = np.array(given["counts"])
    kappa = from_random_sample(counts, ["a", "b", "c"]).kappa
    yield fig(kappa)
    rounded = fleiss_se(counts, 0.68)
    assert fleiss_se(counts, kappa.value) == pytest.approx(kappa.se * np.sqrt(99 / 100), rel=1e-12)
    yield Figure(rounded)
    yield None
    yield None


def fleiss_se(counts, kappa: float) -> float:
    """Standard error of kappa as Fleiss (1981) writes it, so that kappa can be rounded on the way."""
    p = np.asarray(counts) / np.sum(counts)
    row, column = p.sum(axis=1), p.sum(axis=0)
    chance = row @ column
    a = np.diag(p) @ (1 - (row + column) * (1 - kappa)) ** 2
    pairs = p * (column[:, None] + row[None, :]) ** 2
    b = (1 - kappa) ** 2 * (pairs.sum() - np.trace(pairs))
    c = (kappa - chance * (1 - kappa)) ** 2
    return float(np.sqrt(a + b - c) / ((1 - chance) * np.sqrt(np.sum(counts))))


@example("apparent-prevalence-correction")
def prevalence(given):
    """The test is the map, the true state the reference; specificity is the producer's accuracy of 'free'."""
    tp, fn, tn, fp = (given[k] for k in ("true_positive", "false_negative", "true_negative", "false_positive"))
    result = from_random_sample([[tp, fp], [fn, tn]], ["ill", "free"])
    sensitivity, specificity = result["ill"].producers_accuracy, result["free"].producers_accuracy
    apparent = result.measure(map_share)["ill"]
    corrected = (apparent + specificity - 1) / (sensitivity + specificity - 1)
    assert corrected.value == pytest.approx(result["ill"].area_share.value, abs=1e-12)
    yield from (fig(x) for x in (sensitivity, specificity, apparent, corrected))


# -- two dates --------------------------------------------------------------------------------------------


@example("agresti-approval-mcnemar-paired-change")
def approval(given):
    """The printed standard error has divisor n, the engine n - 1."""
    units = units_of(given["table"], ["approve", "disapprove"], ("poll_1", "poll_2"))
    strata = pd.DataFrame({"stratum": ["all"], "area_ha": [1.0]})
    result = estimate(units, strata=strata, reference=["poll_1", "poll_2"])
    first, second = (result.select(depth="cover", period=p)["approve"].area_share for p in ("poll_1", "poll_2"))
    net = second - first
    gain_minus_loss = result["disapprove>approve"].area_share - result["approve>disapprove"].area_share
    assert net.value == pytest.approx(gain_minus_loss.value, abs=1e-15)
    assert net.se == pytest.approx(gain_minus_loss.se, rel=1e-12)
    se = net.se * np.sqrt((given["n"] - 1) / given["n"])
    half = 1.959964 * se
    yield from (None, None, None)
    yield Figure(net.value, se, half, net.value - half, net.value + half)


CENSUS = element_survey(2, 2)


def known(value: float) -> Estimate:
    """A number known without error."""
    return Estimate(Known(value, CENSUS))


def compound_rate(before: Estimate, after: Estimate, years: float) -> Estimate:
    """Annual rate in percent (FAO): (A2/A1)^(1/t) - 1."""
    return (((after / before).log() / years).exp() - 1) * 100


@example("fao-fra-2010-2015-2020-world")
def world_forest(given):
    for item in load("published", "fao-fra-2010-2015-2020-world")["outputs"]:
        report, period = item["class"].split()
        first, last = period.split("-")
        before, after = (known(given[report][year]) for year in (first, last))
        years = int(last) - int(first)
        change = (after - before) / years if item["quantity"] == "annual net change" else None
        yield fig(compound_rate(before, after, years) if change is None else change)


@example("fao-rss-2012-net-rate")
def remote_sensing_survey(given):
    yield fig(compound_rate(known(100.0), known(100.0 + given["total_change_percent"]), given["years"]))


# -- simple random and systematic samples -----------------------------------------------------------------


@example("freese-1962-srs-mean-total")
def pine_seedlings(given):
    y, N = np.array(given["values"]), given["N"]
    total, units = totals(element_survey(len(y), N), y, 1.0)
    mean = total / units
    yield fig(mean)
    yield Figure(float(mean.variance()) * len(y) / (1 - len(y) / N))
    yield fig(total)


@example("freese-1962-proportion")
def germination(given):
    """The limits are 2 standard errors and a continuity correction of 1/(2n) either side."""
    x, n = given["x"], given["n"]
    p = from_random_sample([[x, 0], [0, n - x]], ["yes", "no"])["yes"].area_share
    half = given["t_multiplier"] * p.se + 1 / (2 * n)
    yield fig(p)
    yield Figure(p.value, lower=p.value - half, upper=p.value + half)


@example("newcombe-1998-single-proportion")
def single_proportion(given):
    """The Wald interval has divisor n."""
    for item in load("published", "newcombe-1998-single-proportion")["outputs"]:
        x, n = (int(part) for part in item["class"].split("/"))
        if item["quantity"] == "Wald interval":
            survey = element_survey(n, 1, fpc=False, divisor="n")
            yes, units = totals(survey, np.arange(n) < x, 1.0)
            p = yes / units
            half = 1.959964 * float(p.se)
            yield Figure(float(p.value), lower=float(p.value) - half, upper=float(p.value) + half)
        elif item["quantity"] == "Clopper-Pearson interval":
            lower, upper = exact(np.array([x]), np.array([n]), None, item["level"])
            yield Figure(x / n, lower=lower[0], upper=upper[0])
        else:
            yield None


@example("ipcc-direct-area-estimation")
def grid_points(given):
    """Points of a grid each stand for one square of it; the region has 100 of them."""
    square_ha = given["grid_spacing_m"] ** 2 / 10_000
    seen = given["points_in_class"]
    result = from_random_sample([[seen, 0], [0, 100 - seen]], ["in", "out"], 100 * square_ha)
    area = result["in"].area_ha
    yield fig(area / seen)
    yield fig(area)


@example("cochran-1977-49-cities-ratio")
def cities(given):
    x, y, N = np.array(given["x_1920"]), np.array(given["y_1930"]), given["N"]
    total_y, total_x = totals(element_survey(len(y), N), y, x)
    fraction = len(y) / N
    yield fig(total_y * fraction)
    yield fig(total_x * fraction)
    yield fig(total_y / total_x * given["X_total"])
    yield fig(total_y)


# -- stratified samples -----------------------------------------------------------------------------------


def from_moments(n, means, variances, N, **options):
    """Total, and number of units, of a stratified sample with these sample sizes, means and variances."""
    n = np.asarray(n, int)
    y = np.concatenate([values_with(*stratum) for stratum in zip(n, means, variances, strict=True)])
    survey = element_survey(len(y), N, np.repeat(np.arange(len(n)), n), **options)
    return totals(survey, y, 1.0)


@example("berthouex-brown-2002-stratified")
def three_strata(given):
    total, units = from_moments(given["n_h"], given["mean_h"], given["variance_h"], given["weight"], fpc=False)
    mean = total / units
    yield fig(mean, 1.96)
    yield Figure(float(mean.variance()))
    yield from [None] * 4


@example("scheaffer-stratified-tv")
def television(given):
    total, units = from_moments(given["n_h"], given["mean_h"], np.square(given["sd_h"]), given["N_h"])
    mean = total / units
    yield fig(mean, 2)
    yield Figure(float(mean.variance()))


@example("lohr-agstrat-stratified-total")
def farms(given):
    total, units = from_moments(given["n_h"], given["mean_h"], given["variance_h"], given["N_h"])
    yield fig(total)
    yield fig(total / units)


@example("cochran-1977-64-cities-allocation")
def allocations(given):
    """A sample whose variances are those of the population has the variance of the textbook's plan."""
    N, n = given["N_h"], given["n"]
    random, _ = totals(element_survey(n, sum(N)), values_with(n, 0, given["S2_total"]), 1.0)
    proportional, _ = from_moments(given["proportional"], [0, 0], given["S2_h"], N)
    equal, _ = from_moments(given["equal"], [0, 0], given["S2_h"], N)
    yield from (Figure(float(x.variance()), float(x.se)) for x in (random, proportional, equal))


@example("lehtonen-pahkinen-certainty-stratum")
def certainty_stratum(given):
    """Weights are unequal: y times its weight, over the stratum's N/n, is what each of the units carries.

    A take-all stratum adds no variance, so that without the correction the error is that of the other stratum over
    the root of its 1 - f.
    """
    weight, index, N = np.array(given["weight"]), given["certainty_index"], given["N_noncertainty"]
    stratum = (np.arange(len(weight)) != index).astype(int)
    others = stratum.sum()
    relative = np.where(stratum == 1, weight * others / N, weight)
    total, units = totals(element_survey(len(weight), [1, N], stratum), np.array(given["y"]) * relative, relative)
    no_fpc = 1 / np.sqrt(1 - others / N)
    mean = total / units
    for x in (total, mean):
        yield fig(x)
        yield Figure(float(x.value), float(x.se) * no_fpc)


@example("lumley-stratified-domain-mean")
def domain_mean(given):
    x, stratum = np.array(given["x"]), np.array(given["stratum"]) - 1
    for inside in (x > 4, x <= 4):
        total, units = totals(element_survey(len(x), given["N_h"], stratum, fpc=False), x * inside, inside)
        yield fig(total / units)


# -- cluster samples --------------------------------------------------------------------------------------


def from_clusters(sizes, sums, M: float, *more, **options):
    """Totals of a sample of whole clusters, where the sums are spread evenly over the elements."""
    sizes = np.asarray(sizes, int)
    cluster = np.repeat(np.arange(len(sizes)), sizes)
    each = [np.repeat(np.asarray(s, float) / sizes, sizes) for s in (sums, *more)]
    return totals(cluster_survey(cluster, M, **options), *each, 1.0)


@example("lohr-gpa-one-stage-cluster")
def grade_points(given):
    y = np.array(given["values"])
    m, M = len(y), given["N_clusters"]
    total, units = totals(cluster_survey(np.repeat(np.arange(m), 4), M), y.ravel(), 1.0)
    yield fig(total)
    yield Figure(float(total.variance()) * m / (M**2 * (1 - m / M)))
    yield fig(total / units)


@example("lohr-algebra-cluster-ratio")
def algebra(given):
    sizes = np.array(given["M_i"])
    total, units = from_clusters(sizes, sizes * given["mean_i"], given["N_clusters"])
    yield fig(total / units)


def residual_variance(ratio, sizes, M: int) -> float:
    """Variance of the residuals of clusters behind the variance of a ratio to size."""
    m, mean_size = len(sizes), np.mean(sizes)
    return float(ratio.variance()) * m * mean_size**2 / (1 - m / M)


@example("scheaffer-cluster-income")
def income(given):
    sizes, M = given["cluster_size"], given["N_clusters"]
    total, units = from_clusters(sizes, given["cluster_total"], M)
    mean = total / units
    yield fig(mean, 2)
    yield Figure(float(mean.variance()))
    yield Figure(np.sqrt(residual_variance(mean, sizes, M)))


@example("scheaffer-cluster-renters")
def renters(given):
    sizes, M = given["cluster_size"], given["N_clusters"]
    total, units = from_clusters(sizes, given["cluster_count"], M)
    share = total / units
    yield fig(share, 2)
    yield Figure(residual_variance(share, sizes, M))
    yield Figure(float(share.variance()))


@example("cochran-1977-households-cluster-proportion")
def doctor(given):
    """The binomial variance beside it is that of the people as a simple random sample, with divisor n."""
    sizes, seen = np.array(given["cluster_size"], int), np.array(given["cluster_count"], int)
    total, units = from_clusters(sizes, seen, 1000, fpc=False)
    share = total / units
    yield fig(share)
    yield Figure(float(share.variance()))
    n = int(sizes.sum())
    people, everyone = totals(element_survey(n, 1, fpc=False, divisor="n"), np.arange(n) < seen.sum(), 1.0)
    yield Figure(float((people / everyone).variance()))


@example("lehtonen-pahkinen-two-cluster")
def two_clusters(given):
    """Published with 1 - 2/32, where 32 counts municipalities; the clusters of the population are 8."""
    cluster = np.unique(given["cluster"], return_inverse=True)[1]
    y, x = totals(cluster_survey(cluster, 2 * given["weight"]), np.array(given["y"]), np.array(given["x"]))
    as_published = np.sqrt((1 - 2 / given["fpc_population_as_published"]) / (1 - 2 / 8))
    yield from (Figure(float(q.value), float(q.se) * as_published) for q in (y, x, y / x))


@example("lumley-api-one-stage-cluster")
def school_districts(given):
    """Published totals take 6194/183 as every school's weight, where the design's is 757/15."""
    table = pd.DataFrame(given["cluster_totals"])
    sums = [table[c] for c in ("sum_api00", "sum_enroll", "sum_api_stu", "n_E", "n_H", "n_M")]
    found = from_clusters(table["schools"], sums[0], given["N_clusters"], *sums[1:])
    score, enrolled, tested, *kinds, schools = found
    factor = given["element_weight"] / (given["N_clusters"] / given["n_clusters"])
    yield fig(score / schools)
    yield fig(enrolled * factor)
    yield fig(tested / enrolled)
    yield from (fig(kind * factor) for kind in kinds)


# -- the comparison ---------------------------------------------------------------------------------------

PARTS = [
    ("value", "value", "decimals_published"),
    ("se", "se", "decimals_se"),
    ("half_width", "ci_halfwidth", "decimals_ci"),
    ("lower", "ci_lower", "decimals_published"),
    ("upper", "ci_upper", "decimals_published"),
]


def reason(name: str, item: dict) -> str | None:
    return NOT_COVERED.get(name, NOT_COVERED.get(f"{name}: {item['quantity']}"))


def differences(name: str, item: dict, found: Figure) -> Iterable[str]:
    """Say where a figure is not what is printed."""
    key = (name, item["quantity"], item["class"])
    for part, printed_as, decimals_as in PARTS:
        printed = item.get(printed_as)
        if printed is None:
            continue
        ours, digits = getattr(found, part), item.get(decimals_as, item["decimals_published"])
        if key in CUT_OFF:
            wrong = np.floor(ours * 10**digits) != np.round(printed * 10**digits)
        else:
            wrong = not abs(ours - printed) <= FROM_ROUNDED_INPUTS.get(key, 0.5 * 10**-digits * (1 + 1e-9))
        if wrong:
            yield f"{key}: {part} is printed {printed}, found {ours}"


@pytest.mark.parametrize("name", [e for e in EXAMPLES if e not in NOT_COVERED])
def test_printed_figures_are_reproduced(name):
    """Every covered figure of the example, with its standard error and limits, has the printed digits."""
    source = load("published", name)
    figures = list(CHECKS[name](source["inputs"]))
    wrong = []
    for item, found in zip(source["outputs"], figures, strict=True):
        assert (found is None) == (reason(name, item) is not None), f"{item['quantity']} is neither or both"
        wrong += [] if found is None else list(differences(name, item, found))
    assert not wrong, f"{source['citation']}: {wrong}"


def test_every_example_is_checked_or_listed():
    """Each file is computed or named with a reason, never both, and no name is left over."""
    whole = {name for name in NOT_COVERED if ":" not in name}
    assert set(CHECKS) | whole == set(EXAMPLES)
    assert not set(CHECKS) & whole
    quantities = {f"{n}: {o['quantity']}" for n in CHECKS for o in load("published", n)["outputs"]}
    assert {name for name in NOT_COVERED if ":" in name} <= quantities


# -- kappa: the standard error ----------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["congalton-1991-error-matrix", "lillesand-kiefer-error-matrix"])
def test_kappa_standard_error_is_the_large_sample_one_times_a_factor(name):
    """The engine's standard error of kappa times sqrt((n-1)/n) is that of Fleiss, Cohen & Everitt (1969)."""
    source = load("published", name)
    counts = np.array(source["inputs"]["counts"])
    found = kappa_se(from_random_sample(counts, source["inputs"]["classes"]), counts.sum())
    assert found == pytest.approx(np.sqrt(fleiss_cohen_everitt(counts)), rel=1e-12)
    recomputed = next(
        r for o, r in zip(source["outputs"], source["recomputed"], strict=True) if o["quantity"] == "kappa"
    )
    assert found == pytest.approx(recomputed["se"], rel=1e-10)


def test_kappas_of_two_independent_matrices_have_the_correct_variances():
    """Not the printed .0007778 and .0010233 (Congalton & Green) but .00076995, .00101429 and pairwise Z .3102."""
    given = load("published", "congalton-green-two-matrix-kappa-z")["inputs"]
    matrices = [np.array(given[k]) for k in ("counts_1", "counts_2")]
    results = [from_random_sample(m, given["classes"]) for m in matrices]
    variances = [kappa_se(r, m.sum()) ** 2 for r, m in zip(results, matrices, strict=True)]
    assert variances == pytest.approx([0.00076995, 0.00101429], abs=5e-9)
    z = [r.kappa.value / np.sqrt(v) for r, v in zip(results, variances, strict=True)]
    assert z == pytest.approx([23.55, 20.11], abs=0.005)
    difference = results[0].kappa - results[1].kappa
    assert difference.value / np.sqrt(sum(variances)) == pytest.approx(0.3102, abs=5e-5)
    assert difference.se**2 == pytest.approx(results[0].kappa.se ** 2 + results[1].kappa.se ** 2, rel=1e-12)
