"""Fixtures that several test modules use."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from lattice_census.ingest.progress import Silent, call_directly


@pytest.fixture
def ingest(tmp_path: Path) -> Callable[..., dict[str, Any]]:
    """Run an ingest into tmp_path/census.duckdb without an orchestrator; returns its counts."""
    from lattice_census.flows.ingest import IngestJob
    from lattice_census.flows.ingest import ingest as steps
    from lattice_census.ingest.scan import IngestRequest
    from lattice_census.settings import resolve_settings

    def run(
        *paths: Path,
        store: Path | None = None,
        source: str | None = None,
        recompute: bool = False,
        dry_run: bool = False,
        of_source: dict[str, Any] | None = None,
        **settings: Any,
    ) -> dict[str, Any]:
        options = {"workers": 1, "orchestrator": "direct", **settings}
        request = IngestRequest(tuple(paths), source, of_source or {}, recompute)
        job = IngestJob(store or tmp_path / "census.duckdb", request, resolve_settings(options, {}), 0.0, dry_run)
        return steps(job, call_directly, Silent())

    return run


@pytest.fixture(scope="session")
def report_store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A grouped store with hostile labels, for the exams of the report; nobody writes to it."""
    from .report_pages import make_report_store

    return make_report_store(tmp_path_factory.mktemp("report"))


@pytest.fixture(scope="session")
def report_page(report_store: Path) -> str:
    """The report of that store."""
    from .report_pages import page_of

    return page_of(report_store)


@pytest.fixture(scope="session")
def prefect_server() -> Iterator[None]:
    """One temporary Prefect server with an empty database for all tests that need it: entering takes ten seconds."""
    from prefect.testing.utilities import prefect_test_harness

    import lattice_census.flows.orchestrate  # noqa: F401 - sets what Prefect is to be quiet about

    with prefect_test_harness(server_startup_timeout=90):
        yield
