"""How the sample was drawn: weights, totals, and the covariance of linearised scores.

One variance serves every design: centred sums of squares of weighted scores, within strata between primary units
and, in two-stage designs, within primary units between secondary ones (Särndal, Swensson & Wretman 1992,
*Model Assisted Survey Sampling*, results 3.7.2, 4.2.2 and 4.3.1). Known totals (post-strata, separate ratio) enter
as linear calibration with g-weighted residuals (ibid., section 6.6).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy import sparse

from change_assess.engine.cells import Cells, Floats, Ints

BLOCK_NUMBERS = 2_000_000
"""Counts held at a time where many samples are looked at, to bound memory."""

NEGLIGIBLE = 1e-13
"""Residuals below this share of the scores they come from are rounding, and are set to zero."""


@dataclass(frozen=True, eq=False)
class Calibration:
    """Known population totals that the weights are made to reproduce.

    Parameters
    ----------
    auxiliary : ndarray, shape (c, q)
        Value of each auxiliary variable for one unit of each cell.
    totals : ndarray, shape (q,)
        Their known population totals.
    scale : ndarray, shape (c,), optional
        Calibration weight of a unit beside its design weight; 1/size makes a separate ratio estimator.
    name : str
        What the weights reproduce, for the methods text.
    """

    auxiliary: Floats
    totals: Floats
    scale: Floats | None = None
    name: str = ""

    def at(self, cells: Ints) -> Calibration:
        """Take the rows of some cells, in the order given."""
        return Calibration(
            self.auxiliary[cells], self.totals, None if self.scale is None else self.scale[cells], self.name
        )

    def scaled(self, weights: Floats) -> Floats:
        """Weights times `scale`, shape (..., c)."""
        return weights if self.scale is None else weights * self.scale

    def g(self, weights: Floats) -> Floats:
        """Factors g, shape (..., c), by which design weights times counts, shape (..., c), must be multiplied."""
        gap = self.totals - weights @ self.auxiliary
        inner = np.einsum("...c,ci,cj->...ij", self.scaled(weights), self.auxiliary, self.auxiliary, optimize=True)
        multiplier = np.einsum("...ij,...j->...i", np.linalg.pinv(inner, hermitian=True), gap)
        factor = np.ones(1) if self.scale is None else self.scale
        return np.asarray(1 + factor * (multiplier @ self.auxiliary.T))

    def residuals(self, y: sparse.csr_array, weights: Floats) -> sparse.csr_array:
        """What the auxiliaries leave unexplained of `y`, shape (p, c), by regression with the design weights."""
        scaled = self.scaled(weights)
        inner = (self.auxiliary.T * scaled) @ self.auxiliary
        slopes = np.linalg.pinv(inner, hermitian=True) @ (y @ (self.auxiliary * scaled[:, None])).T
        rest = y.toarray() - (self.auxiliary @ slopes).T
        biggest = abs(y).max(axis=1).toarray().reshape(-1, 1) if y.nnz else np.zeros((y.shape[0], 1))
        rest[np.abs(rest) <= NEGLIGIBLE * biggest] = 0.0
        return sparse.csr_array(rest)


@dataclass(frozen=True, eq=False)
class Design:
    """The sampling design and what is known of the population.

    Parameters
    ----------
    N : ndarray, shape (H,)
        Units in each stratum (elements, also in cluster designs).
    A : ndarray, shape (H,)
        Area of each stratum, in hectares.
    M : ndarray, shape (H,), optional
        Clusters in each stratum; given, the design is a cluster or two-stage design.
    cluster_stratum, cluster_units, cluster_labelled : ndarray, shape (m,), optional
        Of each selected cluster its stratum, its number of units and how many of them are labelled. The cells refer
        to clusters by their position here; where not all units are labelled (the
        default is that they are), there is a second stage of selection.
    fpc : bool
        Finite population correction; without it, weights are the same and the variance is that of sampling
        with replacement (in two-stage designs, of primary units only).
    divisor : {"n-1", "n"}
        Of the sample variance; "n" is for planning, where counts are expectations.
    adjust : Calibration, optional
        Known totals to reproduce.
    collapse : ndarray of int, shape (H,), optional
        Stratum with which each is pooled for variance estimation only; weights stay.
    """

    N: Floats
    A: Floats
    M: Floats | None = None
    cluster_stratum: Ints | None = None
    cluster_units: Floats | None = None
    cluster_labelled: Floats | None = None
    fpc: bool = True
    divisor: Literal["n-1", "n"] = "n-1"
    adjust: Calibration | None = None
    collapse: Ints | None = None

    # -- weights and totals ------------------------------------------------------------------------------

    def stratum_count(self, cells: Cells) -> Floats:
        """Units in the sample, shape (..., H)."""
        return _by_group(cells.count, cells.stratum, len(self.N))

    def primary_count(self, cells: Cells) -> Floats:
        """Primary units (clusters, else units) in the sample, shape (..., H)."""
        if self.M is None:
            return self.stratum_count(cells)
        return np.bincount(self._clusters.stratum, minlength=len(self.N)).astype(float)

    def design_weights(self, cells: Cells) -> Floats:
        """Units of the population that one unit of each cell stands for, before adjustment; shape (..., c)."""
        population = self.N if self.M is None else self.M
        with np.errstate(divide="ignore", invalid="ignore"):
            weight = (population / self.primary_count(cells))[..., cells.stratum]
            if self.M is not None:
                weight = weight * self._within_weight(cells)
        return np.asarray(np.where(np.isfinite(weight), weight, 0.0))

    def weights(self, cells: Cells) -> Floats:
        """Final weights, shape (..., c)."""
        weight = self.design_weights(cells)
        return weight if self.adjust is None else weight * self.adjust.g(cells.count * weight)

    def totals(self, y: sparse.csr_array, cells: Cells) -> Floats:
        """Estimated population totals, shape (..., p), of `y`, shape (p, c): a unit's value in each cell."""
        weighted = cells.count * self.weights(cells)
        return np.asarray((y @ weighted.reshape(-1, weighted.shape[-1]).T).T).reshape(*weighted.shape[:-1], y.shape[0])

    def scores(self, y: sparse.csr_array, cells: Cells) -> sparse.csr_array:
        """Weighted scores, shape (p, c), whose centred sums of squares estimate the variance of the totals of `y`.

        A total that is the same multiple of the known number of units in every stratum has no variance; its row is
        left empty, which keeps the scores of ratios to it sparse.
        """
        weight = self.design_weights(cells)
        if self.adjust is None:
            scores = _scale_columns(y, weight)
            return scores if self.M is not None else self._without_constants(scores, cells)
        g = self.adjust.g(cells.count * weight)
        return _scale_columns(self.adjust.residuals(y, cells.count * weight), weight * g)

    # -- variance ----------------------------------------------------------------------------------------

    def components(self, u: sparse.csr_array, cells: Cells) -> Floats:
        """Contribution of each stratum to the variance of each row of scores, shape (p, H).

        NaN in strata with a single primary unit of several.
        """
        parts = np.zeros((u.shape[0], len(self.N)))
        for stage in self.stages(cells):
            squares = _centred_squares(stage.reduce(u), stage.count, stage.group, stage.size)
            np.add.at(parts.T, stage.stratum_of_group, (squares * stage.factor).T)
        return parts

    def contributions(self, u: sparse.csr_array, cells: Cells) -> Floats:
        """What one primary unit adds to the variance of one row of scores, shape (c,): by the cell it belongs to.

        The variance is the sum over primary units. In two-stage designs a cluster's part holds its second stage.
        """
        first, *second = self.stages(cells)
        parts = first.factor[first.group] * _centred(first.reduce(u), first.count, first.group, first.size)[0] ** 2
        for stage in second:
            parts = parts + stage.factor * _centred_squares(u, stage.count, stage.group, stage.size)[0]
        return np.asarray(parts if cells.psu is None else parts[cells.psu])

    def without_each(self, cells: Cells) -> Iterator[tuple[Ints, Floats]]:
        """Counts of the sample without one primary unit, in blocks: cells, and counts of shape (block, c).

        A block row holds the counts when a unit of that cell (in cluster designs, its whole cluster) is left out and
        the rest of its stratum weighs accordingly more.
        """
        total = len(cells)
        for start in range(0, total, step := max(1, BLOCK_NUMBERS // total)):
            block = np.arange(start, min(start + step, total))
            counts = np.repeat(cells.count[None, :], len(block), axis=0)
            if cells.psu is None:
                counts[np.arange(len(block)), block] -= 1
            else:
                counts[cells.psu[None, :] == cells.psu[block][:, None]] = 0.0
                m = self.primary_count(cells)[cells.stratum[block]]
                with np.errstate(divide="ignore", invalid="ignore"):
                    rest = np.where(m > 1, m / (m - 1), np.nan)
                same = cells.stratum[None, :] == cells.stratum[block][:, None]
                counts = np.where(same, counts * rest[:, None], counts)
            yield block, counts

    def covariance(self, u: sparse.csr_array, v: sparse.csr_array, cells: Cells) -> Floats:
        """Covariance, shape (p, q), of the totals behind the score rows `u` and `v`."""
        result = np.zeros((u.shape[0], v.shape[0]))
        for stage in self.stages(cells):
            left, right = (_centred(stage.reduce(w), stage.count, stage.group, stage.size) for w in (u, v))
            result += (left * (stage.count * stage.factor[stage.group])) @ right.T
        return result

    def df(self, cells: Cells) -> float:
        """Degrees of freedom: primary units minus strata that hold any."""
        primary = self.primary_count(cells)
        return float(primary.sum() - len(np.unique(self._merged[primary > 0])))

    def lonely(self, cells: Cells) -> tuple[Ints, Ints]:
        """Strata with one primary unit of several, and clusters with one labelled unit of several: no variance."""
        first, *second = self.stages(cells)
        clusters = np.flatnonzero(np.isnan(second[0].factor)) if second else np.zeros(0, np.intp)
        return np.flatnonzero(np.isnan(first.factor) & (first.size > 0)), clusters

    def same_sampling(self, cells: Cells, at: Ints, other: Design, other_cells: Cells, other_at: Ints) -> bool:
        """Whether both state the same sampling of the same units; how weights are adjusted may differ.

        `at` and `other_at` are cells that hold the same units; strata may be numbered differently.
        """
        if (self.fpc, self.divisor, self.M is None) != (other.fpc, other.divisor, other.M is None):
            return False
        mine, theirs = (
            np.stack([x for x in (d.N, d.A, d.M) if x is not None])[:, c.stratum[i]]
            for d, c, i in ((self, cells, at), (other, other_cells, other_at))
        )
        pooled, others = self._merged[cells.stratum[at]], other._merged[other_cells.stratum[other_at]]
        pairs = set(zip(pooled.tolist(), others.tolist(), strict=True))
        return bool(np.allclose(mine, theirs, rtol=1e-12)) and len(pairs) == len(set(pooled)) == len(set(others))

    # -- details -----------------------------------------------------------------------------------------

    @property
    def _clusters(self) -> _Clusters:
        if self.cluster_stratum is None or self.cluster_units is None:
            raise ValueError("a cluster design needs the stratum and the number of units of each cluster")
        labelled = self.cluster_units if self.cluster_labelled is None else self.cluster_labelled
        return _Clusters(self.cluster_stratum, self.cluster_units, labelled)

    def _within_weight(self, cells: Cells) -> Floats:
        """Units of its cluster that one labelled unit stands for, shape (c,)."""
        assert cells.psu is not None, "cells of a cluster design carry their cluster"
        clusters = self._clusters
        return np.asarray((clusters.units / clusters.labelled)[cells.psu])

    def _without_constants(self, scores: sparse.csr_array, cells: Cells) -> sparse.csr_array:
        """Empty the rows that are constant within each stratum: centring would leave nothing of them."""
        strata = len(self.N)
        group = self._merged[cells.stratum]
        members = np.bincount(group, minlength=strata)
        at = np.repeat(np.arange(scores.shape[0]), np.diff(scores.indptr)) * strata + group[scores.indices]
        present = np.bincount(at, minlength=scores.shape[0] * strata)
        low, high = np.full(len(present), np.inf), np.full(len(present), -np.inf)
        np.minimum.at(low, at, scores.data)
        np.maximum.at(high, at, scores.data)
        constant = (present == 0) | ((present == np.tile(members, scores.shape[0])) & (low == high))
        keep = ~constant.reshape(scores.shape[0], strata).all(axis=1)
        return scores if keep.all() else scale_rows(scores, keep.astype(float))

    @property
    def _merged(self) -> Ints:
        """Stratum within which the scores of each stratum are centred."""
        return np.arange(len(self.N)) if self.collapse is None else self.collapse

    def stages(self, cells: Cells) -> Iterator[Stage]:
        """Stages of selection, the first between primary units; a second one only where it adds variance."""
        merged = self._merged
        if self.M is None:
            size = self.stratum_count(cells)
            yield self._first_stage(lambda u: u, cells.count, merged[cells.stratum], size, self.N, merged)
            return
        clusters = self._clusters
        assert cells.psu is not None, "cells of a cluster design carry their cluster"
        to_cluster = indicator_of(cells.psu, cells.count, len(clusters.units))
        size = self.primary_count(cells)
        ones = np.ones(len(clusters.units))
        yield self._first_stage(lambda u: u @ to_cluster, ones, merged[clusters.stratum], size, self.M, merged)
        labelled = clusters.labelled
        if self.fpc and np.any(labelled < clusters.units):
            with np.errstate(divide="ignore", invalid="ignore"):
                first = (size / self.M)[clusters.stratum]
            factor = first * self._factor(labelled, clusters.units)
            yield Stage(lambda u: u, cells.count, cells.psu, labelled, factor, clusters.stratum)

    def _first_stage(
        self, reduce: Reduce, count: Floats, group: Ints, size: Floats, population: Floats, merged: Ints
    ) -> Stage:
        strata = len(self.N)
        pooled_size, pooled_population = (_by_group(x, merged, strata) for x in (size, population))
        factor = self._factor(pooled_size, pooled_population)
        return Stage(reduce, count, group, pooled_size, factor, np.arange(strata))

    def _factor(self, n: Floats, population: Floats) -> Floats:
        """(1 - f) n / (n - 1): what a centred sum of squares is multiplied with; NaN for one unit of several."""
        with np.errstate(divide="ignore", invalid="ignore"):
            factor = n / (n - 1) if self.divisor == "n-1" else np.ones_like(n)
            factor = np.where(n > (self.divisor == "n-1"), factor, np.nan)
            rest = np.clip(1 - n / population, 0, None) if self.fpc else np.ones_like(n)
        whole = (n >= population * (1 - 1e-12)) if self.fpc else np.zeros(n.shape, bool)
        return np.where(whole | (n == 0), 0.0, factor * rest)


Reduce = Callable[[sparse.csr_array], sparse.csr_array]


@dataclass(frozen=True, eq=False)
class _Clusters:
    stratum: Ints
    units: Floats
    labelled: Floats


@dataclass(frozen=True, eq=False)
class Stage:
    """One stage of selection: columns of scores, how many units each stands for, and how they are grouped."""

    reduce: Reduce
    count: Floats
    group: Ints
    size: Floats
    factor: Floats
    stratum_of_group: Ints


def indicator_of(group: Ints, value: Floats, groups: int) -> sparse.csr_array:
    """Sparse matrix, shape (c, groups), with `value` of each cell in the column of its group."""
    return sparse.csr_array((value, (np.arange(len(group)), group)), shape=(len(group), groups))


def _by_group(x: Floats, group: Ints, groups: int) -> Floats:
    """Sum the last axis by group, shape (..., groups)."""
    if x.ndim == 1:
        return np.asarray(np.bincount(group, x, minlength=groups), dtype=float)
    return np.asarray((indicator_of(group, np.ones(len(group)), groups).T @ x.reshape(-1, x.shape[-1]).T).T).reshape(
        *x.shape[:-1], groups
    )


def _scale_columns(matrix: sparse.csr_array, factor: Floats) -> sparse.csr_array:
    return sparse.csr_array((matrix.data * factor[matrix.indices], matrix.indices, matrix.indptr), shape=matrix.shape)


def scale_rows(matrix: sparse.csr_array, factor: Floats) -> sparse.csr_array:
    """Multiply each row of a sparse matrix by its factor; rows multiplied by zero become empty."""
    by_entry = np.repeat(factor, np.diff(matrix.indptr))
    indices, indptr = matrix.indices, matrix.indptr
    if not np.all(factor):  # dropping entries happens in place: keep the original's structure out of it
        indices, indptr = indices.copy(), indptr.copy()
    scaled = sparse.csr_array((matrix.data * by_entry, indices, indptr), shape=matrix.shape)
    if not np.all(factor):
        scaled.eliminate_zeros()
    return scaled


def _means(u: sparse.csr_array, count: Floats, group: Ints, size: Floats) -> Floats:
    sums = (_scale_columns(u, count) @ indicator_of(group, np.ones(len(group)), len(size))).toarray()
    return np.asarray(np.divide(sums, size, out=np.zeros_like(sums), where=size > 0))


def _centred_squares(u: sparse.csr_array, count: Floats, group: Ints, size: Floats) -> Floats:
    """Sum of ``count * (u - mean of its group)**2`` by row and group, shape (p, G), without cancellation.

    Entries and absent entries (zeros) are summed apart, each as squares, so that equal scores give exactly zero.
    """
    mean = _means(u, count, group, size)
    row = np.repeat(np.arange(u.shape[0]), np.diff(u.indptr))
    at = row * len(size) + group[u.indices]
    here = count[u.indices]
    present = np.bincount(at, here, minlength=mean.size).reshape(mean.shape)
    squares = np.bincount(at, here * (u.data - mean.ravel()[at]) ** 2, minlength=mean.size).reshape(mean.shape)
    return np.asarray(squares + np.clip(size - present, 0, None) * mean**2)


def _centred(u: sparse.csr_array, count: Floats, group: Ints, size: Floats) -> Floats:
    return np.asarray(u.toarray() - _means(u, count, group, size)[:, group])
