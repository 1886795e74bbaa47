"""What Prefect shows of a flow that ended: counts and the place of the report, of every flow and of nothing else."""

from __future__ import annotations

import contextlib
import json
import subprocess
import sys
from pathlib import Path
from typing import Any
from unittest import mock

import pytest

from lattice_census.flows import cli
from lattice_census.flows.artifacts import code, counted, summary

from .curated import copies, row
from .tables_of_structures import query, write_csv


def run_command(folder: Path, capsys: pytest.CaptureFixture[str], *arguments: str) -> tuple[dict[str, Any], str]:
    """The counts that a command prints as JSON, and what it says on stderr; it has to succeed."""
    words = ["lattice-census", *arguments, "--store", "census.duckdb", "--json", "--quiet"]
    with contextlib.chdir(folder), mock.patch.object(sys, "argv", words):
        assert cli._run() == 0
    said = capsys.readouterr()
    return json.loads(said.out), said.err


def artifact(key: str) -> Any:
    """The newest artifact of a key; None where there is none."""
    from prefect.client.orchestration import get_client
    from prefect.client.schemas.filters import ArtifactFilter, ArtifactFilterKey
    from prefect.client.schemas.sorting import ArtifactSort

    with get_client(sync_client=True) as client:
        found = client.read_artifacts(
            artifact_filter=ArtifactFilter(key=ArtifactFilterKey(any_=[key])), sort=ArtifactSort.CREATED_DESC, limit=1
        )
    return found[0] if found else None


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    write_csv(tmp_path / "t.csv", [row(f"{i}-{j}", crystal) for i, j, crystal in copies(2, 2)])
    return tmp_path


@pytest.mark.usefixtures("prefect_server")
def test_every_flow_shows_its_counts_and_where_the_report_is(folder: Path, capsys: pytest.CaptureFixture[str]):
    one_worker = ("--workers", "1")
    for flow, arguments in {
        "ingest": ("t.csv", *one_worker),
        "group": one_worker,
        "keep": (),
        "run": ("t.csv", *one_worker),
    }.items():
        if flow == "run":
            write_csv(folder / "t.csv", [row(f"{i}-{j}", crystal) for i, j, crystal in copies(3, 2)])
            (folder / "report.html").write_text("as it was")
        counts, said = run_command(folder, capsys, flow, *arguments)
        assert "could not be shown" not in said
        rows = json.loads(artifact(f"lattice-census-{flow}-counts").data)
        assert [(line["what"], line["number"]) for line in rows] == counted(counts) and len(rows) > 4
        text = artifact(f"lattice-census-{flow}").data
        for what, number in counted(counts):
            assert f"- {what}: {number:,}\n" in text
        assert f"the store at `{folder / 'census.duckdb'}` is published" in text
        assert f"`lattice-census report --store {folder / 'census.duckdb'}`" in text
        assert ("There is no report yet" in text) == (flow != "run")
        assert f"`{folder / 'report.html'}`" in text
    assert {"what": "ingest: found", "number": 6} in rows and {"what": "keep: set aside", "number": 1} in rows


@pytest.mark.usefixtures("prefect_server")
def test_a_flow_that_cannot_be_shown_says_so_and_is_done(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
):
    def refuse(*_: object, **__: object) -> None:
        raise ConnectionError("the server is gone\nand more")

    monkeypatch.setattr("prefect.artifacts.create_table_artifact", refuse)
    counts, said = run_command(folder, capsys, "ingest", "t.csv", "--workers", "1")
    lines = [line for line in said.splitlines() if line.startswith("lattice-census: ")]
    assert lines == [
        "lattice-census: the work is done, but Prefect could not be shown its counts "
        "(ConnectionError: the server is gone)."
    ]
    assert counts["accepted"] == 4 and query(folder / "census.duckdb", "SELECT count(*) FROM records") == [(4,)]


@pytest.mark.usefixtures("prefect_server")
def test_nothing_is_shown_of_direct_and_dry_runs(folder: Path, capsys: pytest.CaptureFixture[str]):
    shown: list[object] = []
    with mock.patch("lattice_census.flows.artifacts.show_counts", lambda *told: shown.append(told)):
        run_command(folder, capsys, "run", "t.csv", "--workers", "1", "--direct")
        run_command(folder, capsys, "ingest", "t.csv", "--workers", "1", "--dry-run")
        run_command(folder, capsys, "keep", "--dry-run")
        assert shown == []
        run_command(folder, capsys, "keep")
    assert [told[0] for told in shown] == ["keep"]  # type: ignore[index]


def test_direct_work_imports_no_prefect(folder: Path):
    words = "['lattice-census', 'run', 't.csv', '--direct', '--workers', '1', '--quiet']"
    done = subprocess.run(
        [sys.executable, "-c", f"import sys; sys.argv = {words}\nfrom lattice_census.flows import cli\n"
         "assert cli._run() == 0\nprint('prefect' in sys.modules)"],
        cwd=folder, capture_output=True, text=True,
    )  # fmt: skip
    assert done.stdout.endswith("False\n"), done.stderr


def test_counts_are_flattened_in_their_order():
    counts = {"run": 3, "nothing_new": True, "cut": False, "note": "words", "rows": [1],
              "groups": {"same": 4, "near": 2}, "read": {"of_file": 1, "reasons": {"cell_zero": 5}}}  # fmt: skip
    assert counted(counts) == [
        ("run", 3), ("nothing new", 1), ("groups: same", 4), ("groups: near", 2), ("read: of file", 1),
        ("read: reasons, cell zero", 5),
    ]  # fmt: skip


def test_paths_are_text_in_the_artifact(tmp_path: Path):
    assert code("plain") == "`plain`" and code("a`b``c") == "``` a`b``c ```" and code("a\nb") == "`a b`"
    store = tmp_path / "a`b*c*" / "census.duckdb"
    assert f"`` {store} ``" in summary("run", store, [("found", 1200)])
    assert "- found: 1,200" in summary("run", store, [("found", 1200)])
