"""The table of groups in a report: rows of the store, a page that stays small, and the script that sorts it."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
from pathlib import Path
from typing import Any

import pytest

from lattice_census.output import report_groups
from lattice_census.output.report_groups import COLUMNS, find_groups, groups_html
from lattice_census.output.report_page import table
from lattice_census.store.connect import open_for_reading

from .report_pages import many_groups
from .tables_of_structures import query

SCRIPT = Path(report_groups.__file__).with_name("report.js")


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


def test_rows_of_groups_are_those_of_the_store(report_store: Path):
    connection = open_for_reading(report_store)
    found = find_groups(connection, "near", 0.05, 0.01)
    connection.close()
    stored = query(
        report_store,
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
    written = table(
        "caption", ("a", "volume_angstrom3_per_site"), [("x", 1.5), ("y", None), ("z", 2)], [1], 2, rest="ask q"
    )
    assert written.count('class="number"') == 3 and "volume (Å3/site)" in written
    assert '<tr class="chosen">' in written and "1 more row is left out here. All: lattice-census ask q<" in written
    written = table("shares", ("source", "share_percent", "t"), [("x", 12.345, 0.0), ("y", 0.0, 1.5)], digits={"t": 2})
    assert re.findall(r"<td[^>]*>([^<]*)</td>", written) == ["x", "12.3", "0.00", "y", "0.0", "1.50"]
    assert written.count('class="number zero"') == 2


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
