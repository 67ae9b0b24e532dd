from __future__ import annotations

import re
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from report.conftest import Result, make_result

from microsim.report.html import render_report, write_report


class Page(HTMLParser):
    """Tags, identifiers, links and visible text of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.identifiers: list[str] = []
        self.links: list[str] = []
        self.words: list[str] = []
        self.feed(text)
        self.text = re.sub(r"\s+", " ", " ".join(self.words))

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        for name, value in attrs:
            if name == "id":
                self.identifiers.append(value or "")
            if name in ("href", "src", "xlink:href"):
                self.links.append(value or "")
            assert not name.startswith("on"), f"{tag} carries {name}"

    def handle_data(self, data: str) -> None:
        self.words.append(data)


@pytest.fixture(scope="module")
def page() -> str:
    return render_report(make_result())


def test_the_page_needs_nothing_from_outside_and_runs_nothing(page: str) -> None:
    parsed = Page(page)
    assert "script" not in parsed.tags
    assert "link" not in parsed.tags
    assert "//" not in re.sub(r"<title>.*?</title>", "", page)
    assert all(link.startswith("#") for link in parsed.links)
    assert "@import" not in page


def test_every_identifier_is_used_once_and_every_reference_has_its_target(page: str) -> None:
    parsed = Page(page)
    assert len(parsed.identifiers) == len(set(parsed.identifiers))
    named = set(parsed.identifiers)
    assert {link[1:] for link in parsed.links} <= named
    assert set(re.findall(r"url\(#([^)]+)\)", page)) <= named


def test_a_title_with_markup_is_printed_not_obeyed(result: Result) -> None:
    result.summary["title"] = "<script>alert('x')</script> & more"
    result.summary["sentences"] = ["<img src=x onerror=alert(1)>"]
    result.summary["labels"]["strategies"]["nurse_led"] = "<b onclick='x'>nurse</b>"
    result.summary["labels"]["states"]["Home"] = 'a "quoted" <i>state</i>'
    text = render_report(result)
    parsed = Page(text)
    assert "script" not in parsed.tags
    assert "img" not in parsed.tags
    assert "i" not in parsed.tags
    assert "<script>alert('x')</script> & more" in parsed.text
    assert "<b onclick='x'>nurse</b>" in parsed.text


def test_the_verdict_stands_before_any_table(page: str) -> None:
    text = Page(page).text
    assert text.index("Not adequate") < text.index("It would keep usual care") < text.index("Table 1.")
    assert "Invented data" in text


def test_numbers_of_the_result_reach_the_page(page: str) -> None:
    text = Page(page).text
    for expected in ("47,830 (221)", "5.212 (0.014)", "11,530", "22,410", "+2,187 (39)", "182,000", "9b1f6c0a7e4d"):
        assert expected in text, expected


def test_a_zero_term_says_by_construction_and_never_zero_with_a_zero_error(page: str) -> None:
    text = Page(page).text
    assert "by construction" in text
    assert re.search(r"(?<![\d.,])[+−]?0(\.0+)? \(0(\.0+)?\)", text) is None


def test_an_unresolved_choice_is_called_so(page: str) -> None:
    assert "unresolved, ahead by 310 (170)" in Page(page).text


def test_cautions_and_defaults_are_on_every_page(page: str) -> None:
    text = Page(page).text
    assert "Not validated for clinical use" in text
    assert "local guidelines" in text
    assert "no causal estimate" in text
    assert "Rates beyond year 31" in text
    assert "discounting.method" in text


def test_a_study_on_real_data_carries_no_badge(result: Result) -> None:
    result.summary["invented"] = False
    assert "invented" not in Page(render_report(result)).text.lower()


def test_a_result_without_fits_rates_or_pathway_leaves_those_sections_out(result: Result) -> None:
    result.fits.clear()
    result.pathway = None
    del result.tables["rates"]
    result.tables["occupancy"] = result.tables["occupancy"].iloc[:0]
    text = Page(render_report(result)).text
    for title in ("Fitted sojourn times", "Projected rates", "Pathway", "State occupancy"):
        assert title not in text
    assert "Where the models part" in text


def test_a_missing_column_is_named(result: Result) -> None:
    result.tables["gap"] = result.tables["gap"].drop(columns=["memory"])
    with pytest.raises(ValueError, match=r"'gap' lacks column\(s\) memory"):
        render_report(result)


def test_the_same_result_gives_the_same_bytes(page: str) -> None:
    assert render_report(make_result()) == page


def test_the_file_appears_whole_or_not_at_all(result: Result, tmp_path: Path) -> None:
    path = tmp_path / "run" / "report.html"
    write_report(result, path)
    first = path.read_text(encoding="utf-8")
    result.tables["gap"] = result.tables["gap"].drop(columns=["memory"])
    with pytest.raises(ValueError, match="gap"):
        write_report(result, path)
    assert path.read_text(encoding="utf-8") == first
    assert [p.name for p in path.parent.iterdir()] == ["report.html"]


@pytest.mark.parametrize("headline", ["adequate", "unresolved"])
def test_every_verdict_has_its_meaning_in_words(result: Result, headline: str) -> None:
    result.summary["headline"] = headline
    text = Page(render_report(result)).text
    expected = {"adequate": "may be left out", "unresolved": "More patients can"}
    assert expected[headline] in text


def test_the_manifest_does_not_repeat_what_has_a_table_and_warnings_are_told(result: Result) -> None:
    result.manifest |= {"defaults": [["a.b", "once only"]], "fits": {"home_stay": {"loglik": -123.456}}}
    result.summary["warnings"] = ["The life table ends at 100."]
    text = Page(render_report(result)).text
    assert "once only" not in text
    assert "123.456" not in text
    assert "Remark on the study: The life table ends at 100." in text


def test_missing_increments_show_a_dash(result: Result) -> None:
    result.tables["incremental"]["icer"] = np.nan
    result.tables["incremental"]["status"] = "dominated"
    assert "dominated" in Page(render_report(result)).text
