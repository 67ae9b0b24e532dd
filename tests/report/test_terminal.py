from __future__ import annotations

import io
from pathlib import Path

import pytest
from report.conftest import Result
from rich.console import Console

from microsim.report.terminal import print_verdict


def _printed(result: Result, *, width: int = 80, report: Path | None = None) -> str:
    stream = io.StringIO()
    print_verdict(result, Console(file=stream, width=width), report=report)
    return stream.getvalue()


def test_a_pipe_gets_plain_text_within_eighty_columns(result: Result) -> None:
    text = _printed(result)
    assert "\x1b" not in text
    assert max(len(line) for line in text.splitlines()) <= 80
    assert "…" not in text


def test_verdict_decision_and_split_are_all_said(result: Result) -> None:
    text = _printed(result)
    wanted = ("NOT ADEQUATE", "[invented data]", "Usual care (unresolved)", "47,830 (221)", "22,410", "+2,115 (34)")
    for expected in (*wanted, "+2,173 (39)", "Not validated for clinical use"):
        assert expected in text, expected


def test_a_zero_term_says_by_construction(result: Result) -> None:
    gap = result.tables["gap"]
    result.tables["gap"] = gap[gap["use"] == "own"]
    assert "by construction" in _printed(result)


def test_the_report_path_stands_last_and_unbroken(result: Result) -> None:
    path = Path("results") / ("long-name-" * 12) / "report.html"
    assert _printed(result, report=path).splitlines()[-1] == f"Report: {path}"


def test_brackets_in_a_title_are_not_taken_for_styles(result: Result) -> None:
    result.summary["title"] = "[red]Trial[/red] [A]"
    result.summary["sentences"] = ["[bold]said[/bold]"]
    text = _printed(result)
    assert "[red]Trial[/red] [A]" in text
    assert "[bold]said[/bold]" in text


@pytest.mark.parametrize("name", ["choice", "gap", "incremental"])
def test_a_missing_table_leaves_its_part_out(result: Result, name: str) -> None:
    del result.tables[name]
    assert "NOT ADEQUATE" in _printed(result)
