"""``microsim check`` and ``microsim schema``: what they print and return; the pathway they draw."""

from __future__ import annotations

import argparse
import json
from collections.abc import Callable
from pathlib import Path

import pytest
from study_builder import write_study

from microsim.cli import check, schema
from microsim.study.parts import Study
from microsim.study.pathway import pathway

Loader = Callable[..., Study]


def call(*words: str) -> int:
    parser = argparse.ArgumentParser()
    subparsers = parser.add_subparsers()
    check.add_parser(subparsers)
    schema.add_parser(subparsers)
    args = parser.parse_args(words)
    code = args.run(args)
    assert isinstance(code, int)
    return code


def test_a_sound_study_is_summed_up(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert call("check", str(write_study(tmp_path / "study"))) == 0
    out = capsys.readouterr().out
    for text in (
        "Invented", "[Home]", "readmission (sojourn)", "Hospital -> Dead", "table lifetable.csv by sex", "usual_care",
        "states.Home.cost.care: plus 10", "cohort.cycle = 1 month", "(comparator)", "exp(b_prior",
    ):  # fmt: skip
        assert text in out
    assert "\x1b" not in out
    assert str(tmp_path) not in out


def test_faults_are_listed_with_exit_code_2(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    folder = write_study(tmp_path / "study", study={"decision.comparator": "x", "states.Home.utility": "[a]"})
    assert call("check", str(folder)) == 2
    out = capsys.readouterr().out
    assert "2 faults" in out and "decision.comparator" in out and "-> " in out and "[a]" in out


def test_json_is_valid_in_both_cases(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert call("check", str(write_study(tmp_path / "a")), "--json") == 0
    sound = json.loads(capsys.readouterr().out)
    assert sound["ok"] and [s["name"] for s in sound["states"]] == ["Home", "Hospital", "Dead"]
    assert call("check", str(write_study(tmp_path / "b", horizon=-1, cohort={"cycle": 0.1})), "--json") == 2
    faulty = json.loads(capsys.readouterr().out)
    assert not faulty["ok"] and faulty["faults"][0]["key"] == "horizon"


def test_the_schema_is_printed_with_the_keys_of_the_file(capsys: pytest.CaptureFixture[str]) -> None:
    assert call("schema") == 0
    printed = json.loads(capsys.readouterr().out)
    assert {"title", "states", "clocks", "strategies"} <= set(printed["properties"])
    assert "from" in printed["$defs"]["ClockTable"]["properties"]
    assert printed["additionalProperties"] is False


def test_the_pathway_has_one_edge_per_source(load: Loader) -> None:
    graph = pathway(load())
    assert [(e.clock, e.source, e.target) for e in graph.edges][-2:] == [
        ("background", "Home", "Dead"), ("background", "Hospital", "Dead"),
    ]  # fmt: skip
    assert [(n.name, n.label, n.start, n.absorbing) for n in graph.nodes] == [
        ("Home", "At home", True, False), ("Hospital", "Hospital", False, False), ("Dead", "Dead", False, True),
    ]  # fmt: skip
    assert [e.background for e in graph.edges] == [False, False, False, True, True]


def test_the_drawing_has_a_plain_form(load: Loader) -> None:
    lines = check.drawing(pathway(load()), ascii_only=True)
    assert all(line.isascii() for line in lines)
    assert "  `-- background (age, background) --> [Dead]" in lines
