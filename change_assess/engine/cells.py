"""The sample, compressed to distinct cells with counts.

Units that share stratum, primary unit (in cluster designs), labels and size are one cell. Nothing that the engine
computes needs more, so its cost does not grow with the number of units; `cell_of_unit` leads back to them.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

Floats = NDArray[np.float64]
Ints = NDArray[np.intp]


@dataclass(frozen=True, eq=False)
class Cells:
    """Distinct kinds of sample unit, and how many there are of each.

    Parameters
    ----------
    stratum : ndarray of int, shape (c,)
        Stratum of each cell, numbered from 0.
    labels : ndarray of int, shape (c, L)
        One column a label; -1 where the unit has no such label.
    size_ha : ndarray of float, shape (c,)
        Area of one unit, in hectares.
    count : ndarray of float, shape (..., c)
        Units of each kind. Leading axes are replicates: imputations, simulated samples, a planner's expectations.
    psu : ndarray of int, shape (c,), optional
        Primary unit (cluster) of each cell, numbered from 0 over all strata.
    cell_of_unit : ndarray of int, shape (n,), optional
        Cell of each unit of the sample table; -1 for units that take no part.
    sample_id : str
        The same for all cells made from one sample.
    order : ndarray of int, shape (n,), optional
        Rows of the sample table in the order of their unit ids; None if they stand in it already.
    """

    stratum: Ints
    labels: Ints
    size_ha: Floats
    count: Floats
    psu: Ints | None = None
    cell_of_unit: Ints | None = None
    sample_id: str = ""
    order: Ints | None = None

    @classmethod
    def from_units(
        cls,
        stratum: Ints,
        labels: Ints,
        size_ha: Floats,
        *,
        psu: Ints | None = None,
        use: NDArray[np.bool_] | None = None,
        sample_id: str = "",
        order: Ints | None = None,
        compress: bool = True,
    ) -> Cells:
        """Compress units, one row each; `use` marks those that take part. `compress=False` keeps one cell a unit."""
        n = len(stratum)
        taken = np.flatnonzero(np.ones(n, bool) if use is None else use)
        groups = _group_rows(stratum, labels, size_ha, psu, taken) if compress else np.arange(len(taken))
        counts = np.bincount(groups)
        first = np.empty(len(counts), dtype=np.intp)
        first[groups[::-1]] = taken[::-1]
        cell_of_unit = np.full(n, -1, dtype=np.intp)
        cell_of_unit[taken] = groups
        return cls(
            stratum=stratum[first],
            labels=labels[first],
            size_ha=np.asarray(size_ha, float)[first],
            count=counts.astype(float),
            psu=None if psu is None else psu[first],
            cell_of_unit=cell_of_unit,
            sample_id=sample_id,
            order=order,
        )

    def with_count(self, count: Floats) -> Cells:
        """Return the same cells with other counts, shape (..., c)."""
        return replace(self, count=np.asarray(count, float))

    @property
    def cell_by_unit_id(self) -> Ints | None:
        """Cell of each unit, in the order of unit ids: the same for every reading of one sample."""
        return self.cell_of_unit if self.cell_of_unit is None or self.order is None else self.cell_of_unit[self.order]

    def __len__(self) -> int:
        return len(self.stratum)


def _group_rows(stratum: Ints, labels: Ints, size_ha: Floats, psu: Ints | None, taken: Ints) -> Ints:
    """Number the distinct rows from 0 (in sorted order, so the order of rows in the file does not matter)."""
    pick: Ints | slice = slice(None) if len(taken) == len(stratum) else taken
    sizes = np.asarray(size_ha, float)[pick]
    code = np.zeros(len(taken), dtype=np.int64)
    if len(sizes) and sizes.min() != sizes.max():
        code = np.unique(sizes, return_inverse=True)[1].astype(np.int64)
    span = int(code.max(initial=0)) + 1
    for column in (stratum, *([] if psu is None else [psu]), *labels.T):
        values = column[pick]
        width = int(values.max(initial=0)) + 2  # -1, "no label", becomes 0
        if span * width >= 2**62:
            code = np.unique(code, return_inverse=True)[1].astype(np.int64)
            span = int(code.max(initial=0)) + 1
        code, span = code * width + (values + 1), span * width
    return _renumber(code, span)


def _renumber(code: NDArray[np.int64], span: int) -> Ints:
    """`np.unique(code, return_inverse=True)[1]`, by counting where the codes span little (no sort)."""
    if span > max(4 * len(code), 1 << 20):
        return np.unique(code, return_inverse=True)[1].astype(np.intp)
    present = np.zeros(span, dtype=bool)
    present[code] = True
    return (np.cumsum(present) - 1)[code].astype(np.intp)


def indicator(row: Ints, rows: int) -> sparse.csr_array:
    """Sparse 0/1 matrix, shape (rows, c), that marks for each row the cells with ``row == its number`` (-1: none)."""
    cells = np.flatnonzero(row >= 0)
    return sparse.csr_array((np.ones(len(cells)), (row[cells], cells)), shape=(rows, len(row)))
