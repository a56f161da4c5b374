"""Invented interpreters who label sample units from the truth, as well as people do.

They are a little wrong, leave a few units blank, and look at some units twice: what reconciling has to deal with.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.random import Generator
from numpy.typing import NDArray

from change_assess.errors import InputError
from change_assess.legend import Legend
from change_assess.scenario import LEGEND, Mask, Raster

SURENESS = ("sure", "fairly sure", "unsure")
"""What an interpreter may say of a label, most sure first."""


@dataclass(frozen=True)
class _Habits:
    """How often one interpreter errs; chances per unit to which the error can happen."""

    mislabel: float
    miss: float
    late: float
    skip: float


def simulate_labels(
    sample: pd.DataFrame,
    truth_maps: Mapping[str, str | Path],
    legend: Legend = LEGEND,
    *,
    seed: int,
    interpreters: int = 3,
    repeat_share: float = 0.15,
) -> list[pd.DataFrame]:
    """Label sample units from the truth, as well as people do: a little wrong, a few left blank, some looked at twice.

    Each interpreter mislabels 1–2 % of the units without change (the same way at all dates), misses 2–5 % of the
    changes, shifts 1–4 % of them by a date where there are more than two dates, and leaves under 1 % unlabelled.

    Parameters
    ----------
    sample : DataFrame
        Columns ``unit``, ``x`` and ``y`` (in the reference system of the rasters); not altered.
    truth_maps : mapping of str to path
        Date to truth raster, in order of time.
    legend : Legend
        Names for the codes of the rasters.
    seed : int
        The same seed gives the same labels.
    interpreters : int
        How many people share the work, 1 or more.
    repeat_share : float
        Share (0–1) of the units that a second person labels too; with one interpreter there is none.

    Returns
    -------
    list of DataFrame
        One per interpreter: ``unit, interpreter, ref_DATE…, sureness``; an empty label is "not labelled".

    Raises
    ------
    InputError
        If the sample lacks a column, a unit lies where the truth has no class, or an option is out of range.
    """
    _check_options(sample, interpreters, repeat_share)
    codes = _codes_at(sample, list(truth_maps.values()))
    truth = _positions(codes, legend, sample["unit"].tolist())
    rng = np.random.default_rng(seed)
    turns = _who_labels(rng, len(sample), interpreters, repeat_share)
    dates = list(truth_maps)
    return [
        _one_interpreter(rng, sample, truth, dates, legend, f"I{person + 1:02d}", turns[:, person])
        for person in range(interpreters)
    ]


def _check_options(sample: pd.DataFrame, interpreters: int, repeat_share: float) -> None:
    missing = [c for c in ("unit", "x", "y") if c not in sample.columns]
    if missing:
        raise InputError(
            f"the sample has no column '{missing[0]}'", column=missing[0], mend="Give it columns unit, x and y."
        )
    if interpreters < 1:
        raise InputError(
            f"{interpreters} interpreters cannot label anything", value=interpreters, mend="Ask for at least 1."
        )
    if not 0 <= repeat_share <= 1:
        raise InputError(
            f"the share of repeated units is {repeat_share}", value=repeat_share, mend="Give a share between 0 and 1."
        )


def _codes_at(sample: pd.DataFrame, paths: Sequence[str | Path]) -> Raster:
    """Raster codes at the sample units, shape (units, dates); 0 beyond the edge of the rasters."""
    from change_assess.maps.grid import Reader, open_maps

    stack = open_maps([str(p) for p in paths])
    a, _, c, _, e, f = stack.grid.transform
    columns = np.floor((sample["x"].to_numpy(dtype=float) - c) / a).astype(np.int64)
    rows = np.floor((sample["y"].to_numpy(dtype=float) - f) / e).astype(np.int64)
    codes = np.zeros((len(sample), len(paths)), dtype=np.uint8)
    with Reader(stack) as reader:
        for window in stack.windows():
            y, x = rows - window.row_off, columns - window.col_off
            here = np.flatnonzero((y >= 0) & (y < window.height) & (x >= 0) & (x < window.width))
            if here.size:
                codes[here] = np.column_stack([block[y[here], x[here]] for block in reader.read_all(window)])
    return codes


def _positions(codes: Raster, legend: Legend, units: list[object]) -> NDArray[np.intp]:
    """Legend positions of raster codes, same shape."""
    table = np.full(256, -1, dtype=np.intp)
    table[legend.codes] = np.arange(len(legend.classes))
    positions = table[codes]
    bad = np.flatnonzero((positions < 0).any(axis=1))
    if bad.size:
        raise InputError(
            f"unit {units[bad[0]]} lies where the truth raster holds no class of the legend",
            row=int(bad[0]) + 2, column="x", value=units[bad[0]], mend="Draw the sample inside the province.",
        )  # fmt: skip
    return np.asarray(positions, dtype=np.intp)


def _who_labels(rng: Generator, units: int, people: int, repeat_share: float) -> Mask:
    """Which interpreter labels which unit, shape (units, people)."""
    turns = np.zeros((units, people), dtype=np.bool_)
    first = rng.permutation(units) % people
    turns[np.arange(units), first] = True
    if people > 1:
        twice = rng.choice(units, round(repeat_share * units), replace=False)
        turns[twice, (first[twice] + rng.integers(1, people, twice.size)) % people] = True
    return turns


def _one_interpreter(
    rng: Generator,
    sample: pd.DataFrame,
    truth: NDArray[np.intp],
    dates: list[str],
    legend: Legend,
    name: str,
    mine: Mask,
) -> pd.DataFrame:
    habits = _Habits(rng.uniform(0.01, 0.02), rng.uniform(0.02, 0.05), rng.uniform(0.01, 0.04), 0.004)
    seen = truth[mine].copy()
    wrong = _err(rng, seen, _look_alikes(legend), habits)
    labels = np.array(legend.names, dtype=object)[seen]
    blank = rng.random(len(seen)) < habits.skip
    labels[blank] = ""
    once = np.flatnonzero(~blank & (rng.random(len(seen)) < habits.skip))
    labels[once, rng.integers(0, len(dates), once.size)] = ""
    table = pd.DataFrame({"unit": sample["unit"].to_numpy()[mine], "interpreter": name})
    for column, date in enumerate(dates):
        table[f"ref_{date}"] = labels[:, column]
    doubt = np.where(
        wrong, rng.choice(3, len(seen), p=(0.4, 0.35, 0.25)), rng.choice(3, len(seen), p=(0.8, 0.15, 0.05))
    )
    table["sureness"] = np.where(blank, "", np.array(SURENESS, dtype=object)[doubt])
    return table


def _err(rng: Generator, seen: NDArray[np.intp], look_alikes: NDArray[np.intp], habits: _Habits) -> Mask:
    """Put one interpreter's errors into `seen`, shape (units, dates); return which units are now wrong."""
    changed = (seen != seen[:, :1]).any(axis=1)
    dice = rng.random(len(seen))
    mislabel = ~changed & (dice < habits.mislabel)
    miss = changed & (dice < habits.miss)
    late = changed & ~miss & (dice < habits.miss + habits.late) & (seen.shape[1] > 2)
    seen[mislabel] = look_alikes[seen[mislabel]]
    seen[miss] = seen[miss][:, :1]
    seen[late, 1:] = seen[late, :-1]
    return np.asarray(mislabel | miss | late, dtype=np.bool_)


def _look_alikes(legend: Legend) -> NDArray[np.intp]:
    """For each class the one it is mistaken for: the next of its group, or else its neighbour in the legend."""
    size = len(legend.classes)
    alike = np.empty(size, dtype=np.intp)
    for position, item in enumerate(legend.classes):
        others = [i for i, c in enumerate(legend.classes) if i != position and c.group and c.group == item.group]
        neighbour = position - 1 if position else min(1, size - 1)
        alike[position] = min(others, key=lambda i: abs(i - position)) if others else neighbour
    return alike
