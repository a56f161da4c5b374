"""Merging labels: which one is taken, who disagrees, what is missing, and what is refused."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from change_assess.errors import InputError
from change_assess.labels.reconcile import Reconciled, reconcile

FLANDERS = Path(__file__).parent / "data" / "flanders"
SAMPLE = pd.DataFrame({"unit": ["a", "b", "c", "d"], "stratum": ["s", "s", "t", "t"], "size": [1.5, 2, 3, 4]})


def labels(*rows: str) -> pd.DataFrame:
    """Rows written as ``"unit interpreter first last"``; ``-`` is an empty label."""
    cells = [["" if word == "-" else word for word in row.split()] for row in rows]
    return pd.DataFrame(cells, columns=["unit", "interpreter", "ref_1", "ref_2"])


def taken(merged: Reconciled) -> dict[str, list[str]]:
    return {row.unit: [row.ref_1, row.ref_2] for row in merged.sample.itertuples()}


@pytest.fixture(scope="module")
def flanders() -> Reconciled:
    return reconcile(
        FLANDERS / "units.csv",
        [FLANDERS / "labels_long.csv"],
        columns={"unit": "unit_id"},
        changed=("changed", "Ja", "Nee"),
    )


def test_real_labels_of_flanders_are_counted(flanders: Reconciled) -> None:
    """Of 3,815 units 3,802 are labelled at both dates; of 303 repeated units 230 have one class at each date."""
    assert flanders.counts == {
        "units": 3815,
        "labelled": 3802,
        "partly": 1,
        "unlabelled": 12,
        "with_repeats": 303,
        "agreeing": 230,
        "disagreeing": 73,
    }
    assert round(100 * flanders.counts["agreeing"] / flanders.counts["with_repeats"], 1) == 75.9
    assert flanders.disagreements["unit"].nunique() == 73


def test_labelled_units_of_flanders_fit_the_strata_table(flanders: Reconciled) -> None:
    """Fully labelled units per stratum are those that the strata table states."""
    strata = pd.read_csv(FLANDERS / "strata.csv").set_index("stratum")["n_labelled"]
    full = flanders.sample[flanders.sample["label_status"] == "labelled"]
    counted = full["stratum"].value_counts().reindex(strata.index, fill_value=0)
    assert counted.tolist() == strata.tolist()


def test_ticks_that_contradict_labels_are_reported(flanders: Reconciled) -> None:
    """The tick "changed" contradicts the labels in 19 + 15 rows of the Flemish data."""
    facts = {w.code: w.facts for w in flanders.warnings}["changed-tick-contradicts-labels"]
    assert (facts["ticked_but_same"], facts["not_ticked_but_different"]) == (19, 15)
    assert {w.code: w.facts for w in flanders.warnings}["units-without-labels"] == {"none": 12, "some_dates": 1}


def test_sample_keeps_its_rows_columns_and_types() -> None:
    """The sample comes back in its order with its own columns, and the tables given are not altered."""
    sample, given = SAMPLE.copy(), labels("b I1 forest crop")
    merged = reconcile(sample, [given])
    assert merged.sample.columns.tolist() == ["unit", "stratum", "size", "ref_1", "ref_2", "label_status"]
    pd.testing.assert_frame_equal(merged.sample[SAMPLE.columns], SAMPLE)
    pd.testing.assert_frame_equal(sample, SAMPLE)
    pd.testing.assert_frame_equal(given, labels("b I1 forest crop"))


def test_status_tells_full_from_partly_labelled() -> None:
    """A unit is labelled, partly labelled, or not labelled by the dates that have a label."""
    merged = reconcile(SAMPLE, labels("a I1 forest crop", "b I1 forest -", "c I1 - -"))
    assert merged.sample["label_status"].tolist() == ["labelled", "partly labelled", "not labelled", "not labelled"]
    assert taken(merged)["b"] == ["forest", ""]


def test_first_takes_the_lowest_interpreter_with_all_labels() -> None:
    """I2 comes before I10, and an interpreter who left a date empty gives way to one who did not."""
    rows = ("a I10 crop crop", "a I2 forest forest", "b I1 forest -", "b I3 crop crop")
    merged = reconcile(SAMPLE, [labels(*rows[:2]), labels(*rows[2:])])
    assert taken(merged)["a"] == ["forest", "forest"]
    assert taken(merged)["b"] == ["crop", "crop"]
    assert merged.counts["with_repeats"] == 1


def test_majority_takes_the_most_frequent_series_and_lists_ties() -> None:
    """Two of three outvote the first interpreter; one against one is a tie that goes to the first and is listed."""
    rows = ("a I1 forest crop", "a I2 forest forest", "a I3 forest forest", "b I1 crop crop", "b I2 water water")
    merged = reconcile(SAMPLE, labels(*rows), rule="majority")
    assert taken(merged)["a"] == ["forest", "forest"]
    assert taken(merged)["b"] == ["crop", "crop"]
    assert {w.code: w.facts for w in merged.warnings}["labels-tied"] == {"units": 1, "examples": ["b"]}
    assert merged.disagreements["taken"].tolist() == [False, True, True, True, False]
    assert merged.disagreements["tied"].tolist() == [False, False, False, True, True]


def test_disagreements_show_every_label_in_order() -> None:
    """Units come in the order of the sample, interpreters in natural order; units that agree are left out."""
    rows = (
        "c I10 crop crop",
        "c I9 forest crop",
        "a I2 crop crop",
        "a I1 water crop",
        "d I1 crop crop",
        "d I2 crop crop",
    )
    merged = reconcile(SAMPLE, labels(*rows))
    shown = merged.disagreements[["unit", "interpreter", "ref_1"]].to_numpy().tolist()
    assert shown == [["a", "I1", "water"], ["a", "I2", "crop"], ["c", "I9", "forest"], ["c", "I10", "crop"]]
    assert (merged.counts["agreeing"], merged.counts["disagreeing"]) == (1, 2)


def test_codes_that_blanks_turned_into_floats_stay_codes() -> None:
    """A column of codes with a blank, which pandas reads as floats, is merged as the codes 1 and 2."""
    given = pd.DataFrame({"unit": ["a", "b"], "interpreter": [1, 1], "ref_1": [1.0, None], "ref_2": [2.0, 2.0]})
    assert taken(reconcile(SAMPLE, given)) == {"a": ["1", "2"], "b": ["", "2"], "c": ["", ""], "d": ["", ""]}


def test_repeated_rows_are_merged_and_reported() -> None:
    """A row sent twice counts once, and a later row may fill in what an earlier one left empty."""
    rows = ("a I1 forest crop", "a I1 forest crop", "b I1 forest -", "b I1 forest crop")
    merged = reconcile(SAMPLE, labels(*rows))
    assert taken(merged)["b"] == ["forest", "crop"]
    assert {w.code: w.facts for w in merged.warnings}["label-rows-repeated"] == {"rows": 2}
    assert merged.counts["with_repeats"] == 0


def test_order_of_the_label_tables_does_not_matter() -> None:
    """The same tables in another order give the same sample."""
    first, second = labels("a I2 crop crop", "b I2 water crop"), labels("a I1 forest crop")
    one, other = reconcile(SAMPLE, [first, second]), reconcile(SAMPLE, [second, first])
    pd.testing.assert_frame_equal(one.sample, other.sample)
    pd.testing.assert_frame_equal(one.disagreements, other.disagreements)


def test_two_different_labels_of_one_interpreter_are_refused() -> None:
    """The message names the interpreter, the unit, both labels and both rows."""
    with pytest.raises(InputError, match="interpreter I1 labelled unit 'a' twice: 'crop' here, 'forest' in") as caught:
        reconcile(SAMPLE, labels("a I1 forest crop", "b I1 crop crop", "a I1 crop crop"))
    assert (caught.value.file, caught.value.row, caught.value.column) == ("labels table 1", 4, "ref_1")


def test_labels_of_unknown_units_are_refused() -> None:
    """The message names the file, the row, and the nearest unit of the sample."""
    sample = SAMPLE.assign(unit=["unit-1", "unit-2", "unit-3", "unit-4"])
    with pytest.raises(InputError, match=r"unit 'unit_2' is not in the sample.*Did you mean 'unit-2'") as caught:
        reconcile(sample, [labels("unit-1 I1 crop crop"), labels("unit_2 I1 crop crop")])
    assert (caught.value.file, caught.value.row, caught.value.column) == ("labels table 2", 2, "unit")


@pytest.mark.parametrize(
    ("sample", "given", "message"),
    [
        (SAMPLE, labels("a I1 x y").drop(columns="interpreter"), "no column 'interpreter'"),
        (SAMPLE.drop(columns="unit"), labels("a I1 x y"), "no column 'unit'"),
        (SAMPLE, labels("a I1 x y")[["unit", "interpreter"]], "no column name starts with 'ref'"),
        (SAMPLE, labels("a - x y"), "the interpreter is empty"),
        (pd.concat([SAMPLE, SAMPLE]), labels("a I1 x y"), "unit 'a' stands twice in the sample"),
        (SAMPLE.assign(ref_1="crop"), labels("a I1 x y"), "already holds labels"),
        (SAMPLE, [], "no label tables"),
        (SAMPLE, [labels("a I1 x y"), labels("b I1 x y").drop(columns="ref_2")], "its label columns are ref_1"),
    ],
)
def test_unusable_tables_are_refused(sample: pd.DataFrame, given: pd.DataFrame, message: str) -> None:
    """Missing columns, empty keys, repeated units, labels given before, and unlike tables are named."""
    with pytest.raises(InputError, match=message):
        reconcile(sample, given)


def test_unknown_rule_and_unknown_label_column_are_refused() -> None:
    """A rule that does not exist and a label column that is not there are named."""
    with pytest.raises(InputError, match="'last' is not a rule"):
        reconcile(SAMPLE, labels("a I1 x y"), rule="last")  # type: ignore[arg-type]
    with pytest.raises(InputError, match="no column 'ref_3'"):
        reconcile(SAMPLE, labels("a I1 x y"), reference=["ref_3"])


def test_an_empty_label_column_of_the_sample_is_filled() -> None:
    """A sample drawn with empty label columns gets its labels there, not in a second column of that name."""
    merged = reconcile(SAMPLE.assign(ref_1="", label_status="not visited yet"), labels("a I1 x y"))
    assert merged.sample.columns.tolist().count("ref_1") == 1
    assert merged.sample["label_status"].iloc[0] == "labelled"
