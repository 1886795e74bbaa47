"""The steps of `ingest`, each a thin call; run directly or as tasks of a Prefect flow."""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

from lattice_census.decisions.ledger import lapse
from lattice_census.grouping.update import update_exact_groups, update_groups
from lattice_census.ingest.classify import classify_keys
from lattice_census.ingest.engine import Engine
from lattice_census.ingest.ingest import (
    IngestWork,
    energies_without_unit,
    ingest_counts,
    prepare_ingest,
    read_source,
)
from lattice_census.ingest.progress import Progress, Step
from lattice_census.ingest.recompute import recompute_canonical
from lattice_census.ingest.scan import IngestRequest
from lattice_census.kernels import all_kept, warm_up
from lattice_census.kernels.cache import PACKAGE, root
from lattice_census.output.findings import find_due, findings_due, note_findings_due
from lattice_census.readers.walk import walk
from lattice_census.settings import Settings
from lattice_census.store.rows import one_number
from lattice_census.store.runs import end_run
from lattice_census.store.stages import record_settings
from lattice_census.store.transaction import transaction
from lattice_census.store.workspace import Workspace

from .engine import engine_for


@dataclass(frozen=True, slots=True)
class IngestJob:
    """Everything that `ingest` needs, and nothing open."""

    store: Path
    request: IngestRequest
    settings: Settings
    wait_seconds: float = 0.0
    dry_run: bool = False


def ingest(job: IngestJob, step: Step, progress: Progress, command: str = "ingest") -> dict[str, Any]:
    """Run the job's steps, publish, and return the counts. A dry run does the same on a copy that is thrown away."""
    with (
        Workspace(job.store, command, job.wait_seconds, job.dry_run, parts=job.settings.parts) as workspace,
        engine_for(job.settings, workspace) as pool,
    ):
        counts = ingest_into(workspace, job, pool, step, progress, command)
        if not job.dry_run:
            finish(workspace, job.settings, step)
        return counts


def ingest_into(
    workspace: Workspace,
    job: IngestJob,
    pool: Engine,
    step: Step,
    progress: Progress,
    command: str,
    group_next: bool = False,
) -> dict[str, Any]:
    """The steps of an ingest in an open workspace, up to the end of its run; not published yet.

    group_next: `group_into` follows before anything else is done.
    """
    work = step("scan", prepare_ingest, workspace, job.request, job.settings, command)
    if work is None:
        return {"nothing_new": True, "files": sum(1 for path in job.request.paths for _ in walk(path))}
    workspace.expect_publication()
    step("compile kernels", compile_kernels, job.settings, progress)
    if work.canonical_again:
        step("reduce stored structures anew", recompute_canonical, workspace, job.settings, pool, progress)
    for source in work.plan.sources:
        if source.stale:
            step(f"read {source.source}", read_source, workspace, work, source, pool, progress)
    exact = partial(_group_exactly, workspace, work)
    step("classify", classify_keys, workspace, job.settings, pool, progress, exact)
    counts = step("close the run", _close, workspace, work, group_next)
    counts["no_unit"] = energies_without_unit(workspace.connection, work.plan)
    return counts


def finish(workspace: Workspace, settings: Settings, step: Step) -> None:
    """Publish where the work store is ahead, with the findings of what it holds, and clear what is in the store by
    now. Where a run that was interrupted waits to be taken up, what is published stays as it is."""
    connection = workspace.connection
    if one_number(connection, "SELECT count(*) FROM runs WHERE status = 'running'"):
        return
    if findings_due(connection):
        step("findings", find_due, connection, settings)
    if workspace.ahead_of_published:
        step("publish", workspace.publish)
    workspace.clear_parts()


def compile_kernels(settings: Settings, progress: Progress) -> None:
    """Compile the kernels where they are not in the cache; a compilation is said before and after.

    Workers elsewhere do it themselves. Each process takes from the cache what it needs when it needs it.
    """
    if settings.scheduler or all_kept():
        return
    progress.note("Compiling the kernels, once; this takes about half a minute.")
    seconds = warm_up()
    place = "the cache" if root().is_relative_to(PACKAGE) else str(root())
    progress.note(f"Compiled the kernels in {seconds:.0f} s; later runs take them from {place}.")


def _group_exactly(workspace: Workspace, work: IngestWork) -> None:
    """The groups that need no comparison; which compositions changed stays noted until all is classified. Types have no
    part in them: records of one key have one type, so that none of them is kept for it."""
    with transaction(workspace.connection):
        update_exact_groups(workspace.connection, work.run.run_id, work.settings)


def _close(workspace: Workspace, work: IngestWork, group_next: bool) -> dict[str, Any]:
    """What is left of the groups, settings and the end of the run in one transaction; the findings are due when it is
    published."""
    connection = workspace.connection
    with transaction(connection):
        waiting = update_groups(connection, work.run.run_id, work.settings, group_next)
        lapse(connection, work.run.run_id)
        note_findings_due(connection)
        record_settings(connection, work.settings, ("parse", "canonical", "fingerprint", "keep"))
        counts = ingest_counts(connection, work) | {"compositions_waiting": waiting}
        end_run(connection, work.run, counts)
    return {"run": work.run.run_id, **counts}
