"""CSV text becomes checked columns, with rows counted as a spreadsheet shows them."""

from __future__ import annotations

import math

import pytest

from microsim.errors import FaultList
from microsim.study.tables import (
    RowFaults,
    categories,
    number,
    numbers,
    parse_csv,
    read_episodes,
    read_life_table,
)


def test_rows_are_counted_from_the_header_and_blank_lines_are_passed_over() -> None:
    table = parse_csv('a, b\n1,2\n\n 3 ,"x\n"\n5,6\n', file="f.csv", required=["a"], faults=FaultList())
    assert table is not None
    assert table.cells == {"a": ("1", "3", "5"), "b": ("2", "x", "6")}
    assert table.rows == (2, 5, 6)


@pytest.mark.parametrize("text", ["", "a\n", "a,a\n1,2\n", "b\n1\n", 'a\n"x\n'])
def test_a_table_without_sense_is_a_fault(text: str) -> None:
    faults = FaultList()
    assert parse_csv(text, file="f.csv", required=["a"], faults=faults) is None
    assert faults.faults


@pytest.mark.parametrize(
    ("text", "value"),
    [("1", 1.0), ("-2.5e3", -2500.0), (" 3 ", 3.0), ("nan", None), ("inf", None), ("1_0", None), ("", None)],
)
def test_numbers_are_finite_and_plain(text: str, value: float | None) -> None:
    assert number(text) == value


def test_a_column_with_any_word_is_categorical() -> None:
    assert categories(["1", "", "2.5"]) == ()
    assert categories(["b", "a", "b"]) == ("a", "b")


def test_a_faulty_cell_becomes_nan_with_its_row() -> None:
    faults = FaultList()
    table = parse_csv("a\n1\nx\n", file="f.csv", required=["a"], faults=faults)
    assert table is not None
    values = numbers(table, "a", out=RowFaults("f.csv", faults))
    assert values[0] == 1.0 and math.isnan(values[1])
    assert [f.where for f in faults.faults] == ["row 3"]


def test_a_yearly_probability_becomes_a_rate() -> None:
    table = parse_csv("age,value\n60,0.5\n61,0\n", file="f.csv", required=["age"], faults=FaultList())
    assert table is not None
    life = read_life_table(table, levels=(), by=None, probability=True, faults=FaultList())
    assert life is not None
    assert (life.ages, life.rates) == ((60.0, 61.0), ((pytest.approx(math.log(2)), 0.0),))


def test_episodes_that_touch_do_not_overlap_and_patients_are_kept_apart() -> None:
    text = "patient,from,to,entry,exit\n1,A,B,0,0.3\n2,A,,0.1,9\n1,B,A,0.3,0.6\n1,A,censored,0.6,0.6\n"
    faults = FaultList()
    table = parse_csv(text, file="f.csv", required=["patient"], faults=faults)
    assert table is not None
    episodes = read_episodes(table, states=("A", "B"), faults=faults)
    assert not faults.faults and episodes is not None
    assert episodes.target == ("B", "", "A", "")


def test_overlap_is_found_whatever_the_order_of_rows() -> None:
    text = "patient,from,to,entry,exit\n1,A,B,5,9\n1,A,B,0,20\n1,B,A,10,12\n"
    faults = FaultList()
    table = parse_csv(text, file="f.csv", required=["patient"], faults=faults)
    assert table is not None
    assert read_episodes(table, states=("A", "B"), faults=faults) is None
    assert [(f.where, f.problem) for f in faults.faults] == [
        ("row 2", "patient 1: the episode overlaps the one in row 3"),
        ("row 4", "patient 1: the episode overlaps the one in row 3"),
    ]
