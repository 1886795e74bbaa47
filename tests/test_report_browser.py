"""The report in a browser: its console, its table, its keyboard, its width on a telephone and on paper, its contrast.

One browser for all of them; skipped, with the reason, where there is none.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from lattice_census.output.report_groups import groups_html
from lattice_census.output.report_page import page

from .browser import Browser
from .report_pages import HOSTILE, SECTIONS, many_groups

A4_WIDTH = 182 / 25.4 * 96
"""Pixels between the margins of the printed page, 210 mm less 14 on either side (a CSS pixel is 1/96 inch)."""


@pytest.fixture(scope="module")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Browser]:
    with Browser(tmp_path_factory.mktemp("profile")) as opened:
        yield opened


@pytest.fixture(scope="module")
def page_file(report_page: str, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("page") / "report.html"
    path.write_text(report_page, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def large_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A page with the table of 10,000 groups; the hostile label is the seventh."""
    groups = many_groups(10_000)
    groups.rows[7] = (HOSTILE, *groups.rows[7][1:])
    path = tmp_path_factory.mktemp("large") / "report.html"
    path.write_text(page("t", "s", [("groups", "Groups", groups_html(groups))]), encoding="utf-8")
    return path


@pytest.fixture
def opened(browser: Browser, page_file: Path) -> Browser:
    """The report, freshly opened on a wide screen."""
    browser.media("")
    browser.window(1280, 900)
    browser.open(page_file)
    return browser


@pytest.fixture
def large(browser: Browser, large_file: Path) -> Browser:
    browser.media("")
    browser.window(1280, 900)
    browser.open(large_file)
    return browser


def said(browser: Browser) -> Any:
    return browser.evaluate("document.getElementById('groups-said').textContent")


def column(browser: Browser, place: int) -> Any:
    """The texts of a column of the table of groups, as it stands."""
    return browser.evaluate(
        f"[...document.querySelectorAll('#groups-table tbody tr')].map((r) => r.cells[{place}].textContent)"
    )


def focused(browser: Browser) -> dict[str, Any]:
    """What has the focus: tag, id, text, and the width of its outline."""
    found: dict[str, Any] = browser.evaluate(
        "(() => { const e = document.activeElement, s = getComputedStyle(e);"
        "return { tag: e.tagName, id: e.id, text: e.textContent.trim(), href: e.getAttribute('href'),"
        "outline: s.outlineStyle === 'none' ? 0 : parseFloat(s.outlineWidth) }; })()"
    )
    return found


def test_the_page_opens_without_complaint_or_request(opened: Browser):
    assert opened.complaints() == [] and opened.requests() == []
    assert opened.evaluate("[...document.querySelectorAll('section')].map((s) => s.id)") == list(SECTIONS)
    assert opened.evaluate("[...document.querySelectorAll('svg')].every((s) => s.getBoundingClientRect().width > 150)")


def test_a_hostile_label_is_text(opened: Browser):
    assert opened.evaluate("document.images.length") == 0
    assert HOSTILE in opened.evaluate("document.body.innerText")
    assert not [e for e in opened.events if e.get("method") == "Page.javascriptDialogOpening"]
    assert opened.evaluate("[...document.querySelectorAll('b, u, i, s')].length") == 0


def test_ten_thousand_groups_open_at_once(large: Browser, large_file: Path):
    assert large_file.stat().st_size < 10_000_000
    assert said(large) == "10,000 of 10,000 groups; page 1 of 200"
    assert large.evaluate("document.querySelectorAll('#groups-table tbody tr').length") == 50
    ready = large.evaluate("performance.getEntriesByType('navigation')[0].domContentLoadedEventEnd")
    assert ready < 3000, ready  # milliseconds; about 150 on a quiet machine


def test_the_table_is_sorted_filtered_and_turned(large: Browser):
    assert column(large, 0)[:2] == ["some-source.csv:material-000000", "some-source.csv:material-000001"]
    large.evaluate("document.getElementById('groups-after').click()")
    assert said(large) == "10,000 of 10,000 groups; page 2 of 200"
    assert column(large, 0)[0] == "some-source.csv:material-000050"
    large.evaluate("document.getElementById('groups-before').click()")
    large.evaluate("document.getElementById('groups-before').click()")  # there is no page before the first
    assert said(large) == "10,000 of 10,000 groups; page 1 of 200"

    shift = 6
    large.evaluate(f"document.querySelectorAll('#groups-table th button')[{shift}].click()")
    values = [float(v) for v in column(large, shift)]
    assert values == sorted(values, reverse=True) and values[0] > values[-1] > 0.049  # the largest of all come first
    heads = "[...document.querySelectorAll('#groups-table th')].map((h) => h.getAttribute('aria-sort'))"
    assert large.evaluate(heads)[shift] == "descending" and large.evaluate(heads).count("none") == 11

    large.evaluate("document.getElementById('groups-filter').focus()")
    large.write("onerror")
    assert said(large) == "1 of 10,000 groups; page 1 of 1"
    assert column(large, 0) == [HOSTILE] and large.evaluate("document.images.length") == 0
    large.write(" nowhere")
    assert said(large) == "0 of 10,000 groups; page 1 of 1" and column(large, 0) == []
    assert large.complaints() == []


def test_the_keyboard_reaches_everything_in_order_and_is_seen(opened: Browser):
    opened.press("Tab")
    first = focused(opened)
    assert (first["tag"], first["href"]) == ("A", "#summary") and first["text"] == "To the content"
    assert opened.evaluate("document.activeElement.getBoundingClientRect().left >= 0"), "the skip link is not seen"
    met = []
    for _ in range(200):
        opened.press("Tab")
        now = focused(opened)
        if now["tag"] == "BODY":
            break
        assert now["outline"] >= 2, now
        met.append(now)
    assert [m["href"] for m in met[: len(SECTIONS)]] == [f"#{name}" for name in SECTIONS]
    ids = [m["id"] for m in met if m["id"]]
    assert ids == ["groups-filter", "groups-least", "groups-before", "groups-after"]
    buttons = [m["text"] for m in met if m["tag"] == "BUTTON" and not m["id"]]
    assert buttons[0] == "kept record" and len(buttons) == 12
    places = [m["tag"] for m in met]
    assert places.index("BUTTON") > len(SECTIONS)


def test_the_table_works_by_keys_alone(large: Browser):
    large.evaluate("document.getElementById('groups-after').focus()")
    large.press("Enter")
    large.press(" ")
    assert said(large) == "10,000 of 10,000 groups; page 3 of 200"
    assert focused(large)["id"] == "groups-after"
    large.press("Tab")
    if focused(large)["tag"] == "DIV":  # the table itself, where it has to be scrolled sideways
        large.press("Tab")
    large.press("Enter")
    state = "document.querySelector('#groups-table th').getAttribute('aria-sort')"
    assert focused(large)["text"] == "kept record" and large.evaluate(state) == "ascending"
    large.press("Enter")
    assert focused(large)["text"] == "kept record" and large.evaluate(state) == "descending"
    assert column(large, 0)[0] == "some-source.csv:material-009999"
    while focused(large)["id"] != "groups-after":
        large.press("Tab", shift=True)
        assert focused(large)["tag"] in ("DIV", "BUTTON")


OVERFLOW = """(() => {
  const wide = document.documentElement.clientWidth, out = [];
  for (const e of document.querySelectorAll('body *')) {
    if (e.closest('.wide table') || e.closest('svg') || e.classList.contains('skip')) continue;
    const box = e.getBoundingClientRect();
    if (box.width && (box.right > wide + 0.5 || box.left < -0.5)) out.push(e.tagName + ' ' + e.className);
  }
  return { page: document.documentElement.scrollWidth - wide, out };
})()"""


def test_a_telephone_needs_no_sideways_scrolling(browser: Browser, page_file: Path):
    browser.media("")
    browser.window(400, 800)
    browser.open(page_file)
    assert browser.evaluate(OVERFLOW) == {"page": 0, "out": []}
    scrolling = "[...document.querySelectorAll('.wide')].filter((t) => t.scrollWidth > t.clientWidth)"
    assert browser.evaluate(f"{scrolling}.length") >= 1
    assert browser.evaluate(f"{scrolling}.every((t) => t.tabIndex === 0)")
    smallest = browser.evaluate(
        "Math.min(...[...document.querySelectorAll('svg')].filter((s) => s.viewBox.baseVal.width).flatMap((s) => "
        "[...s.querySelectorAll('text')].map((t) => parseFloat(getComputedStyle(t).fontSize) * "
        "s.getBoundingClientRect().width / s.viewBox.baseVal.width)))"
    )
    assert smallest >= 8, smallest  # pixels
    browser.window(1280, 900)
    assert browser.evaluate("[...document.querySelectorAll('.wide')].filter((t) => t.tabIndex === 0).length") < 3


def test_words_in_pictures_stay_inside_them(opened: Browser):
    cut = opened.evaluate(
        "[...document.querySelectorAll('svg')].flatMap((s) => { const frame = s.getBoundingClientRect();"
        "return [...s.querySelectorAll('text')].filter((t) => { const box = t.getBoundingClientRect();"
        "return box.left < frame.left - 1 || box.right > frame.right + 1 || box.top < frame.top - 1 || "
        "box.bottom > frame.bottom + 1; }).map((t) => t.textContent); })"
    )
    assert cut == []


def test_a_sheet_of_paper_is_wide_enough(browser: Browser, page_file: Path, tmp_path: Path):
    browser.window(round(A4_WIDTH), 1000)
    browser.media("print")
    browser.open(page_file)
    found = browser.evaluate(
        "[...document.querySelectorAll('body *')].filter((e) => !e.closest('svg') && "
        "e.getBoundingClientRect().right > document.documentElement.clientWidth + 0.5).map((e) => e.tagName)"
    )
    assert found == [] and browser.evaluate("document.documentElement.scrollWidth") <= A4_WIDTH + 1
    hidden = browser.evaluate("['nav', '.controls'].map((n) => getComputedStyle(document.querySelector(n)).display)")
    assert hidden == ["none", "none"]
    browser.printed(tmp_path / "page.pdf")
    written = (tmp_path / "page.pdf").read_bytes()
    sizes = {tuple(float(v) for v in box.split()) for box in re.findall(rb"/MediaBox \[([^\]]*)\]", written)}
    assert len(sizes) == 1
    (_, _, width, height) = sizes.pop()
    assert width == pytest.approx(595.3, abs=1) and height == pytest.approx(841.9, abs=1)  # A4 in points
    assert 3 < len(re.findall(rb"/Type\s*/Page\b", written)) < 30


CONTRAST = """(() => {
  const canvas = document.createElement('canvas').getContext('2d', { willReadFrequently: true });
  const parts = (colour) => {
    canvas.clearRect(0, 0, 1, 1); canvas.fillStyle = colour; canvas.fillRect(0, 0, 1, 1);
    return [...canvas.getImageData(0, 0, 1, 1).data];
  };
  const luminance = (c) => {
    const linear = (v) => (v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4);
    const [r, g, b] = c.slice(0, 3).map((v) => linear(v / 255));
    return 0.2126 * r + 0.7152 * g + 0.0722 * b;
  };
  const ground = (e) => {
    for (; e; e = e.parentElement) {
      const c = parts(getComputedStyle(e).backgroundColor);
      if (c[3] === 255) return c;
    }
    return [255, 255, 255, 255];
  };
  const walk = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT), met = {};
  for (let node; (node = walk.nextNode());) {
    const e = node.parentElement, style = getComputedStyle(e);
    if (!node.data.trim() || ['SCRIPT', 'STYLE', 'TITLE', 'DESC', 'title', 'desc'].includes(e.tagName)) continue;
    const ink = e.closest('svg') ? style.fill : style.color, back = ground(e);
    const [one, two] = [luminance(parts(ink)), luminance(back)].sort((a, b) => b - a);
    const ratio = (one + 0.05) / (two + 0.05), key = ink + ' on ' + back.slice(0, 3);
    met[key] = Math.min(met[key] ?? 99, ratio);
  }
  return met;
})()"""


def test_words_stand_out_from_their_ground(opened: Browser):
    """WCAG 2.2, success criterion 1.4.3: at least 4.5 to 1, by its formula for the relative luminance."""
    opened.evaluate("document.getElementById('groups-after').focus()")
    met = opened.evaluate(CONTRAST)
    assert len(met) >= 5
    assert {colours: ratio for colours, ratio in met.items() if ratio < 4.5} == {}
