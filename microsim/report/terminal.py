"""The verdict of a result on a terminal: sentences, the decision, the split; plain text through a pipe as well.

Uses the same sheets as the page and loads no plotting library.
"""

from __future__ import annotations

from pathlib import Path

from rich import box
from rich.console import Console
from rich.table import Table
from rich.text import Text

from microsim.report.frames import USES, VERDICT_MARKS, money, verdict_basis, verdict_use
from microsim.report.inputs import ResultLike
from microsim.report.sheets import Row, Sheet, choice_strip, decision_sheet, gap_sheet
from microsim.report.words import all_cautions

_DECISION_COLUMNS = 4


def print_verdict(result: ResultLike, console: Console, *, report: Path | None = None) -> None:
    """Print the verdict and the tables behind it; ``report`` is named on the last line if given."""
    _headline(result, console)
    for sentence in result.summary.get("sentences", ()):
        console.print(Text(str(sentence)))
    console.print()
    _choices(result, console)
    _sheet(decision_sheet(result), console, keep=_DECISION_COLUMNS)
    _split(result, console)
    for caution in all_cautions(result)[:2]:
        console.print(Text(caution, style="italic"))
    if report is not None:
        console.print(Text(f"Report: {report}"), soft_wrap=True)


def _headline(result: ResultLike, console: Console) -> None:
    summary = result.summary
    title = Text(str(summary.get("title", "")), style="bold")
    if summary.get("invented", False):
        title.append("  [invented data]", style="bold yellow")
    console.print(title)
    headline = str(summary.get("headline", ""))
    if headline:
        mark = VERDICT_MARKS.get(headline, "")
        console.print(Text.assemble((f"{mark} {headline}".upper(), "bold"), f"  ({verdict_basis(result)})"))


def _choices(result: ResultLike, console: Console) -> None:
    levels, strip = choice_strip(result)
    if not strip:
        return
    console.print(Text(f"Choice by threshold ({result.summary.get('currency', '')} per QALY)", style="bold"))
    grid = _grid()
    grid.add_column("Model")
    for level in levels:
        grid.add_column(money(level))
    for model, picks in strip:
        cells = ["–" if p is None else p.strategy + ("" if p.resolved else " (unresolved)") for p in picks]
        grid.add_row(Text(_short(model)), *map(Text, cells))
    console.print(grid)
    console.print()


def _split(result: ResultLike, console: Console) -> None:
    """The split of the gap the verdict is about, turned: terms down, thresholds across."""
    sheet, wanted = gap_sheet(result), USES.get(verdict_use(result), verdict_use(result))
    groups: dict[str, list[Row]] = {}
    strategy = ""
    for row in sheet.rows:
        if len(row) == 1:
            strategy = row[0]
        elif row[1] == wanted:
            groups.setdefault(strategy, []).append(row)
    for name, rows in groups.items():
        console.print(Text(f"Incremental net benefit of {name}, split by cause ({wanted})", style="bold"))
        grid = _grid()
        grid.add_column("")
        for row in rows:
            grid.add_column(f"at {row[0]}", justify="right")
        for index, head in enumerate(sheet.columns[2:], start=2):
            grid.add_row(head, *(Text(row[index]) for row in rows))
        console.print(grid)
        console.print()


def _sheet(sheet: Sheet, console: Console, *, keep: int) -> None:
    """A sheet in as many leading columns as fit a narrow terminal."""
    if not sheet.rows:
        return
    console.print(Text(sheet.caption, style="bold"))
    grid = _grid()
    for index, head in enumerate(sheet.columns[:keep]):
        grid.add_column(head, justify="left" if index < sheet.left else "right")
    for row in sheet.rows:
        heading = len(row) == 1
        cells = [Text(_short(cell), style="bold" if heading else "") for cell in row[:keep]]
        grid.add_row(*cells)
    console.print(grid)
    console.print()


def _grid() -> Table:
    return Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1), show_edge=False, header_style="")


def _short(text: str) -> str:
    return text.replace("Memoryless cohort, ", "Cohort, ")
