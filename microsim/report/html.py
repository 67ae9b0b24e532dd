"""A result into one self-contained HTML page: sections, numbering, and the template around them.

No script, no outside address, nothing computed. The page appears by atomic rename, so a reader never meets half of it.
"""

from __future__ import annotations

import os
import secrets
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import count
from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from microsim.report import sheets
from microsim.report.figures import Drawing, all_figures
from microsim.report.frames import VERDICT_MARKS, currency_of, money, verdict_basis
from microsim.report.inputs import ResultLike
from microsim.report.sheets import Sheet
from microsim.report.style import inline_svg
from microsim.report.words import ASSUMPTIONS, LEADS, MEANINGS, TITLES, all_cautions, study_warnings


@dataclass(frozen=True, slots=True)
class Picture:
    number: int
    name: str
    caption: str
    svg: Markup
    points: int


@dataclass(frozen=True, slots=True)
class Numbered:
    number: int
    sheet: Sheet


@dataclass(frozen=True, slots=True)
class Section:
    """number and id for the contents; lead: opening sentence; items: bullet sentences."""

    number: int
    key: str
    title: str
    lead: str
    pictures: tuple[Picture, ...]
    tables: tuple[Numbered, ...]
    items: tuple[str, ...]


def render_report(result: ResultLike, drawings: Sequence[Drawing] | None = None) -> str:
    """The page as text, with figures drawn before or now. Raises ValueError if a table lacks a column its section needs."""
    environment = Environment(
        loader=PackageLoader("microsim.report"), autoescape=True, trim_blocks=True, lstrip_blocks=True,
        undefined=StrictUndefined,
    )  # fmt: skip
    headline = str(result.summary.get("headline", ""))
    levels, strip = sheets.choice_strip(result)
    return environment.get_template("report.html.j2").render(
        title=result.summary.get("title", "Untitled study"),
        invented=bool(result.summary.get("invented", False)),
        headline=headline,
        mark=VERDICT_MARKS.get(headline, ""),
        meaning=MEANINGS.get(headline, ""),
        sentences=[str(sentence) for sentence in result.summary.get("sentences", ())],
        levels=[f"{money(level)} per QALY" for level in levels],
        strip=strip,
        basis=verdict_basis(result),
        currency=currency_of(result),
        sections=_sections(result, all_figures(result) if drawings is None else drawings),
    )


def write_report(result: ResultLike, path: Path, *, drawings: Sequence[Drawing] | None = None) -> None:
    """Write the report to ``path`` (its folder is made if absent); an earlier file there is replaced whole."""
    page = render_report(result, drawings)
    path.parent.mkdir(parents=True, exist_ok=True)
    part = path.with_name(f".{path.name}.{secrets.token_hex(4)}.part")
    try:
        part.write_text(page, encoding="utf-8", newline="\n")
        os.replace(part, path)
    finally:
        part.unlink(missing_ok=True)


def _sections(result: ResultLike, drawings: Sequence[Drawing]) -> list[Section]:
    figure_numbers, table_numbers, section_numbers = count(1), count(1), count(1)
    sections = []
    for key, (tables, items) in _contents(result).items():
        shown = tuple(_picture(d, next(figure_numbers)) for d in drawings if d.section == key)
        kept = tuple(Numbered(next(table_numbers), sheet) for sheet in tables if sheet.rows)
        if shown or kept or items:
            number = next(section_numbers)
            sections.append(Section(number, key, TITLES[key], LEADS.get(key, ""), shown, kept, tuple(items)))
    return sections


def _picture(drawing: Drawing, number: int) -> Picture:
    width = round(72 * drawing.figure.get_figwidth())
    svg = Markup(inline_svg(drawing.svg, drawing.name, description=drawing.caption))
    return Picture(number, drawing.name, drawing.caption, svg, width)


def _contents(result: ResultLike) -> dict[str, tuple[list[Sheet], list[str]]]:
    """Section -> its tables and bullet sentences, in the order of the page."""
    manifest: dict[str, Any] = dict(result.manifest)
    return {
        "verdict": ([sheets.verdict_sheet(result)], []),
        "decision": ([sheets.decision_sheet(result), sheets.increment_sheet(result)], []),
        "gap": ([sheets.gap_sheet(result), sheets.outcome_gap_sheet(result), sheets.cycle_sheet(result)], []),
        "occupancy": ([], []),
        "pathway": ([], []),
        "fits": ([sheets.fit_sheet(result)], sheets.fit_warnings(result)),
        "rates": ([sheets.rate_sheet(result)], []),
        "outcomes": (sheets.outcome_sheets(result), []),
        "assumptions": (
            [sheets.settings_sheet(result), sheets.defaults_sheet(result)],
            [*ASSUMPTIONS, *study_warnings(result)],
        ),
        "manifest": ([sheets.manifest_sheet(result)] if manifest else [], []),
        "cautions": ([], all_cautions(result)),
    }
