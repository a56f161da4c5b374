"""What must hold for every sample: symmetries, identities, closed forms, covariances, and the delta method itself."""

from __future__ import annotations

import pickle
from dataclasses import dataclass, replace
from functools import partial
from unittest.mock import patch

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from survey import from_matrix, from_random_sample, totals, units_of

from change_assess.engine.cells import Cells
from change_assess.engine.design import Calibration, Design
from change_assess.engine.estimate import Estimate, covariance
from change_assess.engine.intervals import exact
from change_assess.engine.linearise import Survey
from change_assess.errors import DesignError
from change_assess.measures import f1, kappa, overall_accuracy
from change_assess.results.estimate import estimate
from change_assess.results.population import survey_of
from change_assess.results.result import Result, View
from change_assess.samples import Sample, read_sample

KINDS = ("simple", "stratified", "post-stratified", "cluster")
ELEMENTS = KINDS[:3]
NUMBERS = ["estimate", "se", "df", "lower", "upper"]
KEY = ["measure", "class", "against", "map"]

some = partial(settings, derandomize=True, deadline=None, database=None)
seeds = st.integers(0, 10_000)


@dataclass(frozen=True)
class Study:
    """Tables of an invented sample: two maps and a reference."""

    units: pd.DataFrame
    strata: pd.DataFrame
    clusters: pd.DataFrame | None = None
    crossing: pd.DataFrame | None = None

    def sample(self) -> Sample:
        return read_sample(self.units, self.strata, clusters=self.clusters, crossing=self.crossing)

    def result(self, maps=("map", "map_b"), **options) -> Result:
        post = {} if self.crossing is None else {"post_stratify": "cells"}
        return estimate(self.sample(), map={m: m for m in maps}, reference="ref", **(post | options))


def study(seed: int, kind: str, classes: int = 3) -> Study:
    """Invent a sample of one kind; all of map, second map and reference differ here and there."""
    rng = np.random.default_rng(seed)
    names = np.array(list("abcdefgh")[:classes], dtype=object)
    strata = 3 if kind == "stratified" else 1
    size = rng.integers(8, 15, strata) * classes
    stratum = np.repeat(np.arange(strata), size)
    n = len(stratum)
    mapped = rng.permutation(np.arange(n) % classes) if strata == 1 else (stratum + rng.integers(0, 2, n)) % classes
    other, truth = (np.where(rng.random(n) < 0.7, mapped, rng.integers(0, classes, n)) for _ in range(2))
    units = pd.DataFrame({"unit": [f"u{seed}-{i}" for i in range(n)], "stratum": stratum.astype(str)})
    units = units.assign(map=names[mapped], map_b=names[other], ref=names[truth])
    population = size * rng.integers(2, 50, strata)
    table = pd.DataFrame({"stratum": np.arange(strata).astype(str), "units": population})
    table["area_ha"] = population * rng.uniform(0.05, 2, strata)
    if kind == "post-stratified":
        shares = rng.integers(5, 20, classes)
        units_of_class = shares * int(population[0])
        table = table.assign(units=units_of_class.sum(), area_ha=units_of_class.sum() * 0.09)
        crossing = pd.DataFrame({"map": names, "units": units_of_class, "area_ha": units_of_class * 0.09})
        return Study(units, table, crossing=crossing)
    if kind == "cluster":
        cluster = np.sort(rng.integers(0, 9, n))
        cluster = np.unique(cluster, return_inverse=True)[1]
        sizes = np.bincount(cluster)
        frame = pd.DataFrame({"stratum": "0", "cluster": [f"c{i}" for i in range(len(sizes))], "units": sizes})
        units["cluster"] = [f"c{i}" for i in cluster]
        return Study(units, table.assign(clusters=40, units=max(int(population[0]), n + 1)), clusters=frame)
    return Study(units, table)


def keyed(table: pd.DataFrame) -> pd.DataFrame:
    return table.set_index(KEY)[NUMBERS].sort_index()


def alike(found: pd.DataFrame, wanted: pd.DataFrame, tolerance: float, columns=NUMBERS) -> None:
    pd.testing.assert_frame_equal(found[columns], wanted[columns], rtol=tolerance, atol=tolerance)


# -- symmetries -------------------------------------------------------------------------------------------


@some(max_examples=12)
@given(seeds, st.sampled_from(KINDS), st.permutations(["a", "b", "c"]))
def test_relabelling_permutes_results(seed, kind, names):
    """New names for the classes give the same numbers under the new names."""
    new = dict(zip("abc", names, strict=True))
    one = study(seed, kind)
    relabel = {c: lambda f, c=c: f[c].map(new) for c in ("map", "map_b", "ref")}
    crossing = None if one.crossing is None else one.crossing.assign(map=one.crossing["map"].map(new))
    other = replace(one, units=one.units.assign(**relabel), crossing=crossing)
    wanted, found = (s.result(kappa=True).table for s in (one, other))
    wanted = wanted[wanted["interval"] != "simulated"]
    wanted = wanted.assign(**{c: wanted[c].map(lambda x: new.get(x, x)) for c in ("class", "against")})
    alike(keyed(found[found["interval"] != "simulated"]), keyed(wanted), 1e-12)


@some(max_examples=12)
@given(seeds, st.sampled_from(KINDS))
def test_the_order_of_rows_does_not_matter(seed, kind):
    """Rows of the sample in another order give the same numbers, simulated limits included."""
    one = study(seed, kind)
    other = replace(one, units=one.units.sample(frac=1, random_state=seed))
    alike(keyed(other.result().table), keyed(one.result().table), 1e-12)


@some(max_examples=12)
@given(seeds, st.sampled_from(KINDS))
def test_compression_to_cells_changes_nothing(seed, kind):
    """One cell a unit gives the estimates and standard errors of the compressed sample."""
    one = study(seed, kind)
    with patch("change_assess.results.estimate.survey_of", partial(survey_of, compress=False)):
        plain = one.result(kappa=True)
    compressed = one.result(kappa=True)
    assert len(compressed.survey.only.cells) < len(plain.survey.only.cells) == len(one.units)
    alike(keyed(plain.table), keyed(compressed.table), 1e-10, ["estimate", "se", "df"])


@some(max_examples=10)
@given(seeds, st.sampled_from(KINDS), st.floats(1e-3, 1e3))
def test_scaling_areas_scales_hectares_only(seed, kind, factor):
    """All areas times a constant: hectares and their errors times it, shares and accuracies as they were."""
    one = study(seed, kind)
    scaled = [None if t is None else t.assign(area_ha=t["area_ha"] * factor) for t in (one.strata, one.crossing)]
    wanted, found = one.result().table, replace(one, strata=scaled[0], crossing=scaled[1]).result().table
    hectares = wanted["measure"].str.endswith("_ha").to_numpy()
    for column in ("estimate", "se", "lower", "upper"):
        times = np.where(hectares, factor, 1)
        assert found[column].to_numpy() == pytest.approx(
            wanted[column].to_numpy() * times, rel=1e-9, abs=1e-12, nan_ok=True
        )


@some(max_examples=8)
@given(seeds, st.integers(2, 4))
def test_splitting_a_stratum_at_random_changes_no_estimate(seed, pieces):
    """A stratum split at random into parts of the same n : N gives the same estimates."""
    one = study(seed, "simple", classes=pieces)
    order = np.random.default_rng(seed).permutation(len(one.units))
    units = one.units.assign(stratum=(order % pieces).astype(str))
    n = units["stratum"].value_counts().sort_index()
    ratio, area = (float(one.strata[c].iloc[0]) / len(units) for c in ("units", "area_ha"))
    strata = pd.DataFrame({"stratum": n.index, "units": (n * ratio).to_numpy(), "area_ha": (n * area).to_numpy()})
    strata["units"] = strata["units"].round().astype(int)
    alike(keyed(Study(units, strata).result().table), keyed(one.result().table), 1e-10, ["estimate"])


# -- identities -------------------------------------------------------------------------------------------


@some(max_examples=15)
@given(seeds, st.sampled_from(KINDS), st.integers(2, 5))
def test_shares_add_up_and_disagreement_splits(seed, kind, classes):
    """Shares sum to one; quantity + allocation = 1 - overall accuracy; exchange + shift = allocation."""
    view = study(seed, kind, classes).result().select(map="map")
    each = [view[c] for c in view.classes]
    assert sum(c.area_share.value for c in each) == pytest.approx(1, abs=1e-12)
    assert view.area_shares().to_numpy().sum() == pytest.approx(1, abs=1e-12)
    error = 1 - view.overall_accuracy.value
    assert view.quantity_disagreement.value + view.allocation_disagreement.value == pytest.approx(error, abs=1e-12)
    assert view.exchange.value + view.shift.value == pytest.approx(view.allocation_disagreement.value, abs=1e-12)
    for name in ("quantity_disagreement", "allocation_disagreement", "exchange", "shift"):
        half = sum(getattr(c, name).value for c in each) / 2
        assert half == pytest.approx(getattr(view, name).value, abs=1e-12)
    for c in each:
        assert c.exchange.value + c.shift.value == pytest.approx(c.allocation_disagreement.value, abs=1e-12)
        assert c.map_bias_ha.value == pytest.approx(c.map_area_ha.value - c.area_ha.value, rel=1e-9, abs=1e-9)


@some(max_examples=8)
@given(seeds, st.sampled_from(KINDS))
def test_identical_maps_do_not_differ_at_all(seed, kind):
    """Two maps with the same labels differ by exactly zero, with standard error zero, in every measure."""
    one = study(seed, kind)
    result = replace(one, units=one.units.assign(map_b=one.units["map"])).result()
    first, second = (result.select(map=m) for m in ("map", "map_b"))
    pairs = [(first.overall_accuracy, second.overall_accuracy), (first.kappa, second.kappa)]
    for c in first.classes:
        pairs += [(getattr(first[c], m), getattr(second[c], m)) for m in ("users_accuracy", "f1", "map_area_ha")]
    for a, b in pairs:
        difference = b - a
        assert difference.value == 0
        assert difference.se == pytest.approx(0, abs=1e-15)
        assert (difference.se == 0) or kind != "stratified"


# -- closed forms -----------------------------------------------------------------------------------------


def matrices(low: int = 0, high: int = 30):
    """Square matrices of counts of 2 to 4 classes, with at least 2 units in each row and one agreement each."""

    def make(drawn):
        k, values = drawn
        counts = np.array(values[: k * k]).reshape(k, k)
        return counts + 2 * np.eye(k, dtype=int)

    size = st.integers(2, 4)
    return st.tuples(size, st.lists(st.integers(low, high), min_size=16, max_size=16)).map(make)


@some(max_examples=20)
@given(matrices(), st.booleans(), st.integers(1, 20))
def test_simple_random_sampling_has_its_closed_forms(counts, fpc, times):
    """p and sqrt((1-f) p(1-p)/(n-1)); user's and producer's accuracy by the residuals of a ratio."""
    n = int(counts.sum())
    names = list("abcd")[: len(counts)]
    N = n * times + 1
    strata = pd.DataFrame({"stratum": ["all"], "units": [N], "area_ha": [7.0 * N]})
    result = estimate(units_of(counts, names), strata=strata, map="map", reference="ref", fpc=fpc)
    rest = 1 - n / N if fpc else 1.0

    def agrees(x: Estimate, value: float, variance: float):
        assert x.value == pytest.approx(value, abs=1e-12)
        assert x.se == pytest.approx(np.sqrt(variance), rel=1e-9, abs=1e-12)

    p = np.trace(counts) / n
    agrees(result.overall_accuracy, p, rest * p * (1 - p) / (n - 1))
    for k, name in enumerate(names):
        share = counts[:, k].sum() / n
        agrees(result[name].area_share, share, rest * share * (1 - share) / (n - 1))
        for measure, m in (("users_accuracy", counts[k].sum()), ("producers_accuracy", counts[:, k].sum())):
            q = counts[k, k] / m
            residuals = counts[k, k] * (1 - q) ** 2 + (m - counts[k, k]) * q**2  # = m q (1 - q)
            agrees(getattr(result[name], measure), q, rest * n / (n - 1) * residuals / m**2)


def olofsson(counts: np.ndarray, area: np.ndarray) -> dict[str, np.ndarray]:
    """Estimates and variances of Olofsson et al. (2014), RSE 148, eqs. 1-3, 5-7 and 9-11, written out."""
    rows, w = counts.sum(axis=1), area / area.sum()
    q = counts / rows[:, None]
    cell = w[:, None] ** 2 * q * (1 - q) / (rows - 1)[:, None]
    user, mapped, reference = np.diag(q), area, (area[:, None] * q).sum(axis=0)
    producer = area * user / reference
    spread = area[:, None] ** 2 * q * (1 - q) / (rows - 1)[:, None]
    off = spread.sum(axis=0) - np.diag(spread)
    first = mapped**2 * (1 - producer) ** 2 * user * (1 - user) / (rows - 1)
    return {
        "overall_accuracy": (w @ user, (w**2 * user * (1 - user) / (rows - 1)).sum()),
        "area_share": (w @ q, cell.sum(axis=0)),
        "area_ha": (reference, area.sum() ** 2 * cell.sum(axis=0)),
        "users_accuracy": (user, user * (1 - user) / (rows - 1)),
        "producers_accuracy": (producer, (first + producer**2 * off) / reference**2),
    }


@some(max_examples=20)
@given(matrices(), seeds)
def test_stratified_sampling_has_the_formulas_of_good_practice(counts, seed):
    """Area, overall, user's and producer's accuracy have the estimates and variances of Olofsson et al. (2014)."""
    area = np.random.default_rng(seed).uniform(1, 1000, len(counts))
    names = list("abcd")[: len(counts)]
    result = from_matrix(counts, names, area)
    for measure, (value, variance) in olofsson(counts, area).items():
        found = (
            [result.overall_accuracy] if measure == "overall_accuracy" else [getattr(result[c], measure) for c in names]
        )
        assert [x.value for x in found] == pytest.approx(np.ravel(value), rel=1e-10)
        assert [x.se for x in found] == pytest.approx(np.sqrt(np.ravel(variance)), rel=1e-8, abs=1e-12 * area.sum())


@some(max_examples=10)
@given(matrices(), seeds)
def test_post_stratified_matrix_has_the_same_estimates_and_its_own_variance(counts, seed):
    """Rows as post-strata: estimates as if they were strata, variance from n/(n-1) over the whole sample."""
    area = np.random.default_rng(seed).uniform(1, 1000, len(counts))
    names, rows, n = list("abcd")[: len(counts)], counts.sum(axis=1), counts.sum()
    strata, post = (from_matrix(counts, names, area, rows=r) for r in ("strata", "post-strata"))
    q = counts / rows[:, None]
    for k, name in enumerate(names):
        a, b = (r[name].area_share for r in (strata, post))
        assert a.value == pytest.approx(b.value, rel=1e-10)
        variance = n / (n - 1) * ((area / area.sum()) ** 2 / rows * (q * (1 - q))[:, k]).sum()
        assert b.se == pytest.approx(np.sqrt(variance), rel=1e-8, abs=1e-12)


def test_limits_of_one_stratum_are_the_exact_ones():
    """User's accuracy of a class that is one stratum has exact limits, by its own N with the correction."""
    counts, names, units = np.array([[17, 3], [0, 40]]), ["loss", "stable"], [60, 9000]
    for fpc in (True, False):
        table = from_matrix(counts, names, [6.0, 900.0], units=units, fpc=fpc).table
        rows = table[table["measure"] == "users_accuracy"].set_index("class")
        limits = exact(np.array([17, 40]), np.array([20, 40]), np.array(units) if fpc else None, 0.95)
        assert list(rows["interval"]) == ["exact", "exact"]
        assert rows[["lower", "upper"]].to_numpy() == pytest.approx(np.transpose(limits), rel=1e-12)


# -- covariance -------------------------------------------------------------------------------------------


def some_estimates(view: View) -> list[Estimate]:
    a, b = view[view.classes[0]], view[view.classes[1]]
    return [view.overall_accuracy, a.area_ha, a.users_accuracy, b.producers_accuracy, a.f1, view.kappa]


@some(max_examples=8)
@given(seeds, st.sampled_from(KINDS))
def test_differences_and_sums_have_their_covariance(seed, kind):
    """Var(a ± b) = Var a + Var b ± 2 Cov, for measures of two maps on one sample."""
    result = study(seed, kind).result()
    estimates = [x for m in ("map", "map_b") for x in some_estimates(result.select(map=m))]
    matrix = covariance(*estimates)
    assert matrix == pytest.approx(matrix.T, rel=1e-9, abs=1e-12 * abs(matrix).max())
    assert np.sqrt(np.diag(matrix)) == pytest.approx([x.se for x in estimates], rel=1e-9, abs=1e-12)
    for i, j in ((0, 6), (1, 7), (2, 8), (0, 5), (3, 9), (4, 1)):
        both = matrix[i, i] + matrix[j, j]
        scale = np.sqrt(both)
        minus, plus = estimates[i] - estimates[j], estimates[i] + estimates[j]
        assert minus.se == pytest.approx(np.sqrt(max(both - 2 * matrix[i, j], 0)), rel=1e-6, abs=1e-7 * scale)
        assert plus.se == pytest.approx(np.sqrt(max(both + 2 * matrix[i, j], 0)), rel=1e-6, abs=1e-7 * scale)


@some(max_examples=6)
@given(seeds, st.sampled_from(KINDS))
def test_separate_calls_on_one_sample_keep_their_covariance(seed, kind):
    """Two calls with different label columns give the difference, its error and covariance of a single call."""
    one = study(seed, kind)
    together = one.result()
    apart = [one.result(maps=(m,)) for m in ("map", "map_b")]
    for measure in range(6):
        a, b = (some_estimates(together.select(map=m))[measure] for m in ("map", "map_b"))
        c, d = (some_estimates(r.select())[measure] for r in apart)
        assert (d - c).value == pytest.approx((b - a).value, rel=1e-9, abs=1e-12)
        assert (d - c).se == pytest.approx((b - a).se, rel=1e-9, abs=1e-12)
        assert covariance(c, d) == pytest.approx(covariance(a, b), rel=1e-9, abs=1e-12 * covariance(a, b).max())


@some(max_examples=6)
@given(seeds, st.sampled_from(KINDS), st.sampled_from(KINDS))
def test_independent_samples_have_no_covariance(seed, kind, other):
    """Estimates from two samples: covariance zero, variances add, degrees of freedom between the two."""
    a, b = (study(s, k).result().select(map="map").overall_accuracy for s, k in ((seed, kind), (seed + 1, other)))
    matrix = covariance(a, b)
    assert matrix[0, 1] == matrix[1, 0] == 0
    difference = a - b
    assert difference.se == pytest.approx(np.hypot(a.se, b.se), rel=1e-12)
    assert min(a.df, b.df) - 1e-9 <= difference.df <= a.df + b.df + 1e-9
    assert (a * b).se == pytest.approx(np.hypot(a.se * b.value, b.se * a.value), rel=1e-12)


def test_two_matrices_of_one_size_are_not_one_sample():
    """Matrices of counts carry no unit ids: two with equal row totals are still two independent samples."""
    names, area = ["a", "b"], [10.0, 90.0]
    first, second = (from_matrix(m, names, area).overall_accuracy for m in ([[8, 2], [3, 17]], [[7, 3], [2, 18]]))
    assert (first - second).se == pytest.approx(np.hypot(first.se, second.se), rel=1e-12)


def test_estimates_from_one_sample_that_use_other_units_are_refused():
    """If labels are missing in one of two columns, the covariance is not defined, and the message says what to do."""
    one = study(1, "stratified")
    units = one.units.assign(ref_b=one.units["ref"].where(np.arange(len(one.units)) > 2, None))
    sample = read_sample(units, one.strata)
    a, b = (estimate(sample, map="map", reference=r).overall_accuracy for r in ("ref", "ref_b"))
    with pytest.raises(DesignError, match=r"use different units.*one call"):
        (a - b).se  # noqa: B018


def test_differences_do_not_depend_on_their_order():
    """Estimates made with different design options are refused together, or differ by one error either way."""
    one = study(3, "stratified")
    a, b = one.result(maps=("map",)).overall_accuracy, one.result(maps=("map_b",), fpc=False).overall_accuracy
    try:
        there, back = (a - b).se, (b - a).se
    except DesignError:
        return
    assert there == pytest.approx(back, rel=1e-12)


# -- the delta method -------------------------------------------------------------------------------------


def weird(t):
    """Measure of the kind a person might write: products, ratios, logarithm and exponential of totals."""
    share = t.reference / t.all
    return np.exp(-np.log(share + 0.5)) * t.both / (t.mapped + 0.1 * t.all) - 2.0


def centred_scores(x: Estimate) -> np.ndarray:
    """How much one more unit of each cell moves the estimate: its scores less their mean within the stratum."""
    part, scores = x.linear.survey.only, x.linear.scores.toarray()[0]
    count, stratum = part.cells.count, part.cells.stratum
    mean = np.bincount(stratum, count * scores) / np.bincount(stratum, count)
    return scores - mean[stratum]


def numerical_influence(x: Estimate) -> np.ndarray:
    """The same, by central differences of the estimate with respect to the count of each cell."""
    count = x.linear.survey.only.cells.count
    step = 1e-4 * np.eye(len(count))
    return (x.at(count + step) - x.at(count - step)) / 2e-4


@some(max_examples=12)
@given(seeds, st.sampled_from(ELEMENTS))
def test_scores_are_the_derivatives_of_the_measure(seed, kind):
    """The linearised scores of ratios, products, log and exp are numerical derivatives with respect to counts."""
    view = study(seed, kind).result().select(map="map")
    share, other = (view[c].area_share for c in view.classes[:2])
    own = view.measure(weird)[view.classes[0]]
    ratio = view[view.classes[0]].users_accuracy / view[view.classes[1]].producers_accuracy
    more = [own, share.log(), (share * 2).exp(), share * other, share / other, 1 / share, -ratio, 3 - share, ratio]
    for x in [*some_estimates(view), *more]:
        scale = np.abs(centred_scores(x)).max()
        assert numerical_influence(x) == pytest.approx(centred_scores(x), rel=1e-5, abs=1e-5 * scale)


def test_scores_of_simple_random_sampling_add_up_to_the_jackknife():
    """Leaving out each unit in turn gives, to first order, the same variance of a nonlinear measure."""
    one = study(5, "simple", classes=2)
    x = one.result(fpc=False).select(map="map").kappa
    count = x.linear.survey.only.cells.count
    n = count.sum()
    without = x.at(count - np.eye(len(count)))
    mean = (count @ without) / n
    jackknife = (n - 1) / n * (count @ (without - mean) ** 2)
    assert np.sqrt(jackknife) == pytest.approx(x.se, rel=0.15)


# -- expressions ------------------------------------------------------------------------------------------


@some(max_examples=6)
@given(seeds, st.sampled_from(KINDS))
def test_an_estimate_can_be_evaluated_for_other_counts(seed, kind):
    """With the sample's own counts the value comes back; a replicate axis gives an array of its length."""
    result = study(seed, kind).result()
    for x in expressions(result):
        count = x.linear.survey.only.cells.count
        assert float(x.at(count)) == pytest.approx(x.value, rel=1e-10, abs=1e-13)
        many = x.at(np.stack([count, count, count]))
        assert many.shape == (3,)
        assert many == pytest.approx(np.full(3, x.value), rel=1e-10, abs=1e-13)


def expressions(result: Result) -> list[Estimate]:
    first, second = (result.select(map=m).overall_accuracy for m in ("map", "map_b"))
    share = result.select(map="map")["a"].area_share
    more = [second - first, share.log() / 3, (share / 2).exp() - 1, result.total_area_ha]
    return some_estimates(result.select(map="map")) + more


@pytest.mark.parametrize("kind", KINDS)
def test_counts_may_have_several_replicate_axes(kind):
    """Counts of shape (2, 3, cells) give values of shape (2, 3)."""
    for x in expressions(study(6, kind).result()):
        count = x.linear.survey.only.cells.count
        many = x.at(np.broadcast_to(count, (2, 3, len(count))))
        assert many.shape == (2, 3)
        assert many == pytest.approx(np.full((2, 3), x.value), rel=1e-10, abs=1e-13)


def test_differences_of_separate_calls_can_be_evaluated_for_other_counts():
    """The cells of a difference are those of both calls; its own counts give its value."""
    one = study(3, "stratified")
    a, b = (one.result(maps=(m,)).overall_accuracy for m in ("map", "map_b"))
    difference = b - a
    count = difference.linear.survey.only.cells.count
    assert float(difference.at(count)) == pytest.approx(difference.value, abs=1e-13)
    assert difference.at(np.stack([count, count])).shape == (2,)


@pytest.mark.parametrize("kind", KINDS)
def test_estimates_and_results_can_be_pickled(kind):
    """A pickled estimate has its value, error and covariance with the estimates left behind."""
    result = study(11, kind).result(kappa=True)
    copy = pickle.loads(pickle.dumps(result))
    pd.testing.assert_frame_equal(copy.table, result.table)
    assert copy.warnings == result.warnings
    accuracy = result.select(map="map").overall_accuracy
    rate = (result.select(map="map_b")["a"].area_ha / result.total_area_ha).log() / 5 - accuracy
    for x in (accuracy, rate, result.select(map="map").measure(f1)["b"], result.select(map="map").measure(kappa)):
        again = pickle.loads(pickle.dumps(x))
        assert (again.value, again.se, again.df) == (x.value, x.se, x.df)
        assert (again - x).se == pytest.approx(0, abs=1e-12)
        assert float(again.at(again.linear.survey.only.cells.count)) == pytest.approx(x.value, rel=1e-10)


def test_numbers_and_estimates_mix():
    """Plain numbers, numpy numbers and estimates can stand on either side of an operator."""
    x = study(2, "stratified").result().select(map="map").overall_accuracy
    for found, value, slope in (
        (x + 1, x.value + 1, 1),
        (1 + x, 1 + x.value, 1),
        (1 - x, 1 - x.value, 1),
        (x - 1, x.value - 1, 1),
        (2 * x, 2 * x.value, 2),
        (x * np.float64(2), 2 * x.value, 2),
        (np.float64(2) * x, 2 * x.value, 2),
        (x / 4, x.value / 4, 0.25),
        (1 / x, 1 / x.value, x.value**-2),
        (-x, -x.value, 1),
    ):
        assert isinstance(found, Estimate)
        assert found.value == pytest.approx(value, rel=1e-14)
        assert found.se == pytest.approx(slope * x.se, rel=1e-12)


def test_the_own_measure_of_a_result_equals_the_built_in_one():
    """A function of totals handed to `measure` gives value, error and degrees of freedom of the named measure."""
    view = study(2, "stratified").result().select(map="map")
    found, wanted = view.measure(overall_accuracy), view.overall_accuracy
    assert (found.value, found.se, found.df) == (wanted.value, wanted.se, wanted.df)
    assert view.measure(f1)["a"].se == view["a"].f1.se


# -- strata that need a decision --------------------------------------------------------------------------

THIN = pd.DataFrame(
    {
        "unit": [f"u{i}" for i in range(8)],
        "stratum": ["loss"] * 3 + ["stable"] * 4 + ["edge"],
        "map": ["loss"] * 3 + ["stable"] * 5,
        "ref": ["loss", "loss", "stable", "stable", "loss", "stable", "stable", "loss"],
    }
)
THIN_STRATA = pd.DataFrame({"stratum": ["loss", "stable", "edge"], "units": [30, 400, 20], "area_ha": [3.0, 40.0, 2.0]})


def test_a_single_unit_stratum_gives_estimates_without_error():
    """One unit in a stratum: estimates as ever, standard errors and limits that need it empty, the stratum named."""
    result = estimate(THIN, strata=THIN_STRATA, map="map", reference="ref")
    share = 3 * 2 / 3 + 40 * 1 / 4 + 2 * 1
    assert result["loss"].area_ha.value == pytest.approx(share, rel=1e-12)
    assert np.isnan(result["loss"].area_ha.se)
    notice = next(w for w in result.warnings if w.code == "single-unit-strata")
    assert notice.facts == {"names": ["edge"]}
    rows = result.table[result.table["against"] == ""].set_index(["measure", "class"]).sort_index()
    row = rows.loc[("area_ha", "loss")]
    assert row["estimate"] == pytest.approx(share)
    assert np.isnan(row[["se", "lower", "upper"]].astype(float)).all()


def test_a_single_unit_that_is_the_whole_stratum_adds_no_variance():
    """With n = N = 1 the stratum is a census: the error is that of the others, without a warning."""
    strata = THIN_STRATA.assign(units=[30, 400, 1])
    result = estimate(THIN, strata=strata, map="map", reference="ref")
    variance = 3.0**2 * (1 - 3 / 30) * (2 / 9) / 2 + 40.0**2 * (1 - 4 / 400) * (3 / 16) / 3
    assert result["loss"].area_ha.se == pytest.approx(np.sqrt(variance), rel=1e-12)
    assert "single-unit-strata" not in [w.code for w in result.warnings]


def test_collapsing_pools_strata_for_the_variance_only():
    """Collapsed strata keep their weights; their weighted scores are centred and summed as one stratum's."""
    plain = estimate(THIN, strata=THIN_STRATA, map="map", reference="ref")
    result = estimate(THIN, strata=THIN_STRATA, map="map", reference="ref", collapse=["edge=stable"])
    assert result["loss"].area_ha.value == plain["loss"].area_ha.value
    assert "single-unit-strata" not in [w.code for w in result.warnings]
    share = result["loss"].area_share.value
    hectares, loss = np.array([10.0, 10, 10, 10, 2]), np.array([1, 0, 0, 0, 1])
    pooled = hectares * (loss - share)  # linearised scores of the ratio: what each unit stands for
    variance = 3.0**2 * (1 - 3 / 30) * (2 / 9) / 2 + (1 - 5 / 420) * 5 / 4 * ((pooled - pooled.mean()) ** 2).sum()
    assert result["loss"].area_ha.se == pytest.approx(np.sqrt(variance), rel=1e-10)
    assert result["loss"].area_ha.df == 8 - 2


@pytest.mark.parametrize("rules", [["odd=edge", "edge=stable"], ["edge=stable", "odd=edge"]])
def test_collapsing_rules_can_be_chained_in_any_order(rules):
    """Pooling one stratum with a second and that with a third pools all three, however the rules are ordered."""
    odd = pd.DataFrame({"unit": ["u9"], "stratum": ["odd"], "map": ["loss"], "ref": ["stable"]})
    strata = pd.DataFrame({"stratum": ["odd"], "units": [9], "area_ha": [0.9]})
    tables = [pd.concat(t, ignore_index=True) for t in ((THIN, odd), (THIN_STRATA, strata))]
    found, wanted = (
        estimate(tables[0], strata=tables[1], map="map", reference="ref", collapse=c)["loss"].area_ha
        for c in (rules, ["odd=stable", "edge=stable"])
    )
    assert wanted.df == 9 - 2
    assert (found.value, found.se, found.df) == pytest.approx((wanted.value, wanted.se, wanted.df), rel=1e-12)


def test_one_unit_in_a_cluster_that_holds_more_is_said():
    """In a two-stage sample a cluster with a single labelled unit leaves the errors empty, and a warning says why."""
    units = pd.DataFrame({"unit": list("abcdefg"), "stratum": "all", "cluster": list("1123344")})
    units = units.assign(map=list("xyxyxxy"), ref=list("xyyyxxx"))
    clusters = pd.DataFrame({"stratum": "all", "cluster": list("1234"), "units": [2, 5, 4, 2]})
    strata = pd.DataFrame({"stratum": ["all"], "units": [400], "clusters": [100], "area_ha": [400.0]})
    result = estimate(read_sample(units, strata, clusters=clusters), map="map", reference="ref")
    assert result.sample.design == "two-stage"
    assert np.isfinite(result.overall_accuracy.value)
    assert np.isnan(result.overall_accuracy.se)
    assert any("single-unit" in w.code for w in result.warnings)


UNSAMPLED = pd.concat(
    [THIN_STRATA, pd.DataFrame({"stratum": ["swamp"], "units": [50], "area_ha": [5.0]})], ignore_index=True
)


def test_an_excluded_stratum_shrinks_the_target_area():
    """Excluding a stratum leaves its area out of everything, on a line of its own and in the worst case."""
    units = THIN[THIN["stratum"] != "edge"]
    strata = UNSAMPLED[UNSAMPLED["stratum"] != "edge"]
    result = estimate(units, strata=strata, map="map", reference="ref", unsampled="exclude")
    assert result.total_area_ha.value == 43.0
    loss = 3 * 2 / 3 + 40 * 1 / 4
    assert result["loss"].area_ha.value == pytest.approx(loss, rel=1e-12)
    assert result["loss"].area_share.value == pytest.approx(loss / 43, rel=1e-12)
    rows = result.table[result.table["against"] == ""].set_index(["measure", "class", "domain"]).sort_index()
    assert rows.loc[("unsampled_area_ha", "", "excluded, not sampled"), "estimate"] == 5.0
    sampled, everything = (rows.loc[("area_ha_worst_case", "loss", d)] for d in ("sampled strata", "all strata"))
    limits = result["loss"].area_ha.interval(0.95)
    assert [sampled["lower"], sampled["upper"]] == pytest.approx([max(limits.lower, 0), limits.upper], rel=1e-9)
    assert everything["upper"] == pytest.approx(sampled["upper"] + 5, rel=1e-12)
    notice = next(w for w in result.warnings if w.code == "unsampled-strata-excluded")
    assert notice.facts == {"strata": 1, "names": ["swamp"], "area_ha": 5.0, "share": pytest.approx(5 / 48)}


def test_a_filled_stratum_takes_the_rates_of_another():
    """Filling a stratum gives its units and area to the named one, and says how much is assumed."""
    units = THIN[THIN["stratum"] != "edge"]
    strata = UNSAMPLED[UNSAMPLED["stratum"] != "edge"]
    result = estimate(units, strata=strata, map="map", reference="ref", unsampled="swamp=stable")
    assert result.total_area_ha.value == 48.0
    assert result["loss"].area_ha.value == pytest.approx(3 * 2 / 3 + 45 * 1 / 4, rel=1e-12)
    variance = 3.0**2 * (1 - 3 / 30) * (2 / 9) / 2 + 45.0**2 * (1 - 4 / 450) * (3 / 16) / 3
    assert result["loss"].area_ha.se == pytest.approx(np.sqrt(variance), rel=1e-10)
    rows = result.table[result.table["against"] == ""].set_index(["measure", "class", "domain"]).sort_index()
    assert rows.loc[("unsampled_area_ha", "", "assumed, not sampled"), "estimate"] == 5.0
    role = result.account.set_index("stratum")["role"]
    assert role.to_dict() == {"loss": "sampled", "stable": "sampled", "swamp": "assumed"}
    limits = (result.table["measure"] == "area_ha_worst_case") & (result.table["class"] == "loss")
    assert set(result.table.loc[limits, "domain"]) == {"sampled strata", "all strata"}


# -- kinks ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("rows", ["strata", "post-strata"])
def test_near_a_kink_the_error_is_empty_and_limits_are_simulated(rows):
    """Mapped and estimated area almost equal: no standard error of quantity, an interval from simulated samples."""
    result = from_matrix([[40, 5], [5, 200]], ["a", "b"], [45.0, 205.0], rows=rows)
    table = result.table[result.table["class"] == ""].set_index("measure")
    for measure in ("quantity_disagreement", "allocation_disagreement"):
        row = table.loc[measure]
        assert np.isnan(row["se"])
        assert row["interval"] == "simulated"
        assert 0 <= row["lower"] < row["upper"] < 0.2
    assert np.isnan(result.quantity_disagreement.se)
    notice = next(w for w in result.warnings if w.code == "near-kink")
    assert "quantity_disagreement" in notice.facts["measures"]


def test_away_from_the_kink_quantity_has_the_error_of_the_bias():
    """With two classes quantity disagreement is |bias| as a share: the same error once it is far from zero."""
    result = from_matrix([[40, 60], [2, 300]], ["a", "b"], [45.0, 205.0])
    bias = result["a"].map_bias_ha / result.total_area_ha
    assert abs(bias.value) > 2 * bias.se
    assert result.quantity_disagreement.value == pytest.approx(abs(bias.value), rel=1e-10)
    assert result.quantity_disagreement.se == pytest.approx(bias.se, rel=1e-10)
    row = result.table[(result.table["measure"] == "quantity_disagreement") & (result.table["class"] == "")].iloc[0]
    assert row["interval"] == "normal"
    assert "near-kink" not in {
        w.code for w in result.warnings if "quantity_disagreement" in w.facts.get("measures", ())
    }


def test_simulated_limits_of_a_cluster_sample_have_a_width():
    """In a cluster sample near a kink the simulated limits vary as the clusters do."""
    table = study(4, "cluster").result().table
    rows = table[table["interval"] == "simulated"]
    assert len(rows)
    assert (rows["upper"] - rows["lower"] > 1e-6).any()


def test_simulated_limits_follow_the_seed():
    """The same seed gives the same simulated limits, another one others."""
    counts = [[40, 5], [5, 200]]
    first, again, other = (from_random_sample(counts, ["a", "b"], seed=s).table for s in (0, 0, 1))
    pd.testing.assert_frame_equal(first, again)
    rows = first["interval"] == "simulated"
    assert (first.loc[rows, "upper"] != other.loc[rows, "upper"]).any()
    pd.testing.assert_frame_equal(first[~rows], other[~rows])


# -- calibration in the engine ----------------------------------------------------------------------------


@some(max_examples=10)
@given(seeds, st.booleans())
def test_calibrated_weights_reproduce_the_known_totals(seed, in_two_strata):
    """After calibration the weights reproduce every known total, with standard error zero."""
    rng = np.random.default_rng(seed)
    n = 40
    stratum = np.arange(n) % 2 if in_two_strata else np.zeros(n, np.intp)
    N = np.array([300.0, 500.0])[: stratum.max() + 1]
    x = np.stack([np.ones(n), rng.uniform(1, 3, n)], axis=1)
    known_totals = np.array([N.sum(), 2.05 * N.sum()])
    cells = Cells(stratum, np.zeros((n, 0), np.intp), np.ones(n), np.ones(n))
    survey = Survey.of(Design(N=N, A=N, adjust=Calibration(x, known_totals)), cells)
    found = totals(survey, *x.T, x[:, 1] * 2 - 1)
    assert [float(t.value) for t in found] == pytest.approx([*known_totals, 3.1 * N.sum()], rel=1e-10)
    assert [float(t.se) for t in found] == pytest.approx([0, 0, 0], abs=1e-8)
