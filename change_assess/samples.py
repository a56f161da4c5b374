"""A probability sample with the tables that describe its population, checked against each other."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from change_assess.errors import DesignError, InputError, Notice, nearest
from change_assess.legend import check_class_name
from change_assess.tables import Table, TextTable, in_strict_order, read_table

LABELLED, OUTSIDE = "labelled", "outside"
STATUS = {
    "labelled": LABELLED,
    "": LABELLED,
    "outside": OUTSIDE,
    "outside the target population": OUTSIDE,
    "not labelled": "",
    "partly labelled": "",
    "not visited yet": "",
    "cannot tell": "",
}


@dataclass(frozen=True, eq=False)
class Sample:
    """A probability sample and what is known of its population.

    Attributes
    ----------
    units : TextTable
        One row a sample unit.
    strata : DataFrame
        `stratum, units, area_ha[, clusters]`; `units` NaN where only areas are known.
    stratum : ndarray of int, shape (n,)
        Row of `strata` of each unit.
    area_ha : ndarray of float, shape (n,), or None
        Area of each unit where units differ in size.
    clusters : DataFrame or None
        `stratum, cluster, units[, sampled]` of the selected clusters, `stratum` as rows of `strata`.
    cluster : ndarray of int, shape (n,), or None
        Row of `clusters` of each unit.
    crossing : TextTable or None
        Exact areas of map classes, with `units` and `area_ha`.
    design : str
        simple, stratified, cluster or two-stage.
    sample_id : str
        Digest of the units, their strata, clusters and coordinates; estimates from one sample share it.
    order : ndarray of int, shape (n,), or None
        Rows in the order of unit ids, if they do not stand in it.
    rows : str
        For a sample made from a matrix of counts: what its rows are.
    """

    units: TextTable
    strata: pd.DataFrame
    strata_file: str
    stratum: NDArray[np.intp]
    area_ha: NDArray[np.float64] | None
    clusters: pd.DataFrame | None
    cluster: NDArray[np.intp] | None
    crossing: TextTable | None
    design: str
    sample_id: str
    order: NDArray[np.intp] | None = None
    notices: tuple[Notice, ...] = ()
    rows: str = ""

    @property
    def n(self) -> int:
        """Number of selected units."""
        return len(self.stratum)


DESIGNS = ("simple", "stratified", "cluster", "two-stage")


def read_sample(
    sample: Table,
    strata: Table | None = None,
    *,
    clusters: Table | None = None,
    crossing: Table | None = None,
    columns: Mapping[str, str] | None = None,
    design: str | None = None,
) -> Sample:
    """Read a sample with the tables that describe its population, and check that they fit together.

    Parameters
    ----------
    sample : path or DataFrame
        `unit`, `stratum` (not needed in a simple random sample), optional `cluster`, `area_ha`, `label_status`, and
        label columns of any name.
    strata : path or DataFrame
        `stratum, area_ha` and `units` (population size; without it there is no finite population correction), in
        cluster designs also `clusters`. For a simple random sample a `crossing` table can stand in.
    clusters : path or DataFrame, optional
        `stratum, cluster, units` of each selected cluster.
    crossing : path or DataFrame, optional
        ``[stratum,] <map columns>, units, area_ha``: exact areas of the map.
    columns : mapping of our column name to theirs, optional
    design : {"simple", "stratified", "cluster", "two-stage"}, optional
        Taken from the tables if not given.

    Raises
    ------
    InputError
        For anything in a table that cannot be used: what, where, and how to mend it.
    DesignError
        If the tables contradict the design.
    """
    units = read_table(sample, "sample", required=["unit"], columns=columns)
    _check_unit_ids(units)
    cross = None if crossing is None else read_table(crossing, "crossing table", required=["area_ha"], columns=columns)
    if cross is not None:
        _check_crossing(cross)
    read = [units] + ([cross] if cross else [])
    if strata is None:
        frame, strata_file = _one_stratum(cross), cross.file if cross else "strata"
        notices: tuple[Notice, ...] = ()
    else:
        table = read_table(strata, "strata table", required=["stratum", "area_ha"], columns=columns)
        frame, strata_file, notices = _strata_frame(table), table.file, table.notices
        read.append(table)
    stratum = _strata_of_units(units, frame, strata_file)
    area = units.numbers("area_ha") if "area_ha" in units.frame.columns else None
    of_clusters = None if clusters is None else _read_clusters_table(clusters, columns)
    read += [of_clusters] if of_clusters else []
    cluster_frame, cluster = _clusters_of_units(of_clusters, units, frame, stratum)
    kind = _design_kind(design, frame, cluster_frame, cluster)
    _check_population(frame, stratum, strata_file, cluster_frame)
    _check_column_rules(columns or {}, read)
    order = _order_of_units(units)
    return Sample(
        units=units,
        strata=frame,
        strata_file=strata_file,
        stratum=stratum,
        area_ha=area,
        clusters=cluster_frame,
        cluster=cluster,
        crossing=cross,
        design=kind,
        sample_id=_sample_id(units, order),
        order=order,
        notices=(*units.notices, *notices, *(cross.notices if cross else ())),
    )


PLACE_COLUMNS = ("unit", "stratum", "cluster", "x", "y", "longitude", "latitude")
"""Columns that tell one sample from another; labels may be added to a sample without making it another one."""


def _order_of_units(units: TextTable) -> NDArray[np.intp] | None:
    """Rows in the order of their unit ids; None if they stand in it already."""
    ids = units.frame["unit"]
    return None if in_strict_order(ids) else np.asarray(ids.argsort(kind="stable"), dtype=np.intp)


def _sample_id(units: TextTable, order: NDArray[np.intp] | None) -> str:
    """Digest of the units and where they lie, whatever the order of the rows."""
    digest = hashlib.sha256()
    for name in PLACE_COLUMNS:
        if name in units.frame.columns:
            column = units.frame[name] if order is None else units.frame[name].iloc[order]
            digest.update(name.encode() + b"\0" + _column_bytes(column))
    return digest.hexdigest()[:16]


def _column_bytes(column: pd.Series[Any]) -> bytes:
    """All texts of a column, one a line."""
    import pyarrow as pa
    from pyarrow import compute

    texts = pa.array(column)
    texts = (texts.combine_chunks() if isinstance(texts, pa.ChunkedArray) else texts).cast(pa.string())
    return bytes(compute.binary_join(pa.ListArray.from_arrays([0, len(texts)], texts), "\n")[0].as_buffer())


def _check_unit_ids(units: TextTable) -> None:
    units.refuse_blanks("unit", "a unit has no id", "Give it one.")
    units.refuse_repeats("unit", "Every unit needs an id of its own.")


def _check_column_rules(columns: Mapping[str, str], read: list[TextTable]) -> None:
    """Refuse a rule "ours=theirs" whose column stands in no table."""
    used = frozenset().union(*(t.renamed for t in read))
    for ours, theirs in columns.items():
        if ours not in used:
            every = [str(c) for t in read for c in t.frame.columns]
            raise InputError(
                f"no table has a column '{theirs}', which was to be taken as '{ours}'",
                column=theirs,
                mend=f"Correct the name.{nearest(theirs, every)}",
            )


def _check_crossing(cross: TextTable) -> None:
    cross.numbers("area_ha")
    if "units" in cross.frame.columns:
        cross.numbers("units", whole=True)


def _one_stratum(cross: TextTable | None) -> pd.DataFrame:
    if cross is None:
        raise InputError(
            "no strata table was given",
            mend="Name one with --strata (columns: stratum, units, area_ha); a simple random sample has one row.",
        )
    units = cross.numbers("units").sum() if "units" in cross.frame.columns else np.nan
    return pd.DataFrame({"stratum": ["all"], "units": [units], "area_ha": [cross.numbers("area_ha").sum()]})


def _strata_frame(table: TextTable) -> pd.DataFrame:
    table.refuse_repeats("stratum", "Give each stratum one row.")
    table.refuse_blanks("stratum", "a stratum has no name", "Name it.")
    frame = pd.DataFrame({"stratum": table.frame["stratum"].astype(str).str.strip()})
    known = "units" in table.frame.columns
    frame["units"] = table.numbers("units", whole=True) if known else np.nan
    frame["area_ha"] = table.numbers("area_ha")
    if "clusters" in table.frame.columns:
        frame["clusters"] = table.numbers("clusters", whole=True)
    return frame


def _strata_of_units(units: TextTable, strata: pd.DataFrame, strata_file: str) -> NDArray[np.intp]:
    if "stratum" not in units.frame.columns:
        if len(strata) == 1:
            return np.zeros(len(units.frame), dtype=np.intp)
        units.require("stratum")
    codes, words = units.words("stratum")
    known = {name: i for i, name in enumerate(strata["stratum"])}
    for word in words:
        if word not in known:
            what = f"the stratum '{word}' is not in {strata_file}" if word else "the unit has no stratum"
            units.refuse_word("stratum", word, what, f"Add it to the strata table.{nearest(word, known)}")
    return np.array([known[w] for w in words], dtype=np.intp)[codes]


def _read_clusters_table(source: Table, columns: Mapping[str, str] | None) -> TextTable:
    table = read_table(source, "clusters table", required=["stratum", "cluster", "units"], columns=columns)
    table.refuse_repeats("cluster", "Give each selected cluster one row, and an id that is unique over all strata.")
    return table


def _clusters_of_units(
    table: TextTable | None, units: TextTable, strata: pd.DataFrame, stratum: NDArray[np.intp]
) -> tuple[pd.DataFrame | None, NDArray[np.intp] | None]:
    if table is None:
        if "cluster" in units.frame.columns:
            raise InputError(
                "the sample has a column 'cluster' but there is no table of the selected clusters",
                file=units.file,
                column="cluster",
                mend="Name the table with --clusters; or rename the column, if units were not drawn in clusters.",
            )
        return None, None
    units.require("cluster")
    frame = pd.DataFrame({"cluster": table.frame["cluster"].astype(str).str.strip()})
    frame["stratum"] = _strata_of_units(table, strata, "the strata table")
    frame["units"] = table.numbers("units", whole=True)
    if "clusters" not in strata.columns:
        raise InputError(
            "the strata table does not say how many clusters each stratum holds",
            column="clusters",
            mend="Add a column 'clusters': the number of clusters in the population of each stratum.",
        )
    codes, words = units.words("cluster")
    known = {name: i for i, name in enumerate(frame["cluster"])}
    for word in words:
        if word not in known:
            units.refuse_word("cluster", word, f"the cluster '{word}' is not in {table.file}", nearest(word, known))
    cluster = np.array([known[w] for w in words], dtype=np.intp)[codes]
    _check_clusters(units, table, frame, stratum, cluster, strata)
    if "sampled" in table.frame.columns:
        frame["sampled"] = table.numbers("sampled", whole=True)
        seen = np.bincount(cluster, minlength=len(frame))
        differs = np.flatnonzero(frame["sampled"].to_numpy() != seen)
        for at in differs[:1]:
            raise InputError(
                f"{table.frame['sampled'].iloc[at]} units are said to be sampled, the sample table holds {seen[at]}",
                file=table.file,
                row=table.row(at),
                column="sampled",
                mend="Correct the count or add the units.",
            )
    return frame, cluster


def _check_clusters(
    units: TextTable,
    table: TextTable,
    frame: pd.DataFrame,
    stratum: NDArray[np.intp],
    cluster: NDArray[np.intp],
    strata: pd.DataFrame,
) -> None:
    crossing = np.flatnonzero(frame["stratum"].to_numpy()[cluster] != stratum)
    for at in crossing[:1]:
        name = frame["cluster"].iloc[cluster[at]]
        raise InputError(
            f"the cluster '{name}' lies in stratum '{strata['stratum'].iloc[frame['stratum'].iloc[cluster[at]]]}' by "
            f"the clusters table, this unit in '{strata['stratum'].iloc[stratum[at]]}'",
            file=units.file,
            row=units.row(at),
            column="cluster",
            value=name,
            mend="A cluster belongs to one stratum. Blocks that cross strata are a simple random sample of clusters: "
            "use one stratum, and the strata as post-strata.",
        )
    seen = np.bincount(cluster, minlength=len(frame))
    _check_cluster_sizes(table, frame, strata)
    for at in np.flatnonzero(seen > frame["units"].to_numpy())[:1]:
        raise InputError(
            f"the cluster holds {frame['units'].iloc[at]:g} units, the sample has {seen[at]} of it",
            file=table.file,
            row=table.row(at),
            column="units",
            mend="Correct the size of the cluster.",
        )


def _check_cluster_sizes(table: TextTable, frame: pd.DataFrame, strata: pd.DataFrame) -> None:
    """Clusters of a stratum cannot hold more units than the stratum."""
    held = np.bincount(frame["stratum"], frame["units"], minlength=len(strata))
    for at in np.flatnonzero(held > strata["units"].to_numpy(float))[:1]:
        row = int(np.flatnonzero(frame["stratum"].to_numpy() == at)[0])
        what = f"the clusters of stratum '{strata['stratum'].iloc[at]}' hold {held[at]:g} units, the stratum "
        table.refuse_word_at("units", row, what + f"{strata['units'].iloc[at]:g}", "Correct one of the tables.")


def _design_kind(
    design: str | None, strata: pd.DataFrame, clusters: pd.DataFrame | None, cluster: NDArray[np.intp] | None
) -> str:
    if design is not None and design not in DESIGNS:
        raise InputError(
            f"there is no design '{design}'",
            value=design,
            mend=f"Use one of: {', '.join(DESIGNS)}.{nearest(design, DESIGNS)}",
        )
    if clusters is None or cluster is None:
        if design in ("cluster", "two-stage"):
            raise InputError(f"a {design} design needs the table of selected clusters", mend="Name it with --clusters.")
        found = "simple" if len(strata) == 1 else "stratified"
    else:
        whole = np.bincount(cluster, minlength=len(clusters)) >= clusters["units"].to_numpy()
        found = "cluster" if whole.all() else "two-stage"
    if design is None or design == found or (design, found) in (("stratified", "simple"), ("two-stage", "cluster")):
        return design or found
    why = {
        "simple": f"the strata table has {len(strata)} strata" if clusters is None else "there are clusters",
        "stratified": "a clusters table was given",
        "cluster": "some clusters have fewer units in the sample than in the population",
    }
    raise DesignError(f"The design is said to be {design}, but {why.get(design, 'the tables say ' + found)}.")


def _check_population(
    strata: pd.DataFrame, stratum: NDArray[np.intp], file: str, clusters: pd.DataFrame | None
) -> None:
    checks = [("units", np.bincount(stratum, minlength=len(strata)), "units")]
    if clusters is not None:
        checks.append(("clusters", np.bincount(clusters["stratum"], minlength=len(strata)), "clusters"))
    for column, seen, noun in checks:
        for at in np.flatnonzero(seen > strata[column].to_numpy())[:1]:
            raise InputError(
                f"the stratum '{strata['stratum'].iloc[at]}' holds {strata[column].iloc[at]:g} {noun}, "
                f"but the sample has {seen[at]} of it",
                file=file,
                row=int(at) + 2,
                column=column,
                value=strata[column].iloc[at],
                mend="The population cannot be smaller than the sample: correct the strata table.",
            )


MOST_UNITS = 20_000_000
"""More units than any sample has: a matrix that counts more holds pixels."""


def read_matrix(matrix: Table, strata: Table, *, rows: str, columns: Mapping[str, str] | None = None) -> Sample:
    """Make a sample from a matrix of sample counts: rows are map classes, columns reference classes.

    Parameters
    ----------
    matrix : path or DataFrame
        First column: map class; one more column for each reference class, holding counts.
    strata : path or DataFrame
        `stratum, area_ha[, units]` with one row for each map class.
    rows : {"strata", "post-strata"}
        Whether the map classes were sampling strata, or a simple random (or systematic) sample was drawn and the
        map classes serve as post-strata. The counts alone cannot tell.

    Returns
    -------
    Sample
        With label columns ``map`` and ``reference``.
    """
    if rows not in ("strata", "post-strata"):
        raise InputError(
            "it is not said what the rows of the matrix are",
            value=rows,
            mend="Say 'strata' if units were drawn within map classes, 'post-strata' if they were drawn at random "
            "over the whole area (the standard errors differ).",
        )
    table = read_table(matrix, "matrix")
    names = list(table.frame.columns)
    if len(names) < 2:
        raise InputError(
            "the matrix has no column of counts", file=table.file, mend="Give one column a reference class."
        )
    for name in (*table.frame[names[0]], *names[1:]):
        if str(name).strip().casefold() in ("total", "totals", "sum"):
            raise InputError(
                f"'{name}' looks like a sum", file=table.file, value=name, mend="Leave sums out of the matrix."
            )
    classes = table.frame[names[0]].astype(str).str.strip()
    table.refuse_repeats(names[0], "Give each map class one row.")
    counts = np.stack([table.numbers(c, whole=True, positive=False) for c in names[1:]], axis=1)
    if (counts < 0).any():
        row, column = np.argwhere(counts < 0)[0]
        raise InputError(
            "a count is negative", file=table.file, row=table.row(row), column=names[1 + column], mend="Correct it."
        )
    if counts.sum() > MOST_UNITS:
        raise InputError(
            f"the matrix counts {counts.sum():,.0f} units", file=table.file, mend="Give sample counts, not pixels."
        )
    i, j = (np.repeat(a.ravel(), counts.astype(int).ravel()) for a in np.indices(counts.shape))
    map_label, reference = classes.to_numpy()[i], np.array(names[1:], dtype=object)[j]
    units = pd.DataFrame({"unit": np.arange(1, len(i) + 1).astype(str), "map": map_label, "reference": reference})
    for name in {*classes, *names[1:]}:
        check_class_name(name, file=table.file)
    if rows == "strata":
        sample = read_sample(units.assign(stratum=units["map"]), strata, columns=columns)
    else:
        table_of_strata = read_table(strata, "strata table", required=["stratum", "area_ha"], columns=columns)
        cross = table_of_strata.frame.rename(columns={"stratum": "map"})
        sample = read_sample(units, crossing=cross[[c for c in ("map", "units", "area_ha") if c in cross.columns]])
    counted = hashlib.sha256(counts.tobytes() + sample.sample_id.encode()).hexdigest()
    return replace(sample, rows=rows, sample_id=counted[:16])
