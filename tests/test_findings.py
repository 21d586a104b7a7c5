import dataclasses

import numpy as np
import pytest

from prevmap.inputs.findings import COLUMNS, Finding, findings_frame, listed, row_label


def test_a_finding_becomes_a_row_of_the_table_in_the_order_given():
    first = Finding(7, "A", "examined", "error", "examined is negative: -3", "row not used")
    second = Finding(None, None, None, "note", "mixed", "used")
    table = findings_frame([first, second])
    assert list(table.columns) == ["row", "site", "field", "severity", "what", "action"]
    assert table.loc[0].tolist() == [7, "A", "examined", "error", "examined is negative: -3", "row not used"]
    assert table.loc[1, "row"] is None


def test_no_findings_are_a_table_with_columns():
    table = findings_frame([])
    assert list(table.columns) == list(COLUMNS)
    assert len(table) == 0


def test_a_finding_cannot_be_changed_or_have_another_severity():
    finding = Finding(7, "A", None, "note", "seen", "kept")
    with pytest.raises(dataclasses.FrozenInstanceError):
        finding.row = 8
    with pytest.raises(ValueError, match="severity is 'fatal'; one of error, warning, note"):
        Finding(7, "A", None, "fatal", "seen", "kept")


def test_a_finding_prints_where_it_is():
    assert str(Finding(7, "A", "lat", "error", "lat is 95", "")) == "row 7, site A, lat: lat is 95"
    assert str(Finding(None, None, None, "note", "mixed tests", "")) == "mixed tests"


@pytest.mark.parametrize(
    ("label", "expected"),
    [
        (np.int64(4), 4),
        ("S-4", "S-4"),
        ("4", "4"),
        (4.0, 4),
        (4.5, "4.5"),
        (("a", 1), "('a', 1)"),
        (True, "True"),
    ],
)
def test_index_labels_keep_whole_numbers_and_turn_the_rest_into_text(label, expected):
    found = row_label(label)
    assert found == expected
    assert type(found) is type(expected)


def test_long_lists_are_cut_and_counted():
    assert listed(range(9)) == "0, 1, 2, 3, 4 and 4 more"
    assert listed(range(5)) == "0, 1, 2, 3, 4"
    assert listed([]) == ""
