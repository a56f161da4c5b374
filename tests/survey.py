"""Textbook samples of continuous variables for the engine: one cell a unit, totals with their scores.

Means, ratios and products of what `totals` returns are formed with the arithmetic of `Linearised`.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
from scipy import sparse

from change_assess.engine.cells import Cells
from change_assess.engine.design import Design
from change_assess.engine.linearise import Linearised, Survey, linearised_totals
from change_assess.results.estimate import estimate
from change_assess.results.result import Result
from change_assess.samples import read_matrix

DATA = Path(__file__).parent / "data"


def load(folder: str, name: str) -> dict:
    """One worked example, or data set, of a folder of `tests/data`."""
    return json.loads((DATA / folder / f"{name}.json").read_text())


def positions(names) -> np.ndarray:
    """Number names from 0 in sorted order."""
    return np.unique(np.asarray(names), return_inverse=True)[1]


def element_survey(n: int, N, stratum=None, **options) -> Survey:
    """Sample of `n` elements from strata of `N` units; every unit is a cell. `options` go to `Design`."""
    stratum = np.zeros(n, np.intp) if stratum is None else np.asarray(stratum)
    population = np.atleast_1d(np.asarray(N, float))
    cells = Cells(stratum, np.zeros((n, 0), np.intp), np.ones(n), np.ones(n))
    return Survey.of(Design(N=population, A=population, **options), cells)


def cluster_survey(cluster, M: float, units=None, **options) -> Survey:
    """Simple random sample of clusters from `M`; `cluster` of each element, `units` in each selected cluster."""
    psu = np.asarray(cluster)
    size = np.bincount(psu).astype(float) if units is None else np.asarray(units, float)
    population = np.array([M * size.mean()])
    n = len(psu)
    cells = Cells(np.zeros(n, np.intp), np.zeros((n, 0), np.intp), np.ones(n), np.ones(n), psu)
    clusters = {
        "M": np.array([float(M)]),
        "cluster_stratum": np.zeros(len(size), np.intp),
        "cluster_units": size,
        "cluster_labelled": np.bincount(psu).astype(float),
    }
    return Survey.of(Design(N=population, A=population, **clusters, **options), cells)


def totals(survey: Survey, *variables) -> list[Linearised]:
    """Estimated total of each variable, given as one value a unit."""
    y = sparse.csr_array(np.array([np.broadcast_to(v, len(survey.only.cells)) for v in variables], float))
    found = linearised_totals(y, survey)
    return [found[i] for i in range(len(variables))]


def values_with(n: int, mean: float, variance: float) -> np.ndarray:
    """Some `n` numbers with exactly this mean and this sample variance (divisor n - 1)."""
    shape = np.arange(n) - (n - 1) / 2
    return mean + shape * np.sqrt(variance / shape.var(ddof=1))


# -- matrices of counts -----------------------------------------------------------------------------------


def units_of(counts, classes, columns=("map", "ref")) -> pd.DataFrame:
    """One row a unit for a matrix of counts: rows are the first column, columns the second."""
    counts = np.asarray(counts)
    i, j = (np.repeat(a.ravel(), counts.ravel()) for a in np.indices(counts.shape))
    names = np.asarray(classes, dtype=object)
    ids = np.arange(1, len(i) + 1).astype(str)
    return pd.DataFrame({"unit": ids, columns[0]: names[i], columns[1]: names[j]})


def from_random_sample(counts, classes, area_ha: float = 1.0, **options) -> Result:
    """Estimate from a simple random sample, given as a matrix with the map in rows."""
    strata = pd.DataFrame({"stratum": ["all"], "area_ha": [area_ha]})
    return estimate(units_of(counts, classes), strata=strata, map="map", reference="ref", **options)


def from_matrix(counts, classes, area_ha, rows: str = "strata", units=None, **options) -> Result:
    """Estimate from a matrix of counts with `read_matrix`; `area_ha`, and perhaps `units`, of each map class."""
    matrix = pd.DataFrame(np.asarray(counts), columns=list(classes))
    matrix.insert(0, "class", list(classes))
    strata = pd.DataFrame({"stratum": list(classes), "area_ha": np.asarray(area_ha, float)})
    if units is not None:
        strata["units"] = units
    return estimate(read_matrix(matrix, strata, rows=rows), map="map", reference="reference", **options)
