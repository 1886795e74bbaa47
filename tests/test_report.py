"""The report: whole, alone in the world, proof against hostile labels, and written only over a report."""

from __future__ import annotations

import base64
import hashlib
import json
import re
import shutil
import subprocess
import sys
from pathlib import Path

import duckdb
import pytest
from matplotlib.figure import Figure

from lattice_census.errors import UsageError
from lattice_census.output import report_groups
from lattice_census.output.report import check_target, report_html, write_report
from lattice_census.output.report_page import data_block, text, words
from lattice_census.output.svg import inline_svg
from lattice_census.store.connect import open_for_reading
from lattice_census.store.schema import migrate

from .proven_store import labelled_crystals, run_ingest
from .report_pages import HOSTILE, SECTIONS, page_of, read
from .tables_of_structures import query, text_of, write_csv


def test_the_page_is_whole(report_page: str):
    html = report_page
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


def test_the_page_needs_no_network(report_page: str):
    html = report_page
    assert not re.search(r"https?://|//\w+\.\w", html)
    reader = read(html)
    for tag, a in reader.elements:
        assert tag not in ("link", "iframe", "object", "embed", "base", "form"), tag
        assert "src" not in a, (tag, a)
        href = a.get("href") or a.get("xlink:href") or "#"
        assert href.startswith(("#", "data:image/png;base64,")), (tag, href)
    assert "@import" not in html
    assert [u for u in re.findall(r"url\(([^)]*)\)", html) if not u.startswith("#")] == []


def test_labels_are_text_wherever_they_stand(report_page: str):
    html = report_page
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


def test_the_policy_allows_the_script_of_the_page_and_no_other(report_page: str):
    script = re.findall(r"<script>(.*?)</script>", report_page, re.DOTALL)
    assert len(script) == 1
    digest = base64.b64encode(hashlib.sha256(script[0].encode()).digest()).decode()
    policy = re.search(r'Content-Security-Policy" content="([^"]*)"', report_page)
    assert policy and f"script-src 'sha256-{digest}';" in policy[1] and "default-src 'none'" in policy[1]


def test_the_numbers_of_the_summary_are_those_of_the_store(report_page: str, report_store: Path):
    records = query(report_store, "SELECT count(*) FROM current_records")[0][0]
    groups, aside = query(
        report_store, "SELECT count(DISTINCT group_id), count(*) FILTER (NOT kept) FROM members WHERE grade = 'near'"
    )[0]
    refused = query(report_store, "SELECT count(*) FROM rejects")[0][0]
    findings = query(report_store, "SELECT count(*) FROM findings")[0][0]
    told = " ".join(read(report_page).words)
    assert f"The collection holds {records:,} records" in told and f"Not counted here: {refused} refused." in told
    assert f"they fall into {groups:,} groups. {aside:,} (" in told
    assert f"For a curator to look at: {findings} finding" in told


def test_the_same_store_gives_the_same_page(report_page: str, report_store: Path):
    assert page_of(report_store) == report_page


def test_an_empty_store_and_one_without_groups_have_a_page(tmp_path: Path):
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


# The command


def test_only_a_report_is_replaced(report_store: Path, tmp_path: Path):
    connection = open_for_reading(report_store)
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


def test_the_command_writes_beside_the_store_and_needs_no_kernels(report_store: Path, tmp_path: Path):
    shutil.copy(report_store, tmp_path / "census.duckdb")
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
