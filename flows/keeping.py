"""The steps of `keep`."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from lattice_census.decisions.holds import make_holds
from lattice_census.decisions.ledger import (
    KeepPlan,
    current_holds,
    decide,
    default_grade,
    held_records,
    plan_keep,
    planned_rows,
    release,
)
from lattice_census.grouping.update import settle_groups
from lattice_census.ingest.pool import WorkerPool
from lattice_census.ingest.progress import Silent, Step
from lattice_census.settings import Settings
from lattice_census.store.runs import begin_run, end_run
from lattice_census.store.stages import changed_stages, refuse_mixed, stored_settings
from lattice_census.store.transaction import transaction
from lattice_census.store.workspace import Workspace

from .ingest import finish


@dataclass(frozen=True, slots=True)
class KeepJob:
    """Everything that `keep` needs, and nothing open."""

    store: Path
    settings: Settings
    grade: str | None = None
    """None: near where it was computed, else key."""

    note: str | None = None
    again: tuple[str, ...] = ()
    """Records whose decisions were taken back and may be made again."""

    recompute: bool = False
    """Other keep rules than those of the stored groups are taken, and the groups brought up to date first."""

    dry_run: bool = False
    wait_seconds: float = 0.0


def keep(job: KeepJob, step: Step) -> dict[str, Any]:
    """Decide, publish, and return the counts; a dry run also returns what would change, row by row.

    With `recompute`, or in a dry run with other keep rules, the groups are brought up to date first (a dry run works on
    a copy that is thrown away).
    """
    with Workspace(job.store, "keep", job.wait_seconds, scratch=job.dry_run, must_exist=True) as workspace:
        if job.recompute or (job.dry_run and "keep" in changed_stages(workspace.connection, job.settings)):
            from .group import GroupJob, group_into

            with WorkerPool(1) as pool:
                group_into(workspace, GroupJob(job.store, job.settings, recompute=True), pool, step, Silent())
        settle_groups(workspace.connection, Settings.model_validate(stored_settings(workspace.connection)))
        counts = keep_into(workspace, job, step)
        if not job.dry_run:
            finish(workspace, job.settings, step)
        return counts


def keep_into(workspace: Workspace, job: KeepJob, step: Step) -> dict[str, Any]:
    """The steps of `keep` in an open workspace, up to the end of its run; not published yet."""
    connection = workspace.connection
    refuse_mixed(connection, job.settings, ("parse", "canonical", "fingerprint", "verify", "keep"))
    grade = job.grade or default_grade(connection)
    again = held_records(connection, job.again, grade)
    current_holds(connection, job.settings)
    plan = step("plan decisions", plan_keep, connection, job.settings, grade, again)
    if job.dry_run:
        return {**_counts(plan), "rows": planned_rows(connection, grade)}
    if plan.nothing and not again:
        return {"nothing_new": True, **_counts(plan)}
    arguments = {"grade": grade, "note": job.note, "again": again}
    run = begin_run(connection, "keep", arguments, plan.digest, job.settings.model_dump(mode="json"))
    with transaction(connection):
        decide(connection, run.run_id, plan, job.note)
        release(connection, run.run_id, again, grade)
        make_holds(connection, job.settings)
        end_run(connection, run, _counts(plan))
    return {"run": run.run_id, **_counts(plan)}


def _counts(plan: KeepPlan) -> dict[str, Any]:
    return {
        "grade": plan.grade,
        "set_aside": plan.new,
        "superseded": plan.superseded,
        "kept_again": plan.lapsed,
        "held": plan.held,
        "in_force": plan.in_force + plan.new - plan.lapsed,
    }
