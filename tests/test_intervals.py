"""Exact limits against published values, brute force and enumeration; simulated samples against the design."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import sparse, stats
from survey import from_random_sample

from change_assess.engine.cells import Cells
from change_assess.engine.design import Design
from change_assess.engine.intervals import check_level, exact, quantiles, simulated_counts, student_t
from change_assess.errors import InputError

LEVELS = [0.8, 0.9, 0.95, 0.99]


@pytest.mark.parametrize(
    ("x", "n", "lower", "upper"),
    [(81, 263, 0.2527, 0.3676), (15, 148, 0.0578, 0.1617), (0, 20, 0.0, 0.1684), (1, 29, 0.0009, 0.1776)],
)
def test_exact_limits_of_newcombe(x, n, lower, upper):
    """Clopper-Pearson limits as printed by Newcombe (1998), Table I, method 5."""
    assert np.ravel(exact(x, n, None, 0.95)) == pytest.approx([lower, upper], abs=5e-5)


def test_exact_limits_of_thirteen_of_sixteen():
    """Clopper-Pearson limits as printed by Fagerland, Lydersen & Laake (2017), chapter 2."""
    assert np.ravel(exact(13, 16, None, 0.95)) == pytest.approx([0.5435, 0.9595], abs=5e-5)


@pytest.mark.parametrize("level", LEVELS)
def test_exact_limits_agree_with_statsmodels(level):
    """Clopper-Pearson limits are those of statsmodels' "beta" method, none and all included."""
    proportion = pytest.importorskip("statsmodels.stats.proportion")
    x, n = np.array([0, 1, 7, 20, 299, 300]), 300
    wanted = proportion.proportion_confint(x, n, alpha=1 - level, method="beta")
    assert np.ravel(exact(x, n, None, level)) == pytest.approx(np.nan_to_num(np.ravel(wanted), nan=0.0), abs=1e-12)


@pytest.mark.parametrize("level", LEVELS)
@pytest.mark.parametrize("n", [1, 2, 3, 7, 20, 100, 3000])
def test_exact_limits_agree_with_an_independent_implementation(n, level):
    """On a grid of counts, none and all included, the limits are those of SciPy's exact binomial interval."""
    grid = np.unique(np.linspace(0, n, 15).astype(int))
    lower, upper = exact(grid, np.full(len(grid), n), None, level)
    for x, low, high in zip(grid, lower, upper, strict=True):
        wanted = stats.binomtest(int(x), n).proportion_ci(level, method="exact")
        assert (low, high) == pytest.approx((wanted.low, wanted.high), abs=1e-9)
    assert lower[0] == 0
    assert upper[-1] == 1


def by_brute_force(x: int, n: int, N: int, level: float) -> tuple[int, int]:
    """Smallest and largest number of ones whose tail beyond the observed count exceeds (1 - level) / 2."""
    ones = np.arange(N + 1)
    tail = (1 - level) / 2
    at_least = ones[stats.hypergeom.sf(x - 1, N, ones, n) > tail]
    at_most = ones[stats.hypergeom.cdf(x, N, ones, n) > tail]
    return int(at_least.min()), int(at_most.max())


@pytest.mark.parametrize("level", [0.9, 0.95])
@pytest.mark.parametrize(("n", "N"), [(1, 1), (1, 2), (2, 3), (5, 5), (4, 9), (10, 25), (20, 21), (30, 200)])
def test_hypergeometric_limits_are_those_of_brute_force(n, N, level):
    """Trying every possible number of ones in a small population finds the same limits."""
    x = np.arange(n + 1)
    lower, upper = exact(x, np.full(n + 1, n), np.full(n + 1, N), level)
    wanted = np.array([by_brute_force(i, n, N, level) for i in x])
    assert lower * N == pytest.approx(wanted[:, 0], abs=1e-9)
    assert upper * N == pytest.approx(wanted[:, 1], abs=1e-9)


def test_a_census_has_no_uncertainty():
    """When every unit of the stratum was seen, both limits are the share seen."""
    x = np.arange(8)
    lower, upper = exact(x, np.full(8, 7), np.full(8, 7), 0.95)
    assert lower == pytest.approx(x / 7, abs=1e-15)
    assert upper == pytest.approx(x / 7, abs=1e-15)


def test_hypergeometric_limits_approach_the_binomial_ones():
    """As the population grows, the two exact intervals become one."""
    x, n = np.array([0, 1, 5, 40, 50]), np.full(5, 50)
    target = np.array(exact(x, n, None, 0.95))
    gaps = [np.abs(np.array(exact(x, n, np.full(5, N), 0.95)) - target).max() for N in (100, 1_000, 10_000, 10_000_000)]
    assert gaps == sorted(gaps, reverse=True)
    assert gaps[-1] < 1e-6


def test_finite_population_makes_limits_narrower():
    """The hypergeometric interval of a sample of a fifth of the population lies within the binomial one."""
    x, n = np.arange(41), np.full(41, 40)
    (low, high), (low_f, high_f) = exact(x, n, None, 0.95), exact(x, n, np.full(41, 200), 0.95)
    step = 1 / 200
    assert (low_f >= low - step).all()
    assert (high_f <= high + step).all()
    assert (high_f - low_f).sum() < (high - low).sum()


@pytest.mark.parametrize("level", LEVELS)
def test_exact_coverage_by_enumeration_is_never_below_the_level(level):
    """Over all samples of 12 and a fine grid of shares, the binomial limits cover at least as often as they say."""
    n = 12
    x = np.arange(n + 1)
    lower, upper = exact(x, np.full(n + 1, n), None, level)
    share = np.linspace(0, 1, 1001)[:, None]
    covered = (lower <= share + 1e-12) & (share - 1e-12 <= upper)
    coverage = (stats.binom.pmf(x, n, share) * covered).sum(axis=1)
    assert coverage.min() >= level - 1e-12


@pytest.mark.parametrize("level", LEVELS)
def test_hypergeometric_coverage_by_enumeration_is_never_below_the_level(level):
    """Over all samples of 9 from populations of 30 with any number of ones, the limits cover at least so often."""
    n, N = 9, 30
    x = np.arange(n + 1)
    lower, upper = exact(x, np.full(n + 1, n), np.full(n + 1, N), level)
    ones = np.arange(N + 1)[:, None]
    covered = (lower * N <= ones + 1e-9) & (ones - 1e-9 <= upper * N)
    coverage = (stats.hypergeom.pmf(x, N, ones, n) * covered).sum(axis=1)
    assert coverage.min() >= level - 1e-12


@pytest.mark.parametrize("level", [0.5, 0.2, 1, 95, -0.95, float("nan")])
def test_a_level_that_is_none_is_refused(level):
    """A level outside (0.5, 1), such as 95, is refused wherever it is given."""
    with pytest.raises(InputError, match="confidence level"):
        check_level(level)
    with pytest.raises(InputError, match="confidence level"):
        from_random_sample([[8, 2], [1, 9]], ["a", "b"], level=level)
    with pytest.raises(InputError, match="confidence level"):
        from_random_sample([[8, 2], [1, 9]], ["a", "b"]).overall_accuracy.interval(level)


def test_an_unknown_method_names_the_nearest():
    """A misspelt interval method is answered with the one that was meant."""
    with pytest.raises(InputError, match="Did you mean 'normal'"):
        from_random_sample([[8, 2], [1, 9]], ["a", "b"]).overall_accuracy.interval(method="norml")
    with pytest.raises(InputError, match="Did you mean 'normal'"):
        from_random_sample([[8, 2], [1, 9]], ["a", "b"], interval="norml")


def test_t_without_degrees_of_freedom_has_no_limits():
    """With no degree of freedom Student's t says nothing, and so do the limits."""
    assert np.isnan(student_t(np.array(0.5), np.array(0.1), np.array(0.0), 0.95)).all()


def test_quantiles_ignore_replicates_that_are_not_estimable():
    """A ratio that is 0/0 in some simulated samples takes its quantiles from the others; 0/0 in all has none."""
    replicates = np.stack([np.r_[np.linspace(0, 1, 101), np.full(50, np.nan)], np.full(151, np.nan)], axis=1)
    lower, upper = quantiles(replicates, 0.9)
    assert (lower[0], upper[0]) == pytest.approx((0.05, 0.95))
    assert np.isnan([lower[1], upper[1]]).all()


# -- simulated samples ------------------------------------------------------------------------------------

DRAWS = 20_000


def element_case(fpc: bool) -> tuple[Design, Cells]:
    """Three strata, the last a census; five kinds of unit in each."""
    stratum = np.repeat([0, 1, 2], 5)
    count = np.array([12, 3, 8, 1, 6, 20, 1, 1, 15, 3, 2, 2, 4, 1, 1], float)
    labels = np.tile(np.arange(5), 3)[:, None]
    N = np.array([60.0, 4000.0, 10.0])
    return Design(N=N, A=N, fpc=fpc), Cells(stratum, labels, np.ones(15), count)


def cluster_case(fpc: bool) -> tuple[Design, Cells]:
    """Two strata of clusters, the second selected to three quarters; clusters of different size, all labelled."""
    rng = np.random.default_rng(4)
    m, sizes = 24, np.array([2, 5, 9, 4])[np.arange(24) % 4]
    psu = np.repeat(np.arange(m), 2)
    first = rng.integers(0, sizes + 1)
    count = np.stack([first, sizes - first], axis=1).ravel().astype(float)
    of_cluster = np.repeat([0, 1], [15, 9])
    M = np.array([400.0, 12.0])
    design = Design(N=5 * M, A=5 * M, M=M, cluster_stratum=of_cluster, cluster_units=sizes.astype(float), fpc=fpc)
    labels = np.tile([0, 1], m)[:, None]
    return design, Cells(of_cluster[psu], labels, np.ones(2 * m), count, psu)


def variance_ratio(design: Design, cells: Cells) -> np.ndarray:
    """Variance of two totals over simulated samples, over the variance that the design estimates."""
    rng = np.random.default_rng(7)
    y = sparse.csr_array(np.stack([(cells.labels[:, 0] == 0) * 1.0, 1.0 + cells.labels[:, 0] ** 1.5]))
    counts = simulated_counts(design, cells, rng, DRAWS)
    drawn = design.totals(y, cells.with_count(counts))
    assert drawn.mean(axis=0) == pytest.approx(design.totals(y, cells), rel=0.02)
    return drawn.var(axis=0) / design.components(design.scores(y, cells), cells).sum(axis=1)


@pytest.mark.parametrize("fpc", [False, True], ids=["with replacement", "finite population"])
def test_simulated_totals_vary_as_the_design_says_in_stratified_samples(fpc):
    """Over many simulated samples the variance of a total is the design's, within Monte Carlo error."""
    assert variance_ratio(*element_case(fpc)) == pytest.approx([1, 1], abs=0.05)


@pytest.mark.parametrize("fpc", [False, True], ids=["with replacement", "finite population"])
def test_simulated_totals_vary_as_the_design_says_in_cluster_samples(fpc):
    """Over many simulated samples of whole clusters the variance of a total is the design's too."""
    assert variance_ratio(*cluster_case(fpc)) == pytest.approx([1, 1], abs=0.05)


def test_strata_wholly_sampled_do_not_vary():
    """With the finite population correction the counts of a census stratum are the same in every draw."""
    design, cells = element_case(fpc=True)
    counts = simulated_counts(design, cells, np.random.default_rng(1), 50)
    census = cells.stratum == 2
    assert (counts[:, census] == cells.count[census]).all()
    assert (counts[:, ~census].std(axis=0) > 0).all()


def test_simulated_samples_keep_the_size_of_each_stratum():
    """Every simulated sample has as many units in each stratum as the sample."""
    design, cells = element_case(fpc=True)
    counts = simulated_counts(design, cells, np.random.default_rng(1), 20)
    assert design.stratum_count(cells.with_count(counts)) == pytest.approx(
        np.tile(design.stratum_count(cells), (20, 1)), rel=1e-12
    )


def test_simulated_samples_follow_the_seed():
    """One seed gives one set of simulated samples, another seed another."""
    design, cells = element_case(fpc=True)
    first, again, other = (simulated_counts(design, cells, np.random.default_rng(s), 5) for s in (1, 1, 2))
    assert (first == again).all()
    assert (first != other).any()
