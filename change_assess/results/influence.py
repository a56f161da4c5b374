"""What a result hangs on: units and strata that carry its variance, and what one more or one less label would do.

With few omissions seen, a single unit in a big stratum can carry most of an estimate (Olofsson et al. 2020, RSE 236,
111492). Every figure here is the estimate itself, evaluated again for other counts; nothing is approximated.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from change_assess.engine.cells import Cells, Floats, Ints
from change_assess.engine.design import BLOCK_NUMBERS
from change_assess.engine.intervals import exact, normal
from change_assess.engine.linearise import Survey
from change_assess.measures import AREAS, BY_CLASS, OVERALL, Contrast, Measure, linearise
from change_assess.samples import Sample

MOST_OMISSIONS = 50
"""Additional omissions tried, at most, to take the mapped area out of the interval."""

PLACE = ("x", "y", "longitude", "latitude")


@dataclass(frozen=True, eq=False)
class Influence:
    """Units and strata behind one estimate.

    Attributes
    ----------
    measure, class_name : str
    value, se : float
    units : DataFrame
        One row a labelled unit, those that move the estimate most first: `unit, stratum`, coordinates where the
        sample has them, `map, reference, variance_share, without, change_without, relabelled_as, change_relabelled`.
        `without` is the estimate without the unit (in cluster designs, without its cluster).
    strata : DataFrame
        `stratum, area_ha, n, variance_share`; for areas also `seen` (units of the class), `one_unit_ha` (what one
        more such unit would add), `hidden_ha` (where none was seen: the one-sided bound of what could be there),
        `omissions_to_double` and `omissions_to_lose_map` (additional omissions that would double the estimate, or
        take the mapped area out of the normal interval; empty if none up to 50 does).
    level : float
        Of `hidden_ha` and of the interval.
    """

    measure: str
    class_name: str
    value: float
    se: float
    units: pd.DataFrame
    strata: pd.DataFrame
    level: float

    def relook(self, units: int, seed: int) -> pd.DataFrame:
        """List for looking again, blind: the `units` most influential units and as many drawn from their strata.

        Parameters
        ----------
        units : int
            How many influential units; as many others are drawn at random from the same strata, as far as there are.
        seed : int

        Returns
        -------
        DataFrame
            `unit` and coordinates in random order, without anything that tells one kind from the other.
        """
        rng = np.random.default_rng(seed)
        picked = self.units.head(units)
        others = self.units.iloc[units:]
        drawn = [
            part.iloc[rng.permutation(len(part))[:wanted]]
            for stratum, wanted in picked["stratum"].value_counts(sort=False).items()
            for part in [others[others["stratum"] == stratum]]
        ]
        mixed = pd.concat([picked, *drawn])
        columns = ["unit", *(c for c in PLACE if c in mixed)]
        return mixed.iloc[rng.permutation(len(mixed))][columns].reset_index(drop=True)


def influence(
    contrast: Contrast,
    sample: Sample,
    measure: str,
    class_name: str = "",
    *,
    mapped_ha: float | None = None,
    level: float = 0.95,
) -> Influence:
    """Find the units and strata that carry an estimate.

    Parameters
    ----------
    contrast : Contrast
    sample : Sample
    measure : str
        A measure by class (with `class_name`) or an overall one.
    class_name : str
    mapped_ha : float, optional
        Mapped area of the class, where known; else as the sample sees it.
    level : float

    Returns
    -------
    Influence
    """
    part = contrast.survey.only
    index = contrast.classes.index(class_name) if class_name else None
    function = BY_CLASS[measure] if class_name else OVERALL[measure]
    x = linearise(function, contrast)
    scalar = x if index is None else x[index]
    value = float(scalar.value)
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = part.design.contributions(scalar.scores, part.cells)
        shares = np.where((part.cells.count > 0) & (variance > 0), variance / float(scalar.variance()), 0.0)
    cells = pd.DataFrame(
        {
            "map": _names(contrast, contrast.map_class),
            "reference": _names(contrast, contrast.reference_class),
            "variance_share": shares,
            "without": _without(contrast, function, index),
        }
    )
    cells["change_without"] = cells["without"] - value
    cells["relabelled_as"], cells["change_relabelled"] = _relabelled(contrast, function, index, value)
    strata = _strata_table(contrast, sample, shares)
    if measure in AREAS and class_name and index is not None:
        strata = strata.assign(**_hidden(contrast, index, mapped_ha, level))
    return Influence(
        measure, class_name, value, float(scalar.se), _unit_table(sample, part.cells, cells), strata, level
    )


def _names(contrast: Contrast, classes: Ints) -> NDArray[np.object_]:
    return np.array([*contrast.classes, ""], dtype=object)[classes]


def _evaluated(contrast: Contrast, function: Measure, index: int | None, count: Floats) -> Floats:
    with np.errstate(divide="ignore", invalid="ignore"):
        values = np.asarray(function(contrast.totals_at(count)))
    return values if index is None else values[..., index]


def _without(contrast: Contrast, function: Measure, index: int | None) -> Floats:
    """Estimate without one primary unit of each cell, shape (c,)."""
    part = contrast.survey.only
    found = np.full(len(part.cells), np.nan)
    for block, counts in part.design.without_each(part.cells):
        found[block] = _evaluated(contrast, function, index, counts)
    alone = part.design.primary_count(part.cells)[part.cells.stratum] <= 1
    return np.where(alone | (part.cells.count == 0), np.nan, found)


def _relabelled(
    contrast: Contrast, function: Measure, index: int | None, value: float
) -> tuple[NDArray[np.object_], Floats]:
    """Other reference label that would move the estimate most, for one unit of each cell, and by how much."""
    best, label = np.zeros(len(contrast.reference_class)), np.full(len(contrast.reference_class), "", dtype=object)
    for cell, new, change in _moves(contrast, function, index, value):
        larger = np.abs(change) > np.abs(best[cell])
        best[cell[larger]], label[cell[larger]] = change[larger], np.array(contrast.classes, dtype=object)[new[larger]]
    return label, best


def _moves(
    contrast: Contrast, function: Measure, index: int | None, value: float
) -> Iterator[tuple[Ints, Ints, Floats]]:
    """Change of the estimate when one unit of a cell gets another reference label, in blocks of (cell, label)."""
    cells = contrast.survey.only.cells
    cell, new = _alternatives(contrast, index)
    variants, at = np.unique(np.stack([cell, new]), axis=1, return_inverse=True)
    wider = _with_variants(contrast, variants)
    total = len(cells) + variants.shape[1]
    step = max(1, BLOCK_NUMBERS // total)
    for start in range(0, len(cell), step):
        block = slice(start, start + step)
        counts = np.zeros((len(cell[block]), total))
        counts[:, : len(cells)] = cells.count
        rows = np.arange(len(counts))
        counts[rows, cell[block]] -= 1
        counts[rows, len(cells) + at[block]] += 1
        yield cell[block], new[block], _evaluated(wider, function, index, counts) - value


def _alternatives(contrast: Contrast, index: int | None) -> tuple[Ints, Ints]:
    """Pairs of (cell, other reference label) worth trying: into and out of the class, or right to wrong and back."""
    reference, mapped, k = contrast.reference_class, contrast.map_class, len(contrast.classes)
    used = np.flatnonzero((contrast.survey.only.cells.count > 0) & (reference >= 0))
    target = np.where(mapped >= 0, mapped, 0) if index is None else np.full(len(reference), index)
    into = used[reference[used] != target[used]]
    out = used[reference[used] == target[used]]
    cell = np.concatenate([into, np.repeat(out, k)])
    new = np.concatenate([target[into], np.tile(np.arange(k), len(out))])
    other = new != reference[cell]
    return cell[other], new[other]


def _with_variants(contrast: Contrast, variants: NDArray[np.intp]) -> Contrast:
    """The same contrast with further cells, empty so far: copies of cells with another reference label."""
    part = contrast.survey.only
    cells, (source, label) = part.cells, variants
    every = np.concatenate([np.arange(len(cells)), source])
    wider = Cells(
        stratum=cells.stratum[every],
        labels=cells.labels[every],
        size_ha=cells.size_ha[every],
        count=np.concatenate([cells.count, np.zeros(len(source))]),
        psu=None if cells.psu is None else cells.psu[every],
        sample_id=cells.sample_id,
    )
    adjust = part.design.adjust
    design = part.design if adjust is None else replace(part.design, adjust=adjust.at(every))
    return replace(
        contrast,
        survey=Survey.of(design, wider),
        map_class=contrast.map_class[every],
        reference_class=np.concatenate([contrast.reference_class, label]),
    )


# -- tables -----------------------------------------------------------------------------------------------


def _unit_table(sample: Sample, cells: Cells, by_cell: pd.DataFrame) -> pd.DataFrame:
    assert cells.cell_of_unit is not None
    used = np.flatnonzero(cells.cell_of_unit >= 0)
    frame = sample.units.frame.iloc[used]
    columns = {"unit": frame["unit"].to_numpy(), "stratum": sample.strata["stratum"].to_numpy()[sample.stratum[used]]}
    columns |= {name: pd.to_numeric(frame[name], errors="coerce").to_numpy() for name in PLACE if name in frame}
    table = pd.DataFrame(columns).join(by_cell.iloc[cells.cell_of_unit[used]].reset_index(drop=True))
    order = np.argsort(-np.abs(table["change_without"].fillna(np.inf).to_numpy()), kind="stable")
    return table.iloc[order].reset_index(drop=True)


def _strata_table(contrast: Contrast, sample: Sample, shares: Floats) -> pd.DataFrame:
    part = contrast.survey.only
    kept = part.design.stratum_count(part.cells) > 0
    if part.cells.psu is None:
        by_stratum = np.bincount(part.cells.stratum, shares * part.cells.count, minlength=len(kept))
    else:
        _, first = np.unique(part.cells.psu, return_index=True)
        by_stratum = np.bincount(part.cells.stratum[first], shares[first], minlength=len(kept))
    table = pd.DataFrame(
        {
            "stratum": sample.strata["stratum"],
            "area_ha": part.design.A,
            "n": part.design.stratum_count(part.cells).astype(np.int64),
            "variance_share": by_stratum,
        }
    )
    return table[kept].reset_index(drop=True)


def _hidden(contrast: Contrast, index: int, mapped_ha: float | None, level: float) -> dict[str, Floats]:
    """What more omissions would do, and what a stratum without any could hide; for areas, by stratum."""
    part = contrast.survey.only
    design, cells = part.design, part.cells
    n = design.stratum_count(cells)
    kept = np.flatnonzero(n > 0)
    seen = np.bincount(cells.stratum, cells.count * (contrast.reference_class == index), minlength=len(n))[kept].astype(
        float
    )
    size = design.N[kept] if design.fpc and design.M is None else None
    _, upper = exact(np.zeros(len(kept)), n[kept], size, 2 * level - 1)
    becoming = _becoming(contrast, index)
    one = _one_more(becoming, index, kept)
    area = float(linearise(BY_CLASS["area_ha"], contrast).value[index])
    with np.errstate(divide="ignore", invalid="ignore"):
        double = np.where(area > 0, np.ceil(area / one), np.nan)
    if mapped_ha is None:
        mapped_ha = float(linearise(BY_CLASS["map_area_ha"], contrast).value[index])
    return {
        "seen": seen,
        "one_unit_ha": one,
        "hidden_ha": np.where((seen == 0) & (design.M is None), upper * design.A[kept], np.nan),
        "omissions_to_double": double,
        "omissions_to_lose_map": np.array([_to_lose_map(becoming, index, int(h), mapped_ha, level) for h in kept]),
    }


Becoming = tuple[Contrast, Ints, Ints]


def _one_more(becoming: Becoming, index: int, strata: Ints) -> Floats:
    """Hectares that one unit of the class adds in each stratum: the estimate with one more, minus the estimate."""
    wider, cell, variant = becoming
    part = wider.survey.only
    counts = np.repeat(part.cells.count[None, :], len(strata) + 1, axis=0)
    for row, stratum in enumerate(strata, start=1):
        of_stratum = np.flatnonzero(part.cells.stratum[cell] == stratum)
        if not len(of_stratum):
            counts[row] = np.nan
            continue
        big = of_stratum[part.cells.count[cell[of_stratum]].argmax()]
        counts[row, cell[big]] -= 1
        counts[row, variant[big]] += 1
    areas = _evaluated(wider, BY_CLASS["area_ha"], index, np.nan_to_num(counts))
    return np.where(np.isnan(counts[1:, 0]), np.nan, areas[1:] - areas[0])


def _becoming(contrast: Contrast, index: int) -> Becoming:
    """Contrast with an empty twin, labelled as the class, of every cell that is not; the cells and their twins."""
    cells = contrast.survey.only.cells
    cell = np.flatnonzero((cells.count > 0) & (contrast.reference_class >= 0) & (contrast.reference_class != index))
    wider = _with_variants(contrast, np.stack([cell, np.full(len(cell), index)]))
    return wider, cell, len(cells) + np.arange(len(cell))


def _to_lose_map(becoming: Becoming, index: int, stratum: int, mapped_ha: float, level: float) -> float:
    """Fewest additional omissions in a stratum that put the mapped area below the interval; NaN if none up to 50."""
    wider, cell, variant = becoming
    part = wider.survey.only
    here = np.flatnonzero(part.cells.stratum[cell] == stratum)
    most = int(min(part.cells.count[cell[here]].sum(), MOST_OMISSIONS))

    def lost(omissions: int) -> bool:
        count, left = part.cells.count.copy(), float(omissions)
        for i in here:
            moved = min(left, count[cell[i]])
            count[cell[i]] -= moved
            count[variant[i]] += moved
            left -= moved
        survey = Survey.of(part.design, part.cells.with_count(count))
        area = linearise(BY_CLASS["area_ha"], replace(wider, survey=survey))[index]
        lower, _ = normal(area.value, area.se, np.asarray(np.inf), level)
        return bool(lower > mapped_ha)

    if most == 0 or not lost(most):
        return float("nan")
    low, high = 0, most
    while low < high:
        middle = (low + high) // 2
        low, high = (low, middle) if lost(middle) else (middle + 1, high)
    return float(low)
