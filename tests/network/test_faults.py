"""Faults: their order, their one line each, and what is counted."""

from __future__ import annotations

import pytest

from network import Fault, Faults, InputError
from network.faults import LISTED_PER_KIND


def test_a_fault_says_where() -> None:
    assert str(Fault("legs.csv", 7, "sold", "is wrong; mend it")) == "legs.csv:7: sold: is wrong; mend it"
    assert str(Fault("legs.csv", 0, "", "is empty; fill it")) == "legs.csv: is empty; fill it"


def test_a_fault_is_one_line_whatever_it_quotes() -> None:
    text = str(Fault("legs.csv", 7, "a\nb", "'x\r\u2028\x1b[31m\ud800' is wrong; mend 'é'"))
    assert text.splitlines() == [text]
    assert text.isprintable()
    assert text.endswith("mend 'é'")


def test_faults_are_sorted_by_file_and_line() -> None:
    faults = Faults()
    faults.add("legs.csv", 12, "sold", "late")
    faults.add("legs.csv", 3, "sold", "odd", warning=True)
    faults.add("fares.csv", 30, "fare", "first")
    faults.add("legs.csv", 4, "sold", "early")
    assert [fault.problem for fault in faults.errors] == ["first", "early", "late"]
    assert [fault.problem for fault in faults.warnings] == ["odd"]
    with pytest.raises(InputError) as raised:
        faults.raise_errors()
    assert str(raised.value).count("\n") == 2


def test_nothing_is_raised_for_warnings() -> None:
    faults = Faults()
    faults.add("legs.csv", 3, "sold", "odd", warning=True)
    faults.raise_errors()
    assert not faults.concern("legs")


@pytest.mark.parametrize("found", [1, LISTED_PER_KIND, LISTED_PER_KIND + 1, 400])
def test_the_rest_of_a_kind_is_counted(found: int) -> None:
    faults = Faults()
    faults.add_rows("legs.csv", range(found), lambda row: row + 2, "sold", lambda row: f"problem {row}")
    assert sum(fault.count for fault in faults.errors) == found
    assert len(faults.errors) == min(found, LISTED_PER_KIND + 1)
    assert faults.concern("legs")
