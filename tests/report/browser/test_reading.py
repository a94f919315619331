"""The report as a person meets it: opened in a browser, read by pointer and keys, switched, narrow, printed.

A real browser is steered through its debugging pipe (see chromium.py): clicks and keys are those of a person, errors and
requests are what the browser itself says they are.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.report.browser.chromium import Chromium
from tests.report.report_samples import sample

BOOK = "svg[aria-label^='Cumulative PD of the book']"


@pytest.fixture
def page(browser: Chromium, report: Path) -> Iterator[Chromium]:
    browser.size(1280, 900)
    browser.media("")
    browser.open(report)
    yield browser
    # whatever a test did: no script error, nothing refused, nothing asked for
    assert browser.complaints() == []
    assert browser.requests() == [report.resolve().as_uri()]


def count(page: Chromium, selector: str) -> int:
    """Elements of the page that are there to see."""
    found = f"[...document.querySelectorAll({json.dumps('main ' + selector)})]"
    seen = "e => { for (; e; e = e.parentElement) if (getComputedStyle(e).display === 'none') return false; return true; }"
    return int(page.value(f"{found}.filter({seen}).length"))


def tip(page: Chromium) -> str:
    return str(page.value("document.querySelector('.tip').innerText"))


def place_of(name: str) -> int:
    return ["baseline", "deep_recession", "rates_up", "weighted"].index(name)


def test_the_first_screen_holds_the_answer_without_scrolling(page: Chromium) -> None:
    for selector in (
        "header .lead",
        "#summary table.head",
        "#summary .cautions",
        "#summary .safety",
        "#summary a[href='#cautions']",
    ):
        bottom = page.value(f"document.querySelector({selector!r}).getBoundingClientRect().bottom")
        assert 0 < bottom <= 900, selector
    carriers = page.value("document.querySelectorAll('#summary table')[1].getBoundingClientRect().bottom")
    assert carriers <= 900


def test_nothing_is_asked_for_and_nothing_fails(page: Chromium) -> None:
    assert page.value("document.querySelectorAll('svg[data-plot]').length") > 20
    assert page.value("document.getElementById('switch').hidden") is False


def test_the_browser_would_tell_of_a_request_and_of_an_error(
    browser: Chromium, report: Path, tmp_path: Path
) -> None:
    """That the two tests above can fail: a page that asks and throws is found out."""
    bad = tmp_path / "bad.html"
    text = report.read_text(encoding="utf-8")
    policy = re.search(r'<meta http-equiv="Content-Security-Policy"[^>]*>', text)
    assert policy
    bad.write_text(
        text.replace(policy[0], "").replace(
            "</body>", "<img src='http://outside.invalid/x.png'><script>throw new Error('x')</script></body>"
        ),
        encoding="utf-8",
    )
    browser.open(bad)
    assert any("outside.invalid" in url for url in browser.requests())
    assert any("Error: x" in words for words in browser.complaints())
    # with its policy in place the same page runs and fetches nothing
    bad.write_text(
        text.replace(
            "</body>", "<img src='http://outside.invalid/x.png'><script>window.ran = 1</script></body>"
        ),
        encoding="utf-8",
    )
    browser.open(bad)
    assert browser.value("window.ran") is None
    assert any("Content Security Policy" in words for words in browser.complaints())


def test_the_switch_hides_a_scenario_in_every_picture_and_brings_it_back(page: Chromium) -> None:
    chosen = f"[data-s='{place_of('deep_recession')}']"
    before, others = count(page, chosen), count(page, "[data-s='0']")
    assert before > 20
    page.click("#switch summary")
    page.click(f"#switch label:has(input[value='{place_of('deep_recession')}'])")
    assert count(page, chosen) == 0
    assert count(page, "[data-s='0']") == others
    assert (
        page.value("document.getElementById('switch-state').innerText") == "baseline, rates_up, weighted mean"
    )
    page.click("#switch button")
    assert count(page, chosen) == before
    assert page.value("document.getElementById('switch-state').innerText") == "everything"


def test_the_switch_never_leaves_a_picture_empty(page: Chromium) -> None:
    page.click("#switch summary")
    for k in range(3):
        page.click(f"#switch label:has(input[value='{k}'])")
    assert [count(page, f"[data-s='{k}']") > 0 for k in range(4)] == [False, False, False, True]
    page.click("#switch label:has(input[value='3'])")
    assert page.value("[...document.querySelectorAll('#switch input')].every(b => b.checked)") is True
    assert count(page, "[data-s='3']") > 0


def test_the_switch_by_keyboard_picks_a_segment(page: Chromium) -> None:
    segments = page.value("[...document.querySelectorAll('#switch option')].map(o => o.textContent)")
    assert len(segments) == 7
    everything = count(page, "[data-g]")
    assert everything == 18  # PD, survival and loss of six segments
    page.value("document.querySelector('#switch summary').focus()")
    page.key("Enter")
    assert page.value("document.getElementById('switch').open") is True
    page.value("document.querySelector('#switch select').focus()")
    page.value(
        "(s => { s.value = '1'; s.dispatchEvent(new Event('change', {bubbles: true})) })(document.querySelector('#switch select'))"
    )
    assert count(page, "[data-g]") == 3
    heads = page.value("[...document.querySelectorAll('main [data-g]:not(.off) b')].map(b => b.innerText)")
    assert heads == [segments[2]] * 3
    page.key("Escape")
    assert page.value("document.getElementById('switch').open") is False


def test_the_pointer_reads_the_values_of_the_table(page: Chromium) -> None:
    curves = sample(steps=60).segments
    curves = curves[(curves["by"] == "") & (curves["step"] == 60)].set_index("scenario")["default_cumulative"]
    page.point(BOOK, 0.985, 0.5)
    lines = tip(page).split("\n")
    assert lines[0] == "2030-12"
    shown = dict(re.fullmatch(r"(.*?)\s+([\d.]+%)", line).groups() for line in _joined(lines[1:]))  # type: ignore[union-attr]
    names = {
        "baseline": "baseline",
        "deep_recession": "deep_recession",
        "rates_up": "rates_up",
        "weighted": "weighted mean",
    }
    assert shown == {names[n]: f"{100 * v:.2f}%" for n, v in curves.items()}
    # the mark sits on the line: the pixel of the value is where the path ends
    ends = page.value(
        f"(s => [...s.querySelectorAll('.cursor circle')].map(c => +c.getAttribute('cy')))(document.querySelector({BOOK!r}))"
    )
    drawn = page.value(
        f"(s => [...s.querySelectorAll('g[data-s] path')].filter(p => p.getAttribute('d').length > 60)"
        f".map(p => +p.getAttribute('d').trim().split(' ').pop()))(document.querySelector({BOOK!r}))"
    )
    assert sorted(ends) == pytest.approx(sorted(drawn[: len(ends)]), abs=0.2)
    page.point("h2#method-h", 0.5, 0.5)
    assert tip(page) == ""


def _joined(lines: list[str]) -> list[str]:
    """Name and value may stand in lines of their own."""
    text = " ".join(line.strip() for line in lines)
    return [m.strip() for m in re.findall(r".*?[\d.]+%", text)]


def test_arrow_keys_read_the_same_and_hidden_scenarios_are_not_read(page: Chromium) -> None:
    page.value(f"document.querySelector({BOOK!r}).focus()")
    page.key("ArrowRight")
    first = tip(page)
    assert first.startswith("2025-12")
    page.key("ArrowRight")
    assert tip(page).startswith("2026-01")
    page.key("End")
    assert tip(page).startswith("2030-12")
    assert page.value("document.querySelector('.tip').getAttribute('role')") == "status"
    page.key("Escape")
    assert tip(page) == ""
    page.click("#switch summary")
    page.click("#switch label:has(input[value='1'])")
    page.value(f"document.querySelector({BOOK!r}).focus()")
    page.key("Home")
    assert "deep_recession" not in tip(page)
    assert "rates_up" in tip(page)


@pytest.mark.parametrize("width", [1280, 420])
def test_the_page_is_never_wider_than_the_screen(page: Chromium, width: int) -> None:
    page.size(width, 900)
    assert page.value("document.documentElement.scrollWidth") <= width
    page.click("#switch summary")
    left, _, wide, _ = page.box("#switch > div")
    assert left >= 0
    assert left + wide <= width


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_both_themes_are_drawn_with_their_own_paper(page: Chromium, theme: str) -> None:
    page.media("", prefers_color_scheme=theme)
    colour = page.value("getComputedStyle(document.body).backgroundColor")
    assert colour == {"light": "rgb(246, 244, 238)", "dark": "rgb(20, 25, 27)"}[theme]


def test_without_its_script_the_page_shows_everything_and_no_switch(browser: Chromium, report: Path) -> None:
    browser.size(1280, 900)
    browser.open(report)
    usual = count(browser, "svg")
    browser.send("Emulation.setScriptExecutionDisabled", value=True)
    try:
        browser.open(report)
        # the page's own script is off; questions from outside are still answered
        assert browser.value("document.querySelector('.tip')") is None
        assert browser.value("getComputedStyle(document.getElementById('switch')).display") == "none"
        assert count(browser, "svg[role=img]") > 20
        assert usual - count(browser, "svg") == 0
        browser.value("document.querySelector('main details summary').focus()")
        browser.key("Enter")
        assert browser.value("document.querySelector('main details').open") is True
    finally:
        browser.send("Emulation.setScriptExecutionDisabled", value=False)


def test_print_shows_all_scenarios_tables_and_no_switch(page: Chromium) -> None:
    page.click("#switch summary")
    page.click("#switch label:has(input[value='1'])")
    page.media("print")
    shown = page.value(
        "[...document.querySelectorAll('main [data-s=\"1\"]')].every(e => getComputedStyle(e).display !== 'none')"
    )
    assert shown is True
    assert page.value("getComputedStyle(document.querySelector('.bar')).display") == "none"
    page.media("")
    data = page.printed()
    assert data.startswith(b"%PDF")
    assert len(re.findall(rb"/Type\s*/Page\b", data)) > 5
    # opened for paper only
    assert page.value("document.querySelectorAll('main details[open]').length") == 0


def test_no_picture_is_cut_by_a_page_edge(page: Chromium) -> None:
    page.media("print")
    rules = page.value(
        "[...document.querySelectorAll('.panel')].map(p => getComputedStyle(p).breakInside).filter(v => v !== 'avoid').length"
    )
    assert rules == 0
    # what may not be cut has to fit: a panel lower than the printed page
    page.size(700, 900)
    tallest = page.value(
        "Math.max(...[...document.querySelectorAll('.panel')].map(p => p.getBoundingClientRect().height))"
    )
    assert tallest < 950


def test_a_page_that_a_browser_parses_has_no_repeated_id(page: Chromium) -> None:
    repeated: Any = page.value(
        "(ids => ids.filter((v, k) => ids.indexOf(v) !== k))([...document.querySelectorAll('[id]')].map(e => e.id))"
    )
    assert repeated == []
