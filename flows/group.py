"""The steps of `group` and of `run`."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from lattice_census.decisions.ledger import lapse
from lattice_census.grouping.stage import GroupCounts, find_work, group_records
from lattice_census.grouping.update import update_groups
from lattice_census.ingest.engine import Engine
from lattice_census.ingest.progress import Progress, Step
from lattice_census.ingest.touched import note_grouped
from lattice_census.output.findings import find_all
from lattice_census.settings import Settings
from lattice_census.store.runs import Run, begin_run, end_run
from lattice_census.store.stages import record_settings, refuse_mixed
from lattice_census.store.transaction import transaction
from lattice_census.store.workspace import Workspace

from .engine import engine_for
from .ingest import IngestJob, compile_kernels, finish, ingest_into
from .keeping import KeepJob, keep_into


@dataclass(frozen=True, slots=True)
class GroupJob:
    """Everything that `group` needs, and nothing open."""

    store: Path
    settings: Settings
    everything: bool = False
    recompute: bool = False
    wait_seconds: float = 0.0


def group(job: GroupJob, step: Step, progress: Progress) -> dict[str, Any]:
    """Group what has changed, publish, and return the counts."""
    with (
        Workspace(job.store, "group", job.wait_seconds, must_exist=True, parts=job.settings.parts) as workspace,
        engine_for(job.settings, workspace) as pool,
    ):
        counts = group_into(workspace, job, pool, step, progress)
        finish(workspace, job.settings, step)
        return counts


def night(job: IngestJob, step: Step, progress: Progress) -> dict[str, Any]:
    """What a night does: ingest, then group, then keep, then publish once."""
    with (
        Workspace(job.store, "run", job.wait_seconds, parts=job.settings.parts) as workspace,
        engine_for(job.settings, workspace) as pool,
    ):
        read = ingest_into(workspace, job, pool, step, progress, "ingest", group_next=True)
        again = GroupJob(job.store, job.settings, recompute=job.request.recompute)
        grouped = group_into(workspace, again, pool, step, progress)
        kept = keep_into(workspace, KeepJob(job.store, job.settings), step)
        finish(workspace, job.settings, step)
        return {"ingest": read, "group": grouped, "keep": kept}


def group_into(workspace: Workspace, job: GroupJob, pool: Engine, step: Step, progress: Progress) -> dict[str, Any]:
    """The steps of a grouping in an open workspace, up to the end of its run; not published yet."""
    connection = workspace.connection
    if not job.recompute:
        refuse_mixed(connection, job.settings, ("parse", "canonical", "fingerprint", "verify", "keep"))
    work = find_work(connection, job.settings, job.everything)
    if work is None:
        return {"nothing_new": True}
    workspace.expect_publication()
    arguments = {"everything": job.everything}
    run = begin_run(connection, "group", arguments, work, job.settings.model_dump(mode="json"), job.recompute)
    step("compile kernels", compile_kernels, job.settings, progress)
    done = step("compare and group", group_records, workspace, run.run_id, job.settings, pool, progress, job.everything)
    return step("findings", _close, workspace, run, job.settings, done)


def _close(workspace: Workspace, run: Run, settings: Settings, done: GroupCounts) -> dict[str, Any]:
    connection = workspace.connection
    with transaction(connection):
        update_groups(connection, run.run_id, settings, compared=True)
        note_grouped(connection, run.run_id)
        lapse(connection, run.run_id)
        findings = find_all(connection, settings)
        record_settings(connection, settings, ("verify", "keep"))
        counts = {
            "compositions": done.compositions,
            "compared": done.compared,
            "matches": done.matches,
            "families": done.families,
            "groups": done.groups,
            "set_aside": done.set_aside,
            "findings": findings,
        }
        end_run(connection, run, counts)
    return {"run": run.run_id, **counts}
