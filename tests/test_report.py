"""The report: whole, alone in the world, proof against hostile labels; its pictures measured, its script run."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.figure import Figure

from lattice_census.errors import UsageError
from lattice_census.output import report_groups, report_pairs
from lattice_census.output.overlay import best_axis, mean_cell, overlay, plane_along, with_images
from lattice_census.output.overlay_picture import bar_for, factor_for, overlay_figure
from lattice_census.output.report import check_target, report_html, write_report
from lattice_census.output.report_figures import curve_figure, lattice_map, map_figures, size_figure
from lattice_census.output.report_groups import COLUMNS, Groups, find_groups, groups_html
from lattice_census.output.report_page import data_block, page, table, text, words
from lattice_census.output.svg import inline_svg, raw_svg
from lattice_census.output.tolerance_curve import tolerance_curve
from lattice_census.store.connect import open_for_reading

from . import strategies as draw
from .proven_store import labelled_crystals, moved, run_group, run_ingest
from .tables_of_structures import query, text_of, write_csv

HOSTILE = "<img src=x onerror=alert(1)>"
SECTIONS = ("summary", "lattice-types", "map", "sizes", "tolerance", "groups", "pairs", "findings", "leakage",
            "refusals", "settings", "cautions")  # fmt: skip
SCRIPT = Path(report_groups.__file__).with_name("report.js")
OF_SOURCE = {"split_column": "split"}


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The crystals of the proven store, with hostile labels, file names and splits among them."""
    folder = tmp_path_factory.mktemp("report")
    crystals = labelled_crystals()
    rows: list[dict[str, Any]] = [
        {"material_id": n, "cif": text_of(c), "split": "train" if i % 2 else "</script><b>"}
        for i, (n, c) in enumerate(crystals.items())
    ]
    base = draw.random_crystal(np.random.default_rng(9), "mP", 4, ("Zn", "O"), 1.7)
    copies = {HOSTILE: base, f"{HOSTILE}2": moved(base, 0.05), "evil</title>": moved(base, 0.02)}
    rows += [{"material_id": n, "cif": text_of(c), "split": "train"} for n, c in copies.items()]
    inputs = folder / "<i>in & out"
    inputs.mkdir()
    write_csv(inputs / "t<u>.csv", rows)
    (inputs / "<s>odd.cif").write_text("data_odd\n_cell_length_a 3\n")
    from lattice_census.flows.ingest import IngestJob, ingest
    from lattice_census.ingest.progress import Silent, call_directly
    from lattice_census.ingest.scan import IngestRequest
    from lattice_census.settings import resolve_settings

    resolved = resolve_settings({"workers": 1, "orchestrator": "direct"}, {})
    path = folder / "census.duckdb"
    ingest(IngestJob(path, IngestRequest((inputs,), None, OF_SOURCE, False), resolved, 0.0), call_directly, Silent())
    run_group(path)
    return path


@pytest.fixture(scope="module")
def html(store: Path) -> str:
    """The page."""
    connection = open_for_reading(store)
    try:
        return report_html(connection)
    finally:
        connection.close()


class Reader(HTMLParser):
    """Every element with its attributes, and whether open and closing tags balance."""

    VOID = frozenset({"meta", "input", "br", "link", "img", "use"})

    def __init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.wrong: list[str] = []
        self.words: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if tag in self.VOID:
            return
        if not self.open or self.open.pop() != tag:
            self.wrong.append(tag)

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] not in ("script", "style"):
            self.words.append(data)


def read(html: str) -> Reader:
    reader = Reader()
    reader.feed(html)
    reader.close()
    return reader


def test_the_page_is_whole(html: str):
    reader = read(html)
    assert not reader.wrong and not reader.open
    ids = [a["id"] for _, a in reader.elements if a.get("id")]
    assert len(ids) == len(set(ids)), sorted(i for i in ids if ids.count(i) > 1)
    assert tuple(a["id"] for tag, a in reader.elements if tag == "section") == SECTIONS
    for tag, a in reader.elements:
        if tag in ("a", "use") and a.get("href"):
            assert a["href"][1:] in ids, a
        if a.get("aria-labelledby"):
            assert set(a["aria-labelledby"].split()) <= set(ids)
        for value in a.values():
            for target in re.findall(r"url\(#([^)]*)\)", value or ""):
                assert target in ids
    for name in SECTIONS:
        body = html.split(f'<section id="{name}"')[1].split("</section>")[0]
        assert "<h2" in body and len(body) > 200, name
    for part in ("map", "tolerance", "sizes"):
        assert "<svg" in html.split(f'<section id="{part}"')[1].split("</section>")[0], part
    assert html.split('<section id="pairs"')[1].count("<svg") >= 5


def test_the_page_needs_no_network(html: str):
    assert not re.search(r"https?://|//\w+\.\w", html)
    reader = read(html)
    for tag, a in reader.elements:
        assert tag not in ("link", "iframe", "object", "embed", "base", "form"), tag
        assert "src" not in a, (tag, a)
        href = a.get("href") or a.get("xlink:href") or "#"
        assert href.startswith(("#", "data:image/png;base64,")), (tag, href)
    assert "@import" not in html
    assert [u for u in re.findall(r"url\(([^)]*)\)", html) if not u.startswith("#")] == []


def test_labels_are_text_wherever_they_stand(html: str):
    assert HOSTILE not in html
    assert "&lt;img src=x onerror=alert(1)&gt;" in html
    assert "\\u003ci>in & out:" in html  # in the data of the table
    assert "</script><b>" not in html and "&lt;/script&gt;&lt;b&gt;" in html
    reader = read(html)
    assert {tag for tag, _ in reader.elements} & {"img", "b", "u", "i", "s"} == set()
    assert not [a for _, a in reader.elements for name in a if name.startswith("on")]
    assert sum(tag == "script" for tag, _ in reader.elements) == 2
    assert any(HOSTILE in w for w in reader.words)


def test_characters_that_turn_text_round_are_written_as_escapes():
    turned = "a\u202eb<c"
    assert words(turned) == text(turned) == "a\\u202eb&lt;c"
    assert "\u202e" not in inline_svg(Figure(), "x", turned, turned)
    assert report_groups.compact(turned, None) == "a\\u202eb<c"
    assert data_block("x", ["</script>"]) == '<script type="application/json" id="x">["\\u003c/script>"]</script>'


def test_the_policy_allows_the_script_of_the_page_and_no_other(html: str):
    import base64
    import hashlib

    script = re.findall(r"<script>(.*?)</script>", html, re.DOTALL)
    assert len(script) == 1
    digest = base64.b64encode(hashlib.sha256(script[0].encode()).digest()).decode()
    policy = re.search(r'Content-Security-Policy" content="([^"]*)"', html)
    assert policy and f"script-src 'sha256-{digest}';" in policy[1] and "default-src 'none'" in policy[1]


def test_the_numbers_of_the_summary_are_those_of_the_store(html: str, store: Path):
    records = query(store, "SELECT count(*) FROM current_records")[0][0]
    groups, aside = query(store, "SELECT count(DISTINCT group_id), count(*) FILTER (NOT kept) FROM members "
                          "WHERE grade = 'near'")[0]  # fmt: skip
    words = " ".join(read(html).words)
    assert f"The collection holds {records:,} records" in words
    assert f"they fall into {groups:,} groups. {aside:,} (" in words


def test_the_same_store_gives_the_same_page(html: str, store: Path):
    connection = open_for_reading(store)
    try:
        assert report_html(connection) == html
    finally:
        connection.close()


def test_an_empty_store_and_one_without_groups_have_a_page(tmp_path: Path):
    import duckdb

    from lattice_census.store.schema import migrate

    connection = duckdb.connect(str(tmp_path / "empty.duckdb"))
    migrate(connection)
    written = report_html(connection)
    connection.close()
    assert tuple(a["id"] for tag, a in read(written).elements if tag == "section") == SECTIONS
    write_csv(tmp_path / "t.csv", [{"material_id": "a", "cif": text_of(labelled_crystals()["alone"])}])
    run_ingest(tmp_path / "census.duckdb", tmp_path / "t.csv")
    connection = open_for_reading(tmp_path / "census.duckdb")
    written = report_html(connection)
    connection.close()
    reader = read(written)
    assert tuple(a["id"] for tag, a in reader.elements if tag == "section") == SECTIONS and not reader.wrong
    assert "Nothing is grouped yet" in written


# Pictures


def overlays(store: Path) -> list[Any]:
    connection = open_for_reading(store)
    try:
        pairs = connection.execute(
            "SELECT group_id, record_id, witness_shift_angstrom, witness_strain FROM members "
            "WHERE grade = 'near' AND NOT kept ORDER BY record_id"
        ).fetchall()
        return [(overlay(connection, kept, aside), shift, strain) for kept, aside, shift, strain in pairs]
    finally:
        connection.close()


def test_an_overlay_has_the_measures_of_the_match(store: Path):
    found = overlays(store)
    assert len(found) >= 6
    for shown, shift, strain in found:
        assert shown is not None
        assert shown.distances.max() == pytest.approx(shift, abs=2e-5)
        assert np.sqrt((shown.distances**2).mean()) == pytest.approx(shown.rms_shift, abs=2e-5)
        assert shown.strain == pytest.approx(strain, abs=1e-12)
        assert np.abs(shown.delta.sum(axis=0)).max() < 1e-9
        assert len(shown.tokens) == len(shown.sites) and (shown.sites >= -1e-9).all() and (shown.sites < 1).all()
    assert {shown.mirrored for shown, *_ in found} == {True, False}
    assert any(len(shown.sites) > len(shown.kept.tokens) for shown, *_ in found)


def test_an_overlay_is_the_same_from_either_side(store: Path):
    connection = open_for_reading(store)
    for a, b in connection.execute("SELECT record_a, record_b FROM matches WHERE grade = 'near'").fetchall():
        there, back = overlay(connection, a, b), overlay(connection, b, a)
        assert there is not None and back is not None
        assert np.allclose(there.distances, back.distances, atol=1e-9)
        assert np.allclose(there.delta, -back.delta, atol=1e-9)
        ends = there.sites + there.delta - back.sites
        assert np.abs(ends - np.rint(ends)).max() < 1e-9
    connection.close()


def test_records_without_a_match_have_no_overlay(store: Path):
    ids = dict(query(store, "SELECT label, record_id FROM records"))
    connection = open_for_reading(store)
    assert overlay(connection, ids["c1"], ids["c-moved"]) is None
    connection.close()


def test_lengths_in_the_mean_cell_are_those_of_the_mean_metric():
    rng = np.random.default_rng(8)
    for _ in range(20):
        first = rng.normal(size=(3, 3)) * 4
        second = first @ (np.eye(3) + rng.normal(scale=0.005, size=(3, 3)))
        cell = mean_cell(first, second)
        assert np.allclose(cell @ cell.T, (first @ first.T + second @ second.T) / 2, atol=1e-10)
        assert np.abs(cell - (first + second) / 2).max() < 1e-3


def lines_of(svg: str, gid: str) -> list[np.ndarray]:
    """End points (2, 2) of the lines of a group, in the units of the SVG file."""
    start = svg.index(f'<g id="{gid}"')
    group = svg[start : svg.index("</g>", start)]
    found = []
    for path in re.findall(r'\sd="([^"]*)"', group):
        numbers = [float(n) for n in re.findall(r"-?[0-9.]+(?:e-?\d+)?", path)]
        found.append(np.array(numbers).reshape(-1, 2))
    return found


def measured(svg: str, factor: int) -> tuple[list[np.ndarray], float]:
    """The arrows of a picture, and how many units of the file are one angstrom by its bar."""
    (bar,) = lines_of(svg, "bar")
    told = re.search(r"([0-9.]+) Å", svg)
    assert told is not None
    if factor > 1:
        assert f"arrows {factor} times as long: {float(told[1]) / factor:g} Å" in svg
    return lines_of(svg, "shifts"), float(np.linalg.norm(bar[1] - bar[0])) / float(told[1])


def test_arrows_have_the_length_that_the_scale_bar_says(store: Path):
    """In the written file: every arrow over the bar is the shift across the view, and starts where its site stands."""
    checked = 0
    for shown, shift, _ in overlays(store):
        if shift < 0.005:
            continue
        figure, factor = overlay_figure(shown)
        arrows, unit = measured(raw_svg(figure, "p"), factor)
        plane = plane_along(shown.cell, shown.axis)
        sites, which = with_images(shown.sites)
        flat = sites @ shown.cell @ plane.T
        moved_by = (shown.delta @ shown.cell @ plane.T)[which] * factor
        wanted = np.linalg.norm(moved_by, axis=1)
        drawn = wanted >= np.sort(wanted)[::-1][len(arrows) - 1] - 1e-9  # the shortest are left out
        assert drawn.sum() == len(arrows)
        ends = np.array(arrows) * [1, -1] / unit  # y goes down in the file
        assert np.allclose(ends[:, 1] - ends[:, 0], moved_by[drawn], atol=1e-3)
        assert np.allclose(ends[:, 0] - ends[0, 0], flat[drawn] - flat[drawn][0], atol=1e-3)
        checked += 1
    assert checked >= 3


def test_a_shift_of_five_hundredths_is_drawn_so_long(store: Path):
    shown = replace(
        overlays(store)[0][0], cell=np.diag([6.0, 4.0, 5.0]), tokens=["Si", "Si"],
        sites=np.array([[0.5, 0.25, 0.5], [0.5, 0.75, 0.5]]), delta=np.array([[0, 0.05 / 4, 0], [0, -0.05 / 4, 0]]),
    )  # fmt: skip
    figure, factor = overlay_figure(shown)
    arrows, unit = measured(raw_svg(figure, "p"), factor)
    assert factor == 10 and len(arrows) == 2
    for arrow in arrows:
        assert np.linalg.norm(arrow[1] - arrow[0]) / unit / factor == pytest.approx(0.05, abs=1e-5)


def test_factors_and_bars_are_round_and_fit():
    assert factor_for(np.array([0.05]), 8.0) == 20 and factor_for(np.array([0.0]), 8.0) == 1
    assert factor_for(np.array([3.0]), 8.0) == 1
    assert bar_for(8.0) == 2.0 and bar_for(0.3) == 0.5 and bar_for(100.0) == 20.0


def test_the_best_axis_shows_the_shifts():
    cell = np.diag([4.0, 5.0, 6.0])
    sites = np.array([[0.1, 0.2, 0.3], [0.6, 0.7, 0.9]])
    for moved_along in range(3):
        delta = np.zeros((2, 3))
        delta[:, moved_along] = 0.01, -0.01
        assert best_axis(cell, sites, delta) != moved_along


def test_a_picture_is_small_and_named(store: Path):
    shown = max((o for o, *_ in overlays(store)), key=lambda o: len(o.sites))
    figure, _ = overlay_figure(shown)
    svg = inline_svg(figure, "one", 'A "<b>" title', "said")
    assert len(svg) < 60_000
    assert svg.startswith("<svg role=") and "A &quot;&lt;b&gt;&quot; title</title>" in svg
    assert "<metadata" not in svg and "xmlns" not in svg and "<style" not in svg


def test_a_cell_of_too_many_sites_is_said_and_not_drawn(store: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(report_pairs, "MOST_SITES", 2)
    shown = overlays(store)[0][0]
    assert "too many to be told apart" in report_pairs.pair_html(shown, "x")


def test_the_figures_of_the_store_draw_its_numbers(store: Path):
    connection = open_for_reading(store)
    curve, shapes = tolerance_curve(connection), lattice_map(connection)
    crystals = connection.execute("SELECT count(DISTINCT crystal_key) FROM crystals").fetchall()[0][0]
    connection.close()
    assert curve is not None
    axes = curve_figure(curve).axes[0]
    lines = {line.get_label(): line for line in axes.lines}
    t, families = (np.asarray(v) for v in lines["families"].get_data())
    assert [curve.families(x) for x in t.tolist()] == families.tolist() and set(curve.steps.tolist()) <= set(t.tolist())
    assert lines["groups"].get_ydata().tolist() == curve.groups.tolist()
    assert list(lines["chosen tolerance"].get_xdata()) == [1.0, 1.0]
    for figure in map_figures(shapes):
        marks = [(line.get_marker(), line.get_color()) for line in figure.axes[0].lines]
        assert len({m for m, _ in marks}) == len(marks) and len({c for _, c in marks}) > 1
        assert sum(len(line.get_xdata()) for line in figure.axes[0].lines) == crystals == len(shapes.a_to_b)
    assert (shapes.a_to_b <= 1 + 1e-9).all() and (shapes.b_to_c <= 1 + 1e-9).all()
    assert (shapes.openness > 0.5).all() and (shapes.openness <= 1 + 1e-9).all()  # of Niggli cells
    bars = size_figure([(1, 396), (2, 48)]).axes[0].patches
    assert [b.get_height() for b in bars] == [396, 48]


# The table of groups


def many_groups(count: int) -> Groups:
    rng = np.random.default_rng(1)
    rows = [
        (f"some-source.csv:material-{i:06d}", "Ca2N4O8Ti3", "mS", "P2_1/c", int(2 + 40 / (i + 1)), 3,
         float(rng.random() * 0.05), float(rng.random() * 0.01), float(rng.random()), "test, train, validation",
         float(rng.random()), "energy_conflict")
        for i in range(count)
    ]  # fmt: skip
    return Groups("near", 0.05, 0.01, [f"{i:020x}" for i in range(count)], rows)


def test_ten_thousand_groups_stay_small():
    written = groups_html(many_groups(10_000))
    assert len(written.encode()) < 3_000_000
    assert written.count("<tr>") == 51  # headings and one page; the rest is data
    assert "left out" not in written and "10,000 groups" in written
    data = json.loads(re.search(r'id="groups-data">(.*?)</script>', written)[1])  # type: ignore[index]
    assert len(data["rows"]) == 10_000 and len(data["rows"][0]) == len(COLUMNS) == len(data["digits"])


def test_beyond_the_most_groups_the_largest_stand_there(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(report_groups, "MOST_GROUPS", 100)
    written = groups_html(many_groups(150))
    assert "150 groups of grade near" in written and "The 100 largest stand here" in written
    data = json.loads(re.search(r'id="groups-data">(.*?)</script>', written)[1])  # type: ignore[index]
    assert len(data["rows"]) == 100


def test_rows_of_groups_are_those_of_the_store(store: Path):
    connection = open_for_reading(store)
    found = find_groups(connection, "near", 0.05, 0.01)
    connection.close()
    stored = query(
        store,
        "SELECT group_id, count(*), count(DISTINCT source), max(witness_shift_angstrom), max(witness_strain), "
        "max(greatest(witness_shift_angstrom / 0.05, witness_strain / 0.01)) FROM members WHERE grade = 'near' "
        "GROUP BY group_id HAVING count(*) > 1 ORDER BY 2 DESC, 1",
    )
    assert found.ids == [row[0] for row in stored]
    for row, (_, *wanted) in zip(found.rows, stored, strict=True):
        assert list(row[4:9]) == pytest.approx(wanted)
    unsure = found.least_certain(3, found.largest(1))
    assert [found.t(i) for i in unsure] == sorted((found.t(i) for i in unsure), reverse=True)
    assert 0 not in unsure


def test_numbers_stand_right_and_rows_beyond_the_most_are_counted():
    written = table("caption", ("a", "volume_angstrom3_per_site"), [("x", 1.5), ("y", None), ("z", 2)], [1], 2)
    assert written.count('class="number"') == 3 and "volume (Å3/site)" in written
    assert '<tr class="chosen">' in written and "1 more rows are left out" in written


def run_node(code: str) -> Any:
    node = shutil.which("node")
    if node is None:
        pytest.skip("no node to run the script of the page with")
    done = subprocess.run(
        [node, "-e", f"const p = require({json.dumps(str(SCRIPT))});\n{code}"], capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout)


def test_the_script_sorts_and_filters():
    code = """
    const rows = [["b:10", 5, 0.2], ["B:9 Köln", 2, null], ["a:1", 9, 0.1], ["c:x", 2, 0.3]];
    const state = (more) => ({ filter: "", least: 0, column: null, ascending: true, recordsColumn: 1, ...more });
    const names = (more) => p.arrange(rows, state(more)).map((r) => r[0]);
    console.log(JSON.stringify({
      none: names({}),
      text: names({ column: 0 }),
      textDown: names({ column: 0, ascending: false }),
      number: names({ column: 2 }),
      numberDown: names({ column: 2, ascending: false }),
      ties: names({ column: 1 }),
      words: names({ filter: " KÖLN b " }),
      least: names({ least: 5 }),
      nothing: names({ filter: "zzz" }),
      cells: [p.cellText(null, 0), p.cellText(1234567, 0), p.cellText(0.5, 3), p.cellText("<b>", null)],
      page: [p.pageOf(rows, 7).page, p.pageOf(rows, 7).pages, p.pageOf(new Array(120).fill([]), 2).rows.length],
    }));
    """
    found = run_node(code)
    assert found["none"] == ["b:10", "B:9 Köln", "a:1", "c:x"]
    assert found["text"] == ["a:1", "B:9 Köln", "b:10", "c:x"]
    assert found["textDown"] == ["c:x", "b:10", "B:9 Köln", "a:1"]
    assert found["number"] == ["a:1", "b:10", "c:x", "B:9 Köln"]
    assert found["numberDown"] == ["c:x", "b:10", "a:1", "B:9 Köln"]  # what is missing comes last
    assert found["ties"] == ["B:9 Köln", "c:x", "b:10", "a:1"]
    assert found["words"] == ["B:9 Köln"] and found["least"] == ["b:10", "a:1"] and found["nothing"] == []
    assert found["cells"] == ["-", "1,234,567", "0.500", "<b>"]
    assert found["page"] == [0, 1, 20]


def test_the_table_works_in_a_browser(tmp_path: Path):
    """Sorting, filtering and paging by their controls, in a browser if one is there; no label becomes an element."""
    browser = shutil.which("chromium")
    if browser is None:
        pytest.skip("no browser to open the page with")
    groups = many_groups(120)
    groups.rows[7] = (HOSTILE, *groups.rows[7][1:])
    written = page("t", "s", [("groups", "Groups", groups_html(groups))])
    drive = """<script>
    const seen = [];
    const note = () => seen.push([document.getElementById("groups-said").textContent,
      document.querySelector("#groups-table tbody td").textContent]);
    note();
    document.getElementById("groups-after").click(); note();
    document.querySelector("#groups-table th button").click();
    document.querySelector("#groups-table th button").click(); note();
    const words = document.getElementById("groups-filter");
    words.value = "onerror"; words.dispatchEvent(new Event("input")); note();
    seen.push([document.querySelector("#groups-table th").getAttribute("aria-sort"),
      String(document.querySelectorAll("img").length)]);
    document.body.innerHTML = "<pre id=result>" + JSON.stringify(seen).replaceAll("<", "&lt;") + "</pre>";
    </script></body>"""
    written = re.sub(r'<meta http-equiv="Content-Security-Policy"[^>]*>', "", written).replace("</body>", drive)
    (tmp_path / "page.html").write_text(written, encoding="utf-8")
    done = subprocess.run(
        [browser, "--headless", "--no-sandbox", "--disable-gpu", "--no-first-run", "--disable-background-networking",
         f"--user-data-dir={tmp_path / 'profile'}", "--dump-dom", (tmp_path / "page.html").as_uri()],
        capture_output=True, text=True, timeout=60,
    )  # fmt: skip
    found = re.search(r'<pre id="result">(.*?)</pre>', done.stdout, re.DOTALL)
    assert found, done.stderr[-2000:]
    from html import unescape

    seen = json.loads(unescape(found[1]))
    assert seen[0] == ["120 of 120 groups; page 1 of 3", "some-source.csv:material-000000"]
    assert seen[1] == ["120 of 120 groups; page 2 of 3", "some-source.csv:material-000050"]
    assert seen[2] == ["120 of 120 groups; page 1 of 3", "some-source.csv:material-000119"]
    assert seen[3] == ["1 of 120 groups; page 1 of 1", HOSTILE]
    assert seen[4] == ["descending", "0"]


# The command


def test_only_a_report_is_replaced(store: Path, tmp_path: Path):
    connection = open_for_reading(store)
    target = tmp_path / "page.html"
    size = write_report(connection, target)
    assert size == target.stat().st_size
    assert write_report(connection, target) == size
    target.write_text("<html>mine</html>")
    with pytest.raises(UsageError, match="no report of lattice-census"):
        write_report(connection, target)
    assert target.read_text() == "<html>mine</html>"
    with pytest.raises(UsageError, match="is a folder"):
        check_target(tmp_path)
    with pytest.raises(UsageError, match="There is no folder"):
        check_target(tmp_path / "none" / "page.html")
    assert [p.name for p in tmp_path.iterdir()] == ["page.html"]
    connection.close()


def test_the_command_writes_beside_the_store_and_needs_no_kernels(store: Path, tmp_path: Path):
    shutil.copy(store, tmp_path / "census.duckdb")
    code = (
        "import sys; sys.argv = ['lattice-census', 'report', '--store', 'census.duckdb', '--json']\n"
        "from lattice_census.flows.cli import main\n"
        "try: main()\nexcept SystemExit as e: assert not e.code, e.code\n"
        "print([m for m in ('prefect', 'numba', 'matplotlib.pyplot') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True)
    told, loaded = done.stdout.splitlines()
    assert json.loads(told) == {"file": "report.html", "bytes": (tmp_path / "report.html").stat().st_size}
    assert loaded == "[]"
