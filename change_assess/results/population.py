"""From a sample table to a survey: which units take part, what they weigh, what the population holds."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from change_assess.engine.cells import Cells
from change_assess.engine.design import Calibration, Design
from change_assess.engine.linearise import Survey
from change_assess.errors import DesignError, InputError, Notice, nearest
from change_assess.legend import Legend
from change_assess.samples import LABELLED, OUTSIDE, STATUS, Sample
from change_assess.tables import label_codes

EXCLUDE = "exclude"
ESTIMATORS = ("combined", "separate", "expansion")
POST_STRATIFY = ("cells", "margins")


@dataclass(frozen=True, eq=False)
class Population:
    """The target population that estimates refer to.

    Attributes
    ----------
    account : DataFrame
        One row a stratum: `stratum, units, area_ha, selected, labelled, role, filled_from`.
    N, A, M : ndarray, shape (H,)
        Units, hectares and clusters after excluding or filling strata; zero where excluded.
    size_ha : ndarray, shape (n,)
        Area of each sample unit.
    fpc : bool
    kept : ndarray of bool, shape (H,)
        Strata that estimates refer to.
    """

    account: pd.DataFrame
    N: NDArray[np.float64]
    A: NDArray[np.float64]
    M: NDArray[np.float64] | None
    size_ha: NDArray[np.float64]
    fpc: bool
    kept: NDArray[np.bool_]
    notices: tuple[Notice, ...]

    @property
    def area_ha(self) -> float:
        """Area that estimates refer to, in hectares."""
        return float(self.A.sum())

    @property
    def unsampled_ha(self) -> float:
        """Area of the strata without any labelled unit, in hectares."""
        return float(self.account.loc[self.account["role"] != "sampled", "area_ha"].sum())


def labelled_units(sample: Sample, references: NDArray[np.intp]) -> NDArray[np.bool_]:
    """Which units have all their reference labels, shape (n,).

    Raises
    ------
    InputError
        If no unit is labelled, or `label_status` holds a word that is not known.
    """
    labelled = np.asarray((references >= 0).all(axis=1))
    if "label_status" in sample.units.frame.columns:
        labelled &= _status(sample)
    if not labelled.any():
        raise InputError(
            "no unit has its reference label",
            file=sample.units.file,
            mend="Check the names given with --reference, or label the sample first.",
        )
    return labelled


def _status(sample: Sample) -> NDArray[np.bool_]:
    codes, words = sample.units.words("label_status")
    for word in words:
        known = STATUS.get(word.casefold())
        if known is None or known == OUTSIDE:
            at = int(np.flatnonzero(codes == words.index(word))[0])
            mend = (
                "Give these units a reference class of their own, so that they get their own area row."
                if known == OUTSIDE
                else f"Use one of: {', '.join(w for w in STATUS if w)}.{nearest(word, STATUS)}"
            )
            what = f"the label status '{word}' is not {'handled here' if known == OUTSIDE else 'known'}"
            raise InputError(
                what, file=sample.units.file, row=sample.units.row(at), column="label_status", value=word, mend=mend
            )
    return np.array([STATUS[w.casefold()] == LABELLED for w in words])[codes]


def population_of(
    sample: Sample, labelled: NDArray[np.bool_], *, fpc: bool = True, unsampled: str | Sequence[str] | None = None
) -> Population:
    """Settle what the estimates refer to, above all what happens to strata without a labelled unit.

    Parameters
    ----------
    sample : Sample
    labelled : ndarray of bool, shape (n,)
    fpc : bool
    unsampled : "exclude", or "STRATUM=INTO" (one or several), optional
        Leave unsampled strata out of the target area, or assume that one is like another.

    Raises
    ------
    DesignError
        For strata without labelled units when nothing is said about them.
    """
    strata = sample.strata
    selected = np.bincount(sample.stratum, minlength=len(strata))
    counted = np.bincount(sample.stratum[labelled], minlength=len(strata))
    empty = counted == 0
    filled = _fill_of(unsampled, strata, empty)
    if empty.any() and not filled and unsampled != EXCLUDE and not _excludes(unsampled):
        _refuse_unsampled(strata, empty)
    notices: list[Notice] = []
    known = bool(strata["units"].notna().all())
    N = (strata["units"] if known else strata["area_ha"]).to_numpy(float).copy()
    A = strata["area_ha"].to_numpy(float).copy()
    M = strata["clusters"].to_numpy(float).copy() if sample.clusters is not None else None
    for source, target in filled.items():
        for values in (v for v in (N, A, M) if v is not None):
            values[target] += values[source]
    kept = ~empty
    for values in (v for v in (N, A, M) if v is not None):
        values[~kept] = 0.0
    if not known:
        notices.append(Notice("no-population-size", {"file": sample.strata_file}) if fpc else Notice("weights-by-area"))
    account = strata[["stratum", "units", "area_ha"]].assign(
        selected=selected,
        labelled=counted,
        role=np.where(kept, "sampled", ["assumed" if h in filled else "excluded" for h in range(len(strata))]),
        filled_from=[strata["stratum"].iloc[filled[h]] if h in filled else "" for h in range(len(strata))],
    )
    notices += _account_notices(account)
    with np.errstate(divide="ignore", invalid="ignore"):
        size = sample.area_ha if sample.area_ha is not None else np.nan_to_num(A / N)[sample.stratum]
    return Population(account, N, A, M, size, fpc and known, kept, tuple(notices))


def _excludes(unsampled: str | Sequence[str] | None) -> bool:
    return unsampled is not None and EXCLUDE in ([unsampled] if isinstance(unsampled, str) else unsampled)


def _fill_of(unsampled: str | Sequence[str] | None, strata: pd.DataFrame, empty: NDArray[np.bool_]) -> dict[int, int]:
    """Resolve "STRATUM=INTO" rules to positions."""
    rules = [] if unsampled is None else [unsampled] if isinstance(unsampled, str) else list(unsampled)
    names = strata["stratum"].tolist()
    filled = {}
    for rule in (r for r in rules if r != EXCLUDE):
        source, equals, target = (part.strip() for part in rule.partition("="))
        if not equals:
            raise InputError(
                f"'{rule}' does not say what to do with unsampled strata",
                value=rule,
                mend="Say 'exclude', or 'STRATUM=INTO' to assume that one stratum is like another.",
            )
        for name in (source, target):
            if name not in names:
                raise InputError(f"there is no stratum '{name}'", value=name, mend=nearest(name, names).strip())
        if not empty[names.index(source)]:
            raise DesignError(f"The stratum '{source}' has labelled units; only a stratum without any can be filled.")
        if empty[names.index(target)]:
            raise DesignError(f"The stratum '{target}' has no labelled unit itself, so it cannot stand for '{source}'.")
        filled[names.index(source)] = names.index(target)
    left = [names[h] for h in np.flatnonzero(empty) if h not in filled]
    if filled and left and not _excludes(unsampled):
        raise DesignError(
            f"Nothing is said about {len(left)} more strata without labelled units ({_list(left)}): "
            "add 'exclude' or a rule for each."
        )
    return filled


def _refuse_unsampled(strata: pd.DataFrame, empty: NDArray[np.bool_]) -> None:
    names, area = strata.loc[empty, "stratum"].tolist(), float(strata.loc[empty, "area_ha"].sum())
    raise DesignError(
        f"{len(names)} of {len(strata)} strata have no labelled unit ({_list(names)}): {area:,.0f} ha, "
        f"{area / strata['area_ha'].sum():.1%} of the area. Nothing is known about them. Say --unsampled exclude "
        "to leave them out of the target area, or --unsampled STRATUM=INTO to assume that one is like another."
    )


def _list(names: Sequence[str], most: int = 8) -> str:
    shown = ", ".join(names[:most])
    return shown if len(names) <= most else f"{shown} and {len(names) - most} more"


def _account_notices(account: pd.DataFrame) -> list[Notice]:
    notices = []
    total = float(account["area_ha"].sum())
    for role in ("excluded", "assumed"):
        part = account[account["role"] == role]
        if len(part):
            area = float(part["area_ha"].sum())
            facts = {"strata": len(part), "names": part["stratum"].tolist(), "area_ha": area, "share": area / total}
            if role == "assumed":
                facts["from"] = part["filled_from"].tolist()
            notices.append(Notice(f"unsampled-strata-{role}", facts))
    missing = account["selected"] - account["labelled"]
    if missing.sum():
        facts = {
            "units": int(missing.sum()),
            "selected": int(account["selected"].sum()),
            "strata": int((missing > 0).sum()),
        }
        notices.append(Notice("unlabelled-units", facts))
    return notices


@dataclass(frozen=True, eq=False)
class Weighing:
    """How units are weighed beyond their design: the estimator, post-strata, and strata pooled for the variance.

    `classes` gives, by column name of the crossing table, the class of each unit: what post-strata are made of.
    """

    estimator: str = "combined"
    post_stratify: str | None = None
    collapse: tuple[str, ...] = ()
    legend: Legend | None = None
    classes: Mapping[str, NDArray[np.intp]] | None = None


def survey_of(
    sample: Sample,
    population: Population,
    labels: NDArray[np.intp],
    use: NDArray[np.bool_],
    weighing: Weighing,
    *,
    compress: bool = True,
) -> Survey:
    """Compress the units in `use`, with their `labels`, shape (n, L), and state the design."""
    estimator, calibration = weighing.estimator, weighing.classes
    extra = np.stack(list(calibration.values()), axis=1) if calibration else np.zeros((sample.n, 0), np.intp)
    cells = Cells.from_units(
        sample.stratum,
        np.concatenate([labels, extra], axis=1),
        population.size_ha,
        psu=sample.cluster,
        use=use,
        order=sample.order,
        sample_id=sample.sample_id,
        compress=compress,
    )
    clusters = sample.clusters
    if clusters is not None:
        cells = _with_empty_clusters(cells, clusters)
    design = Design(
        N=population.N,
        A=population.A,
        M=population.M,
        cluster_stratum=None if clusters is None else clusters["stratum"].to_numpy(np.intp),
        cluster_units=None if clusters is None else clusters["units"].to_numpy(float),
        cluster_labelled=None if clusters is None else _labelled_by_cluster(sample, use),
        fpc=population.fpc,
        collapse=_collapse(sample, weighing.collapse),
    )
    if estimator not in ESTIMATORS:
        raise InputError(
            f"there is no estimator '{estimator}'", value=estimator, mend=f"Use one of: {', '.join(ESTIMATORS)}."
        )
    if weighing.post_stratify is not None:
        names = list(calibration or {})
        codes = {n: cells.labels[:, labels.shape[1] + i] for i, n in enumerate(names)}
        assert weighing.legend is not None
        adjust = _post_strata(sample, population, cells, codes, weighing.post_stratify, weighing.legend)
        if estimator != "combined":
            raise DesignError(f"Post-stratification and the {estimator} estimator cannot be combined: choose one.")
        design = replace(design, adjust=adjust)
    elif estimator == "separate":
        design = replace(design, adjust=_separate(population, cells))
    return Survey.of(design, cells)


def _labelled_by_cluster(sample: Sample, use: NDArray[np.bool_]) -> NDArray[np.float64]:
    assert sample.clusters is not None
    assert sample.cluster is not None
    return np.bincount(sample.cluster[use], minlength=len(sample.clusters)).astype(float)


def _with_empty_clusters(cells: Cells, clusters: pd.DataFrame) -> Cells:
    """Add an empty cell for each selected cluster without a labelled unit: it stays a cluster."""
    assert cells.psu is not None
    gone = np.setdiff1d(np.arange(len(clusters)), cells.psu)
    if not len(gone):
        return cells
    strata = clusters["stratum"].to_numpy(np.intp)[gone]
    return replace(
        cells,
        stratum=np.concatenate([cells.stratum, strata]),
        labels=np.concatenate([cells.labels, np.full((len(gone), cells.labels.shape[1]), -1)]),
        size_ha=np.concatenate([cells.size_ha, np.zeros(len(gone))]),
        count=np.concatenate([cells.count, np.zeros(len(gone))]),
        psu=np.concatenate([cells.psu, gone]),
    )


def _collapse(sample: Sample, rules: Sequence[str]) -> NDArray[np.intp] | None:
    if not rules:
        return None
    names = sample.strata["stratum"].tolist()
    target = np.arange(len(names))
    for rule in rules:
        source, _, into = (part.strip() for part in rule.partition("="))
        for name in (source, into):
            if name not in names:
                raise InputError(
                    f"there is no stratum '{name}'",
                    value=rule,
                    mend=f"Write --collapse STRATUM=INTO with names of the strata table.{nearest(name, names)}",
                )
        left, right = target[names.index(source)], target[names.index(into)]
        target[target == left] = right
    return target


def _separate(population: Population, cells: Cells) -> Calibration:
    strata = np.flatnonzero(population.kept)
    marks = cells.stratum[:, None] == strata[None, :]
    size = np.where(cells.size_ha > 0, cells.size_ha, 1.0)
    return Calibration(marks * cells.size_ha[:, None], population.A[strata], 1 / size, "area of each stratum")


def _post_strata(
    sample: Sample,
    population: Population,
    cells: Cells,
    codes: Mapping[str, NDArray[np.intp]],
    how: str,
    legend: Legend,
) -> Calibration:
    """Calibration to the totals of the crossing table: by cells, or by the margins of its columns and the strata."""
    if how not in POST_STRATIFY:
        raise InputError(
            f"'{how}' is no way to post-stratify", value=how, mend=f"Use one of: {', '.join(POST_STRATIFY)}."
        )
    cross = sample.crossing
    if cross is None:
        raise InputError("post-stratification needs known totals", mend="Name the crossing table with --crossing.")
    if not population.kept.all():
        raise DesignError("Post-stratification needs labelled units in every stratum.")
    by_area = sample.area_ha is not None or "units" not in cross.frame.columns or not population_has_units(sample)
    totals = cross.numbers("area_ha" if by_area else "units")
    keys = {name: label_codes(cross, name, legend) for name in codes}
    if "stratum" in cross.frame.columns:
        keys = {"stratum": _strata_codes(sample), **keys}
        codes = {"stratum": cells.stratum, **codes}
    _check_totals(sample, population, keys, totals, by_area=by_area)
    groups = [list(codes)] if how == "cells" else [["stratum"], *([n] for n in codes if n != "stratum")]
    columns, wanted = [], []
    for names in groups:
        if names == ["stratum"]:
            strata = population.A if by_area else population.N
            marks, sums = _marks(np.arange(len(strata)), cells.stratum, strata)
        else:
            at = _combine([keys[n] for n in names], [codes[n] for n in names])
            marks, sums = _marks(*at, totals)
            _check_post_strata(marks, at, cells, sample)
        columns.append(marks)
        wanted.append(sums)
    auxiliary = np.concatenate(columns, axis=1).astype(float)
    if not by_area:
        return Calibration(auxiliary, np.concatenate(wanted), None, f"post-strata ({how}), units")
    size = np.where(cells.size_ha > 0, cells.size_ha, 1.0)
    return Calibration(auxiliary * size[:, None], np.concatenate(wanted), 1 / size, f"post-strata ({how}), area")


def _check_totals(
    sample: Sample,
    population: Population,
    keys: Mapping[str, NDArray[np.intp]],
    totals: NDArray[np.float64],
    *,
    by_area: bool,
) -> None:
    """Refuse a crossing table that repeats a row or does not add up to the strata."""
    cross = sample.crossing
    assert cross is not None
    rows = pd.DataFrame(keys)
    for at in np.flatnonzero(rows.duplicated())[:1]:
        raise InputError(
            "the row stands twice", file=cross.file, row=cross.row(at), mend="Give each combination of classes one row."
        )
    known, noun = (population.A, "ha") if by_area else (population.N, "units")
    strata = keys.get("stratum", np.zeros(len(totals), np.intp))
    held = np.bincount(strata, totals, minlength=len(known)) if "stratum" in keys else np.array([totals.sum()])
    wanted = known if "stratum" in keys else np.array([known.sum()])
    for at in np.flatnonzero(np.abs(held - wanted) > 1e-6 * wanted)[:1]:
        where = f"of stratum '{sample.strata['stratum'].iloc[at]}' " if "stratum" in keys else ""
        raise InputError(
            f"its rows {where}add up to {held[at]:,.12g} {noun}, the strata table says {wanted[at]:,.12g}",
            file=cross.file,
            column="area_ha" if by_area else "units",
            mend="Post-stratification needs totals of the same population: correct one of the tables.",
        )


def population_has_units(sample: Sample) -> bool:
    """Whether the number of population units is known in every stratum."""
    return bool(sample.strata["units"].notna().all())


def _strata_codes(sample: Sample) -> NDArray[np.intp]:
    cross = sample.crossing
    assert cross is not None
    names = sample.strata["stratum"].tolist()
    codes, words = cross.words("stratum")
    for word in words:
        if word not in names:
            raise InputError(
                f"the stratum '{word}' of the crossing table is not in {sample.strata_file}",
                file=cross.file,
                column="stratum",
                value=word,
                mend=nearest(word, names).strip(),
            )
    return np.array([names.index(w) for w in words], dtype=np.intp)[codes]


def _combine(
    population: Sequence[NDArray[np.intp]], cells: Sequence[NDArray[np.intp]]
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Number the combinations of several classifications, the same way in population rows and in cells."""
    rows = np.concatenate([np.stack(population, 1), np.stack(cells, 1)])
    code = np.unique(rows, axis=0, return_inverse=True)[1].ravel()
    return code[: len(population[0])], code[len(population[0]) :]


def _marks(
    population: NDArray[np.intp], cells: NDArray[np.intp], totals: NDArray[np.float64]
) -> tuple[NDArray[np.bool_], NDArray[np.float64]]:
    groups = np.unique(population)
    return cells[:, None] == groups[None, :], np.array([totals[population == g].sum() for g in groups])


def _check_post_strata(
    marks: NDArray[np.bool_], at: tuple[NDArray[np.intp], NDArray[np.intp]], cells: Cells, sample: Sample
) -> None:
    cross = sample.crossing
    assert cross is not None
    seen = marks.T @ cells.count
    for group in np.flatnonzero(seen == 0)[:1]:
        row = int(np.flatnonzero(at[0] == np.unique(at[0])[group])[0])
        what = ", ".join(str(cross.frame[c].iloc[row]) for c in cross.frame.columns if c not in ("units", "area_ha"))
        raise InputError(
            f"the post-stratum '{what}' has no labelled unit",
            file=cross.file,
            row=cross.row(row),
            value=what,
            mend="Merge it with a similar row of the crossing table, or use --post-stratify margins.",
        )
    lost = (~marks.any(axis=1)) & (cells.count > 0)
    if lost.any():
        raise InputError(
            f"{int(cells.count[lost].sum())} units lie in post-strata that the crossing table does not hold",
            file=cross.file,
            mend="Complete the crossing table: its rows must cover the whole population.",
        )
