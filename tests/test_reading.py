"""Tables as people have them: what is wrong is named with its place and remedy, what is merely odd is read alike."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from commands import LEGEND, SAMPLE, STRATA

from change_assess.errors import ChangeAssessError, DesignError, FileError, InputError
from change_assess.results.estimate import estimate
from change_assess.results.result import Result
from change_assess.samples import read_matrix, read_sample
from change_assess.tables import read_legend, read_table

CLUSTERED = """unit,stratum,cluster,map,ref
u1,all,c1,a,a
u2,all,c1,a,b
u3,all,c2,b,b
u4,all,c2,b,b
"""
CLUSTER_STRATA = "stratum,units,clusters,area_ha\nall,80,40,80\n"
CLUSTERS = "stratum,cluster,units\nall,c1,2\nall,c2,2\n"


@pytest.fixture
def files(tmp_path):
    """Write text or bytes to a file of the test's folder and give its path."""

    def write(content: str | bytes, name: str = "sample.csv") -> Path:
        path = tmp_path / name
        path.write_bytes(content if isinstance(content, bytes) else content.encode("utf-8"))
        return path

    return write


def run(files, sample: str | bytes = SAMPLE, strata: str | bytes = STRATA, **options) -> Result:
    return estimate(files(sample), strata=files(strata, "strata.csv"), **({"map": "map", "reference": "ref"} | options))


def refused(match: str, call, *arguments, error: type = InputError, **where) -> ChangeAssessError:
    """Call must be refused with this message, at this place, and with a remedy."""
    with pytest.raises(error, match=match) as caught:
        call(*arguments)
    for name, value in where.items():
        assert getattr(caught.value, name) == value, name
    text = str(caught.value)
    assert "Traceback" not in text
    if isinstance(caught.value, InputError):
        assert caught.value.mend, "no remedy"
        assert caught.value.mend in text
    return caught.value


# -- what is refused in the sample table --------------------------------------------------------------------

BAD_SAMPLES = {
    "duplicate unit": (SAMPLE.replace("u3,", "u1,"), "'u1' stands twice .first in row 2.", 4, "unit", "u1"),
    "unknown stratum": (
        SAMPLE.replace("u5,stable,", "u5,stabel,"),
        "'stabel' is not in strata.csv",
        6,
        "stratum",
        "stabel",
    ),
    "blank stratum": (SAMPLE.replace("u5,stable,", "u5,,"), "the unit has no stratum", 6, "stratum", ""),
    "empty file": ("", "the file is empty", None, None, None),
    "only blank space": (" \n\n", "the file is empty", None, None, None),
    "header only": ("unit,stratum,map,ref\n", "has no rows", None, None, None),
    "semicolons": (SAMPLE.replace(",", ";"), "separated by semicolons, not by commas", 1, None, "unit;stratum;map;ref"),
    "tabs": (SAMPLE.replace(",", "\t"), "separated by tabs, not by commas", 1, None, "unit\tstratum\tmap\tref"),
    "bars": (SAMPLE.replace(",", "|"), "separated by bars, not by commas", 1, None, "unit|stratum|map|ref"),
    "short row": (
        SAMPLE.replace("u3,loss,loss,loss", "u3,loss,loss"),
        "this row has 3 fields, the header has 4",
        4,
        None,
        None,
    ),
    "long row": (
        SAMPLE.replace("u3,loss,loss,loss", "u3,loss,loss,loss,x"),
        "this row has 5 fields, the header has 4",
        4,
        None,
        None,
    ),
    "half a code": (
        SAMPLE.replace("stable,stable\n", "stable,2\n")
        .replace("loss,loss\n", "loss,1\n")
        .replace(",stable\n", ",2.5\n")
        .replace(",loss\n", ",1\n"),
        "'2.5' is not a class code",
        3,
        "ref",
        "2.5",
    ),
    "a code among names": (
        SAMPLE.replace("u7,stable,stable,stable", "u7,stable,stable,2"),
        "'2' is a code among names",
        8,
        "ref",
        "2",
    ),
    "repeated column": (
        SAMPLE.replace("unit,stratum,map,ref", "unit,stratum,ref,ref"),
        "two columns are called 'ref'",
        1,
        "ref",
        None,
    ),
    "column without a name": (
        SAMPLE.replace("unit,stratum,map,ref", "unit,stratum,,ref"),
        "a column has no name",
        1,
        None,
        None,
    ),
    "no unit column": (
        SAMPLE.replace("unit,", "Unit,"),
        "there is no column 'unit'.*Did you mean 'Unit'",
        None,
        "unit",
        None,
    ),
    "no stratum column": (SAMPLE.replace("stratum,", "strata,"), "there is no column 'stratum'", None, "stratum", None),
    "no label column": (
        SAMPLE.replace(",ref", ",reff"),
        "there is no column 'ref'.*Did you mean 'reff'",
        None,
        "ref",
        None,
    ),
    "arrow in a label": (
        SAMPLE.replace("u7,stable,stable,stable", "u7,stable,stable,stable>loss"),
        "holds '>'",
        8,
        "ref",
        "stable>loss",
    ),
    "Latin-1": (
        "unit,stratum,map,ref\nu1,loss,for\xeat,loss\n".encode("latin-1"),
        "not UTF-8 .byte 0xEA.",
        2,
        None,
        None,
    ),
    "binary": (b"\x89PNG\r\n\x1a\n\x00\x00\x00\x0dIHDR", "not a text table", None, None, None),
    "zip archive, as of a spreadsheet": (
        b"PK\x03\x04\x14\x00\x06\x00\x08\x00\x00\x00!\x00",
        "a workbook or an archive",
        None,
        None,
        None,
    ),
}


@pytest.mark.parametrize(("sample", "match", "row", "column", "value"), BAD_SAMPLES.values(), ids=BAD_SAMPLES)
def test_a_bad_sample_table_is_refused_with_its_place(files, sample, match, row, column, value):
    """Whatever cannot be used in the sample table is named with file, row, column, value and how to mend it."""
    found = refused(match, run, files, sample, file="sample.csv", row=row, column=column)
    if value is not None:
        assert found.value == value


def test_an_unknown_label_names_the_nearest_of_the_legend(files):
    """A misspelt label is answered with the entry of the legend that was probably meant."""
    bad = SAMPLE.replace("u5,stable,stable,loss", "u5,stable,stable,los")
    match = "the label 'los' is not in the legend.*Did you mean 'loss'"
    legend = files(LEGEND, "legend.csv")
    place = {"file": "sample.csv", "row": 6, "column": "ref", "value": "los"}
    refused(match, lambda: run(files, bad, legend=legend), **place)
    refused(match, lambda: run(files, bad, legend=["loss", "stable"]), **place)


def test_a_sample_without_any_reference_label_is_refused(files):
    """If nothing is labelled yet there is nothing to estimate."""
    blank = "\n".join(line.rsplit(",", 1)[0] + "," if i else line for i, line in enumerate(SAMPLE.splitlines())) + "\n"
    refused("no unit has its reference label", run, files, blank, file="sample.csv")


def test_an_unknown_label_status_names_the_nearest(files):
    """A misspelt label status is answered with the one that was meant."""
    lines = SAMPLE.splitlines()
    with_status = "\n".join([lines[0] + ",label_status", *(f"{line},labelled" for line in lines[1:])]) + "\n"
    bad = with_status.replace("u4,stable,stable,stable,labelled", "u4,stable,stable,stable,cant tell")
    refused(
        "the label status 'cant tell' is not known.*Did you mean 'cannot tell'",
        run,
        files,
        bad,
        row=5,
        column="label_status",
        value="cant tell",
    )


# -- what is refused in the strata table --------------------------------------------------------------------

BAD_STRATA = {
    "stratum missing": (
        "stratum,units,area_ha\nloss,100,9.5\n",
        "the stratum 'stable' is not in strata.csv",
        "sample.csv",
        5,
        "stratum",
        "stable",
    ),
    "fewer units than sampled": (
        STRATA.replace("900", "3"),
        "holds 3 units, but the sample has 4",
        "strata.csv",
        3,
        "units",
        3,
    ),
    "negative area": (
        STRATA.replace("85.25", "-85.25"),
        "'-85.25' must be greater than zero",
        "strata.csv",
        3,
        "area_ha",
        "-85.25",
    ),
    "zero area": (STRATA.replace("9.5", "0"), "'0' must be greater than zero", "strata.csv", 2, "area_ha", "0"),
    "negative units": (
        STRATA.replace("100", "-100"),
        "'-100' must be greater than zero",
        "strata.csv",
        2,
        "units",
        "-100",
    ),
    "fraction of a unit": (
        STRATA.replace("100", "100.5"),
        "'100.5' must be a whole number",
        "strata.csv",
        2,
        "units",
        "100.5",
    ),
    "no number": (STRATA.replace("100", "many"), "'many' is not a number", "strata.csv", 2, "units", "many"),
    "number missing": (STRATA.replace("100,", ","), "a number is missing", "strata.csv", 2, "units", ""),
    "infinite": (STRATA.replace("9.5", "inf"), "'inf' is not a number", "strata.csv", 2, "area_ha", "inf"),
    "quoted decimal comma": (
        STRATA.replace("9.5", '"1,5"'),
        "'1,5' is not a number.*point as the decimal mark",
        "strata.csv",
        2,
        "area_ha",
        "1,5",
    ),
    "decimal comma": (
        STRATA.replace("9.5", "9,5"),
        "this row has 4 fields, the header has 3.*decimal comma",
        "strata.csv",
        2,
        None,
        None,
    ),
    "stratum twice": (
        STRATA + "loss,10,1\n",
        "'loss' stands twice .first in row 2.",
        "strata.csv",
        4,
        "stratum",
        "loss",
    ),
    "no area column": (
        STRATA.replace("area_ha", "area"),
        "there is no column 'area_ha'.*Did you mean 'area'",
        "strata.csv",
        None,
        "area_ha",
        None,
    ),
    "semicolons and decimal commas": (
        "stratum;units;area_ha\nloss;100;9,5\nstable;900;85,25\n",
        "separated by semicolons",
        "strata.csv",
        1,
        None,
        None,
    ),
}


@pytest.mark.parametrize(("strata", "match", "file", "row", "column", "value"), BAD_STRATA.values(), ids=BAD_STRATA)
def test_a_bad_strata_table_is_refused_with_its_place(files, strata, match, file, row, column, value):
    """Whatever cannot be used in the strata table is named with file, row, column, value and how to mend it."""
    found = refused(match, run, files, SAMPLE, strata, file=file, row=row, column=column)
    if value is not None:
        assert found.value == value


def test_the_nearest_stratum_is_named(files):
    """A misspelt stratum is answered with the one of the strata table that was meant."""
    refused("Did you mean 'stable'", run, files, SAMPLE.replace("u5,stable,", "u5,stabel,"))


def test_unsampled_strata_are_refused_until_something_is_said(files):
    """A stratum without a labelled unit stops the estimate, with its name, its area and the two ways on."""
    strata = STRATA + "swamp,50,5\n"
    found = refused("1 of 3 strata have no labelled unit .swamp.: 5 ha", run, files, SAMPLE, strata, error=DesignError)
    assert "exclude" in str(found)
    assert "STRATUM=INTO" in str(found)


@pytest.mark.parametrize(
    ("rule", "error", "match"),
    [
        ("swamp", InputError, "does not say what to do"),
        ("swamp=lost", InputError, "there is no stratum 'lost'.*Did you mean 'loss'"),
        ("loss=stable", DesignError, "'loss' has labelled units"),
        ("swamp=swamp", DesignError, "has no labelled unit itself"),
    ],
)
def test_wrong_rules_for_unsampled_strata_are_refused(files, rule, error, match):
    """A rule for unsampled strata that cannot be followed says why."""
    strata = STRATA + "swamp,50,5\n"
    with pytest.raises(error, match=match):
        run(files, SAMPLE, strata, unsampled=rule)


def test_a_sample_without_a_strata_table_is_refused(files):
    """Areas cannot be guessed: without a strata table nothing is estimated."""
    refused("no strata table was given", lambda: read_sample(files(SAMPLE)))


# -- clusters -----------------------------------------------------------------------------------------------

BAD_CLUSTERS = {
    "unknown cluster": (
        CLUSTERED.replace("u4,all,c2", "u4,all,c3"),
        CLUSTERS,
        CLUSTER_STRATA,
        "the cluster 'c3' is not in clusters.csv",
        "sample.csv",
        5,
        "cluster",
    ),
    "cluster twice": (
        CLUSTERED,
        CLUSTERS + "all,c1,2\n",
        CLUSTER_STRATA,
        "'c1' stands twice",
        "clusters.csv",
        4,
        "cluster",
    ),
    "unknown stratum": (
        CLUSTERED,
        CLUSTERS.replace("all,c2", "al,c2"),
        CLUSTER_STRATA,
        "the stratum 'al' is not in",
        "clusters.csv",
        3,
        "stratum",
    ),
    "fewer units than sampled": (
        CLUSTERED,
        CLUSTERS.replace("c2,2", "c2,1"),
        CLUSTER_STRATA,
        "holds 1 units, the sample has 2",
        "clusters.csv",
        3,
        "units",
    ),
    "number of sampled units differs": (
        CLUSTERED,
        "stratum,cluster,units,sampled\nall,c1,2,2\nall,c2,4,3\n",
        CLUSTER_STRATA,
        "3 units are said to be sampled, the sample table holds 2",
        "clusters.csv",
        3,
        "sampled",
    ),
    "fewer clusters than sampled": (
        CLUSTERED,
        CLUSTERS,
        CLUSTER_STRATA.replace("40", "1"),
        "holds 1 clusters, but the sample has 2",
        "strata.csv",
        2,
        "clusters",
    ),
    "number of clusters unknown": (
        CLUSTERED,
        CLUSTERS,
        CLUSTER_STRATA.replace("clusters", "blocks"),
        "how many clusters each stratum holds",
        None,
        None,
        "clusters",
    ),
    "no cluster column": (
        CLUSTERED.replace("cluster", "block"),
        CLUSTERS,
        CLUSTER_STRATA,
        "there is no column 'cluster'",
        "sample.csv",
        None,
        "cluster",
    ),
    "cluster in two strata": (
        CLUSTERED.replace("u4,all", "u4,other"),
        CLUSTERS,
        CLUSTER_STRATA + "other,8,4,8\n",
        "the cluster 'c2' lies in stratum 'all' by the clusters table, this unit in 'other'",
        "sample.csv",
        5,
        "cluster",
    ),
}


@pytest.mark.parametrize(
    ("sample", "clusters", "strata", "match", "file", "row", "column"), BAD_CLUSTERS.values(), ids=BAD_CLUSTERS
)
def test_cluster_tables_that_disagree_are_refused(files, sample, clusters, strata, match, file, row, column):
    """Sample, clusters and strata tables must tell one story; the first place where they do not is named."""
    paths = files(sample), files(strata, "strata.csv")
    refused(
        match, lambda: read_sample(*paths, clusters=files(clusters, "clusters.csv")), file=file, row=row, column=column
    )


@pytest.mark.parametrize(
    ("design", "match"),
    [("simple", "there are clusters"), ("stratified", "a clusters table was given"), ("cluster", "fewer units")],
)
def test_a_stated_design_that_the_tables_contradict_is_refused(files, design, match):
    """The design that the person names must be the one the tables show."""
    clusters = files(CLUSTERS.replace("c2,2", "c2,9"), "clusters.csv")
    with pytest.raises(DesignError, match=match):
        read_sample(files(CLUSTERED), files(CLUSTER_STRATA, "strata.csv"), clusters=clusters, design=design)


def test_a_misspelt_design_names_the_nearest(files):
    """A misspelt design is answered with the one that was meant."""
    paths = files(SAMPLE), files(STRATA, "strata.csv")
    refused(
        "there is no design 'stratifed'.*Did you mean 'stratified'", lambda: read_sample(*paths, design="stratifed")
    )


def test_a_cluster_design_needs_its_table(files):
    """A cluster design without the table of clusters is refused."""
    paths = files(SAMPLE), files(STRATA, "strata.csv")
    refused("needs the table of selected clusters", lambda: read_sample(*paths, design="cluster"))


# -- files ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["missing.csv", "missing.gpkg", "missing.parquet"])
def test_a_missing_file_is_named(tmp_path, name):
    """A file that is not there is an error of the file, with its name."""
    with pytest.raises(FileError, match=rf"{name} does not exist"):
        read_table(tmp_path / name)


@pytest.mark.parametrize("name", ["folder", "folder.csv", "folder.gpkg", "folder.parquet"])
def test_a_folder_in_place_of_a_file_is_refused(tmp_path, name):
    """A folder is no table, whatever its name ends with."""
    (tmp_path / name).mkdir()
    with pytest.raises(ChangeAssessError, match=r"is a folder|cannot be read"):
        read_table(tmp_path / name)


@pytest.mark.parametrize("name", ["broken.gpkg", "broken.parquet"])
def test_a_broken_vector_file_is_refused_in_one_sentence(files, name):
    """Text in a file that is called GeoPackage or Parquet is refused without a traceback."""
    pytest.importorskip("pyogrio" if name.endswith("gpkg") else "pyarrow")
    refused("the file cannot be read", read_table, files("no such format", name), file=name)


# -- legend and matrix ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("legend", "match", "row"),
    [
        ("code,name\n1,loss\n1,stable\n", "'1' stands twice in the legend .first in row 2.", 3),
        ("code,name\n1,loss\n2,loss\n", "'loss' stands twice in the legend .first in row 2.", 3),
        ("code,name\n1.5,loss\n", "'1.5' must be a whole number", 2),
        ("code,name\none,loss\n", "'one' is not a number", 2),
        ("code,name\n1,loss>gain\n", "holds '>'", 2),
        ("code,name\n1,\n", "a class has no name", 2),
        ("code,label\n1,loss\n", "there is no column 'name'", None),
    ],
)
def test_a_bad_legend_is_refused_with_its_row(files, legend, match, row):
    """Codes and names of a legend are unique, codes whole, names without the arrow."""
    refused(match, read_legend, files(legend, "legend.csv"), file="legend.csv", row=row)


MATRIX = "map,a,b\na,8,2\nb,1,9\n"
MATRIX_STRATA = "stratum,units,area_ha\na,100,10\nb,300,30\n"


def test_a_matrix_must_say_what_its_rows_are(files):
    """The counts cannot tell strata from post-strata: `rows` has no default, and only two values."""
    paths = files(MATRIX, "matrix.csv"), files(MATRIX_STRATA, "strata.csv")
    with pytest.raises(TypeError, match="rows"):
        read_matrix(*paths)
    refused("not said what the rows of the matrix are", lambda: read_matrix(*paths, rows="classes"), value="classes")


@pytest.mark.parametrize(
    ("matrix", "match", "row", "column"),
    [
        (MATRIX.replace("2", "-2"), "a count is negative", 2, "b"),
        (MATRIX.replace("2", "2.5"), "'2.5' must be a whole number", 2, "b"),
        (MATRIX.replace("b,1,9", "a,1,9"), "'a' stands twice", 3, "map"),
        (MATRIX.replace("b,1,9", "c,1,9"), "the stratum 'c' is not in", None, "stratum"),
    ],
)
@pytest.mark.parametrize("rows", ["strata"])
def test_a_bad_matrix_is_refused(files, matrix, match, row, column, rows):
    """Counts are whole and not negative, every row is a class of its own with an area."""
    paths = files(matrix, "matrix.csv"), files(MATRIX_STRATA, "strata.csv")
    found = refused(match, lambda: read_matrix(*paths, rows=rows), column=column)
    if row is not None:
        assert (found.file, found.row) == ("matrix.csv", row)


# -- what is read alike -----------------------------------------------------------------------------------------


def quoted(text: str) -> str:
    return "\n".join(",".join(f'"{w}"' for w in line.split(",")) for line in text.splitlines()) + "\n"


def spaced(text: str) -> str:
    return "\n".join(" , ".join(line.split(",")) + " " for line in text.splitlines()) + "\n"


READ_ALIKE = {
    "byte order mark": (lambda t: b"\xef\xbb\xbf" + t.encode(), "byte-order-mark"),
    "UTF-16, little endian": (lambda t: b"\xff\xfe" + t.encode("utf-16-le"), "byte-order-mark"),
    "UTF-16, big endian": (lambda t: b"\xfe\xff" + t.encode("utf-16-be"), "byte-order-mark"),
    "carriage returns": (lambda t: t.replace("\n", "\r"), "carriage-return-lines"),
    "carriage returns, last line open": (lambda t: t.replace("\n", "\r").rstrip("\r"), "carriage-return-lines"),
    "CRLF": (lambda t: t.replace("\n", "\r\n"), None),
    "last line open": (lambda t: t.rstrip("\n"), None),
    "blank lines at the end": (lambda t: t + "\n\n\n", None),
    "lines of commas at the end": (lambda t: t + ",,,\n,,,\n", None),
    "quoted fields": (quoted, None),
    "spaces round labels": (spaced, None),
    "byte order mark, CRLF and quotes": (
        lambda t: b"\xef\xbb\xbf" + quoted(t).replace("\n", "\r\n").encode(),
        "byte-order-mark",
    ),
}


def same_numbers(found: Result, wanted: Result) -> None:
    pd.testing.assert_frame_equal(found.table, wanted.table, check_exact=True)


@pytest.mark.parametrize(("change", "code"), READ_ALIKE.values(), ids=READ_ALIKE)
def test_odd_files_give_identical_numbers(files, change, code):
    """Encoding marks, line ends, quotes and spaces change nothing, and what had to be read past is noted."""
    wanted = run(files)
    found = run(files, change(SAMPLE))
    same_numbers(found, wanted)
    notes = [w.code for w in found.sample.notices]
    assert notes == ([code] if code else [])
    assert set(notes) <= {w.code for w in found.warnings}


@pytest.mark.parametrize(
    "name",
    ["byte order mark", "UTF-16, little endian", "carriage returns", "CRLF", "quoted fields", "spaces round labels"],
)
def test_odd_strata_tables_give_identical_numbers(files, name):
    """The same holds for the strata table."""
    change, code = READ_ALIKE[name]
    found = run(files, strata=change(STRATA))
    same_numbers(found, run(files))
    assert code is None or code in [w.code for w in found.warnings]


CODED = "unit,stratum,map,ref\nu1,1,1,1\nu2,1,1,2\nu3,1,1,1\nu4,2,2,2\nu5,2,2,\nu6,2,2,2\nu7,2,2,1\n"
CODED_STRATA = "stratum,units,area_ha\n1,100,9.5\n2,900,85.25\n"


def test_codes_written_as_whole_floats_are_codes(files):
    """A blank turns whole numbers into 3.0 in many programs: with and without the point they are one code."""
    lines = CODED.splitlines()
    floats = [
        ",".join([*w[:2], *(f"{x}.0" if x else "" for x in w[2:])]) for w in (line.split(",") for line in lines[1:])
    ]
    legend = files(LEGEND, "legend.csv")
    for options in ({}, {"legend": legend}):
        wanted = run(files, CODED, CODED_STRATA, **options)
        found = run(files, "\n".join([lines[0], *floats]) + "\n", CODED_STRATA, **options)
        same_numbers(found, wanted)


def test_codes_and_names_are_one_label_with_a_legend(files):
    """With a legend a label may be the code or the name of its class."""
    coded = SAMPLE.replace("u5,stable,stable,loss", "u5,stable,2,1").replace("u1,loss,loss,loss", "u1,loss,1.0,loss")
    legend = files(LEGEND, "legend.csv")
    same_numbers(run(files, coded, legend=legend), run(files, legend=legend))


@pytest.mark.parametrize("suffix", [".gpkg", ".parquet"])
@pytest.mark.parametrize("content", [SAMPLE, CODED], ids=["names", "codes with a blank"])
def test_vector_files_give_identical_numbers(files, tmp_path, suffix, content):
    """The same sample as GeoPackage or GeoParquet, codes as numbers with blanks, gives the same estimates."""
    geopandas = pytest.importorskip("geopandas")
    strata = CODED_STRATA if content is CODED else STRATA
    frame = pd.read_csv(files(content))
    points = geopandas.points_from_xy(np.arange(len(frame)), np.zeros(len(frame)))
    layer = geopandas.GeoDataFrame(frame, geometry=points, crs="EPSG:4326")
    path = tmp_path / f"sample{suffix}"
    if suffix == ".gpkg":
        layer.to_file(path, driver="GPKG")
    else:
        layer.to_parquet(path)
    found = estimate(path, strata=files(strata, "strata.csv"), map="map", reference="ref")
    same_numbers(found, run(files, content, strata))


def test_data_frames_are_read_like_files_and_left_alone(files):
    """DataFrames give the numbers of the files they come from, and are not altered."""
    for content, strata in ((SAMPLE, STRATA), (CODED, CODED_STRATA)):
        frames = pd.read_csv(files(content)), pd.read_csv(files(strata, "strata.csv"))
        before = [f.copy() for f in frames]
        found = estimate(frames[0], strata=frames[1], map="map", reference="ref")
        same_numbers(found, run(files, content, strata))
        for frame, kept in zip(frames, before, strict=True):
            pd.testing.assert_frame_equal(frame, kept)


def test_other_column_names_can_be_stated(files):
    """Their names for our columns are read as ours, and a clash is refused."""
    other = SAMPLE.replace("unit,stratum", "plot_id,zone")
    columns = {"unit": "plot_id", "stratum": "zone"}
    found = estimate(
        read_sample(files(other), files(STRATA, "strata.csv"), columns=columns), map="map", reference="ref"
    )
    same_numbers(found, run(files))
    clash = files(SAMPLE.replace("map,ref", "zone,ref"))
    refused(
        "there is a column 'stratum' already",
        lambda: read_sample(clash, files(STRATA, "strata.csv"), columns={"stratum": "zone"}),
    )


def test_the_row_named_is_the_row_of_the_file(files):
    """Row numbers count the header as row 1, so that a person finds the place in a spreadsheet."""
    lines = SAMPLE.splitlines()
    for row in range(2, len(lines) + 1):
        broken = lines.copy()
        broken[row - 1] = broken[row - 1].rsplit(",", 1)[0] + ",9.5"
        found = refused("'9.5' is", run, files, "\n".join(broken) + "\n")
        assert found.row == row


# -- cases that are easily overlooked ---------------------------------------------------------------------------


def test_ids_that_differ_by_spaces_only_are_repeats(files):
    """'u1' and 'u1 ' are one unit, 'loss' and 'loss ' one stratum."""
    refused("'u1' stands twice", run, files, SAMPLE.replace("u3,", "u1 ,"), row=4, column="unit")
    refused("'loss' stands twice", run, files, SAMPLE, STRATA + "loss ,10,1\n", row=4, column="stratum")


def test_a_unit_without_an_id_is_refused(files):
    """Every unit has an id; a blank one is named with its row."""
    refused("no id|is missing|without an id", run, files, SAMPLE.replace("u3,", ","), row=4, column="unit")


@pytest.mark.parametrize("rows", [5, 30_000])
def test_a_quote_that_is_never_closed_is_refused(files, rows):
    """An open quote swallows the rest of the file, however long; it is refused, not a traceback."""
    body = "".join(f"u{i},{'loss' if i % 2 else 'stable'},loss,stable\n" for i in range(rows))
    text = "unit,stratum,map,ref\n" + body.replace("u3,loss,", 'u3,"loss,')
    refused("fields|cannot be read", run, files, text, STRATA.replace("00,", "00000,"), file="sample.csv")


def test_mixed_line_ends_give_identical_numbers(files):
    """Some lines ending in CR and others in LF are lines all the same."""
    same_numbers(run(files, SAMPLE.replace("\n", "\r", 2)), run(files))


def test_a_damaged_utf16_file_is_refused(files):
    """A UTF-16 file that ends within a character is damaged: no class with a replacement character appears."""
    refused("UTF-16", run, files, b"\xff\xfe" + SAMPLE.rstrip("\n").encode("utf-16-le")[:-1], file="sample.csv")


def test_labels_with_underscores_are_names(files):
    """'1_2' is a name, not the code 12: two such classes never become one."""
    text = SAMPLE.replace("stable,stable,", "stable,1_2,").replace("loss,loss,", "loss,1_3,")
    text = text.replace(",stable\n", ",1_2\n").replace(",loss\n", ",1_3\n")
    found = run(files, text)
    assert list(found.select().classes) == ["1_2", "1_3"]
    assert found["1_3"].area_ha.value == run(files)["loss"].area_ha.value


@pytest.mark.parametrize(
    ("change", "match"),
    [
        (lambda s, t: (pd.concat([s, s[["ref"]]], axis=1), t), "two columns are called 'ref'"),
        (lambda s, t: (s, t.assign(area_ha=[np.inf, 2.0])), "is not a number"),
        (lambda s, t: (s.assign(ref=[np.inf, *[1.0] * 6], map=1.0), t), "not a class code"),
        (lambda s, t: (s.iloc[:0], t), "has no rows"),
        (lambda s, t: (s.set_index("unit"), t), "no column 'unit'"),
    ],
    ids=["repeated column", "infinite area", "infinite label", "no rows", "unit as index"],
)
def test_bad_data_frames_are_refused_like_files(files, change, match):
    """What is wrong in a DataFrame is said as plainly as for a file."""
    frames = change(pd.read_csv(files(SAMPLE)), pd.read_csv(files(STRATA, "strata.csv")))
    with pytest.raises(InputError, match=match):
        estimate(frames[0], strata=frames[1], map="map", reference="ref")


@pytest.mark.parametrize(
    "change",
    [
        lambda f: f.astype(object),
        lambda f: f.convert_dtypes(),
        lambda f: f.astype({c: "category" for c in f.columns if f[c].dtype == object}),
        lambda f: pd.DataFrame({c: pd.Series(list(f[c].to_numpy()), dtype=object) for c in f.columns}),
        lambda f: f.set_index(np.arange(len(f)) * 7 + 3),
    ],
    ids=["objects", "nullable types", "categories", "objects of numpy scalars", "index of its own"],
)
def test_kinds_of_data_frame_columns_give_identical_numbers(files, change):
    """However pandas holds the columns, the numbers are those of the files."""
    frames = change(pd.read_csv(files(SAMPLE))), change(pd.read_csv(files(STRATA, "strata.csv")))
    same_numbers(estimate(frames[0], strata=frames[1], map="map", reference="ref"), run(files))


def test_a_label_that_looks_missing_is_noted(files):
    """'NA' is taken as the name of a class, and the result says that it looks like a missing value."""
    found = run(files, SAMPLE.replace("u5,stable,stable,loss", "u5,stable,stable,NA"))
    notice = next(w for w in found.warnings if w.code == "label-looks-missing")
    assert notice.facts == {"labels": ["NA"]}


def test_different_numbers_of_dates_are_refused(files):
    """Map and reference have a column for every date."""
    refused("map 'map' has 2 columns, the reference 1", lambda: run(files, map=["map", "ref"]))
    refused("2 dates were given for 1 reference columns", lambda: run(files, dates=[2010, 2020]))


CROSSING = "map,units,area_ha\nloss,100,9.5\nstable,900,85.25\n"


@pytest.mark.parametrize(
    ("crossing", "match", "place"),
    [
        (CROSSING.replace("stable", "stabel"), "the post-stratum 'stabel' has no labelled unit", {"row": 3}),
        (CROSSING.replace("85.25", "0"), "'0' must be greater than zero", {"row": 3, "column": "area_ha"}),
        (CROSSING + "water,10,1\n", "the post-stratum 'water' has no labelled unit", {"row": 4}),
        (CROSSING.splitlines()[0] + "\nloss,100,9.5\n", "4 units lie in post-strata that the crossing table", {}),
        ("map,units\nloss,100\n", "there is no column 'area_ha'", {"column": "area_ha"}),
    ],
)
def test_a_crossing_table_that_does_not_fit_is_refused(files, crossing, match, place):
    """Post-strata must cover the population, hold labelled units and have areas."""
    no_stratum = "\n".join(",".join(np.delete(line.split(","), 1)) for line in SAMPLE.splitlines()) + "\n"

    def post_stratified():
        sample = read_sample(files(no_stratum), crossing=files(crossing, "crossing.csv"))
        return estimate(sample, map="map", reference="ref", post_stratify="cells")

    refused(match, post_stratified, file="crossing.csv", **place)


def test_a_column_rule_for_a_column_that_is_nowhere_is_refused(files):
    """A misspelt name in "ours=theirs" is refused with the nearest column, not passed over."""
    folder = files(SAMPLE), files(STRATA, "strata.csv")
    with pytest.raises(InputError, match=r"no table has a column 'unti'.*Did you mean 'unit'"):
        read_sample(*folder, columns={"unit": "unti"})
