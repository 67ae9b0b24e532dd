from __future__ import annotations

import math

import pytest
from report.conftest import Result

from microsim.report.frames import (
    decimals_for,
    fixed,
    flat,
    money,
    number,
    outcome_label,
    stated_rule,
    trimmed,
    verdict_use,
    with_error,
)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (1234.567, "1,235"),
        (-1234.567, "−1,235"),
        (12345678.9, "12,345,679"),
        (6.21449, "6.214"),
        (0.0123456, "0.01235"),
        (0.0, "0"),
        (float("nan"), "–"),
        (-math.inf, "−∞"),
        (3e-7, "3e−07"),
    ],
)
def test_a_number_keeps_four_digits_and_never_loses_a_whole_one(value: float, text: str) -> None:
    assert number(value) == text


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (6.214499, 0.0132, "6.214 (0.013)"),
        (6890.4, 345.2, "6,890 (345)"),
        (6890.4, 12.3, "6,890 (12)"),
        (-0.00002, 0.0131, "0.000 (0.013)"),
        (12.0, 0.0, "12.00"),
        (12.0, float("nan"), "12.00"),
        (float("nan"), 1.0, "–"),
    ],
)
def test_a_value_is_cut_where_its_error_begins(value: float, error: float, text: str) -> None:
    assert with_error(value, error) == text


def test_only_a_positive_difference_gets_a_plus() -> None:
    assert with_error(3.0, 1.0, signed=True) == "+3.0 (1.0)"
    assert with_error(-3.0, 1.0, signed=True) == "−3.0 (1.0)"
    assert with_error(0.0, 1.0, signed=True) == "0.0 (1.0)"


def test_a_rounded_zero_has_no_sign() -> None:
    assert fixed(-0.0004, 2) == "0.00"
    assert fixed(-0.4, 2) == "−0.40"


def test_money_is_whole_from_a_hundred_upwards() -> None:
    assert money(20_000) == "20,000"
    assert money(99.5) == "99.50"


def test_a_parameter_ends_without_idle_zeros() -> None:
    assert trimmed(0.52) == "0.52"
    assert trimmed(420.0) == "420"
    assert trimmed(12_000.0) == "12,000"


def test_decimals_never_exceed_six() -> None:
    assert decimals_for(1e-12) == 6
    assert decimals_for(0.0) == 0


def test_names_after_a_colon_are_shown_by_their_label(result: Result) -> None:
    assert outcome_label(result, "time:Home") == "At home"
    assert outcome_label(result, "events:readmission") == "Readmission"
    assert outcome_label(result, "cost_disc:bed_days") == "Bed days, discounted"


def test_the_stated_rule_and_use_come_from_the_study_and_own_rates_never_lead(result: Result) -> None:
    assert stated_rule(result) == "half-cycle"
    assert verdict_use(result) == "carried"
    result.summary["settings"]["correction"] = "simpson"
    assert stated_rule(result) == "simpson"


def test_nested_settings_become_dotted_keys() -> None:
    assert flat({"a": {"b": [1, 2.5], "c": True}, "d": None}) == [("a.b", "1, 2.5"), ("a.c", "yes"), ("d", "–")]
