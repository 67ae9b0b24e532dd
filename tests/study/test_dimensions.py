"""Units: factors to study time and dimensions."""

from __future__ import annotations

import pytest

from microsim.study.dimensions import (
    MONEY,
    MONEY_PER_TIME,
    PER_TIME,
    PLAIN,
    TIME,
    Dim,
    UnknownUnit,
    factor_between,
    parse_unit,
)


@pytest.mark.parametrize(
    ("text", "factor", "dim"),
    [
        ("EUR", 1.0, MONEY), ("EUR/year", 1.0, MONEY_PER_TIME), ("EUR/day", 365.25, MONEY_PER_TIME),
        ("EUR / month", 12.0, MONEY_PER_TIME), ("/week", 365.25 / 7, PER_TIME), ("1/month", 12.0, PER_TIME),
        ("day", 1 / 365.25, TIME), ("EUR*day", 1 / 365.25, MONEY.times(TIME)), ("-", 1.0, PLAIN), ("", 1.0, PLAIN),
        ("probability", 1.0, PLAIN), ("QALY", 1.0, PLAIN), ("count/year", 1.0, PER_TIME), ("month/month", 1.0, PLAIN),
    ],
)  # fmt: skip
def test_units_are_converted_to_a_yearly_study(text: str, factor: float, dim: Dim) -> None:
    got = parse_unit(text, study_unit="year", money="EUR")
    assert got[0] == pytest.approx(factor, rel=1e-15)
    assert got[1] == dim


def test_the_lengths_of_time_units_are_those_of_the_format() -> None:
    assert factor_between("month", "day") == pytest.approx(30.4375, rel=1e-15)
    assert factor_between("week", "day") == pytest.approx(7.0, rel=1e-15)
    assert factor_between("year", "month") == pytest.approx(12.0, rel=1e-15)


@pytest.mark.parametrize("text", ["USD", "EUR/years", "Day", "EUR per day", "%"])
def test_unknown_units_are_refused(text: str) -> None:
    with pytest.raises(UnknownUnit):
        parse_unit(text, study_unit="year", money="EUR")


def test_a_dimension_reads_as_words() -> None:
    assert [str(d) for d in (PLAIN, MONEY, MONEY_PER_TIME, PER_TIME)] == [
        "a plain number",
        "money",
        "money / time",
        "1 / time",
    ]
