"""Lines of keys are found by a scan of the text."""

from __future__ import annotations

from microsim.study.locate import scan_lines

TEXT = '''\
title = "x"
note = """
[not.a.header]
key = 1
"""
[states.Home]   # comment
utility = 1
cost.care = 2
hazard = { rate = 1 }
["states"."At home"]
"odd key" = 3
'''


def test_keys_headers_and_dotted_keys_are_found() -> None:
    lines = scan_lines(TEXT)
    assert lines.where("title") == "line 1"
    assert lines.where("states.Home") == "line 6"
    assert lines.where("states.Home.cost.care") == "line 8"
    assert lines.where("states.At home.odd key") == "line 11"


def test_an_unknown_key_falls_back_to_its_table() -> None:
    lines = scan_lines(TEXT)
    assert lines.where("states.Home.hazard.rate") == "line 9"
    assert lines.where("states.Home.start") == "line 6"
    assert lines.where("clocks.x") == ""


def test_text_inside_triple_quotes_is_passed_over() -> None:
    assert scan_lines(TEXT).where("not.a.header") == ""
