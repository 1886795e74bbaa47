"""The nightly flow as a Prefect server knows it, and the process that serves it."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress
from dataclasses import asdict
from pathlib import Path
from typing import Any

from prefect import flow
from prefect.client.orchestration import get_client
from prefect.client.schemas.objects import ConcurrencyLimitConfig, ConcurrencyLimitStrategy, State
from prefect.client.schemas.schedules import CronSchedule
from prefect.deployments.runner import EntrypointType  # type: ignore[attr-defined]
from prefect.exceptions import ObjectNotFound
from prefect.runner import Runner
from prefect.settings import get_current_settings
from prefect.states import Completed

from lattice_census.errors import UsageError, WorkError

from .night import Night, occurred, run_night
from .orchestrate import shown, task_step
from .progress import progress_for

FLOW = "run"


@flow(name=FLOW, persist_result=False, validate_parameters=False)
def nightly(night: dict[str, Any]) -> State[Any]:
    """Ingest, group, keep, publish and, where a folder is given, export; each step a task.

    night: the fields of Night. The run fails where something named by its fail_on occurred, after the store is
    published.
    """
    from .writing import night_text

    order = Night(**{**night, **{name: tuple(night[name]) for name in ("paths", "assignments", "fail_on")}})
    settings = order.resolved()
    with progress_for(True) as progress:
        counts = shown(FLOW, Path(order.store), run_night(order, settings, task_step, progress))
    there = occurred(order, counts)
    if there:
        raise WorkError(f"The store is published, and there are {', '.join(there)}.\n{night_text(counts)}")
    return Completed(message=night_text(counts))


def server_url() -> str:
    """Where the server is that Prefect is set to use. Raises UsageError where none is, WorkError where none answers."""
    url = get_current_settings().api.url
    if not url:
        raise UsageError(
            "A schedule needs a Prefect server that stays, and none is set (PREFECT_API_URL). Start one, and name it:\n"
            "  prefect server start\n"
            "  prefect config set PREFECT_API_URL=http://127.0.0.1:4200/api\n"
            "Or let cron or systemd keep the time, without a server: `lattice-census schedule ... --print crontab`."
        )
    with get_client(sync_client=True) as client:
        error = client.api_healthcheck()
    if error is not None:
        raise WorkError(
            f"No Prefect server answers at {url} ({type(error).__name__}). Start it with `prefect server start`, or "
            "set PREFECT_API_URL to where it is."
        )
    return url


def cron_schedule(cron: str, zone: str) -> CronSchedule:
    """The schedule; UsageError where Prefect does not take it."""
    try:
        return CronSchedule(cron=cron, timezone=zone)
    except ValueError as error:
        raise UsageError(f"--cron {cron!r}: Prefect does not take it: {error}") from error


def serve(night: Night, schedule: CronSchedule, name: str, tell: Callable[[str], None]) -> None:
    """Register the deployment run/NAME and serve it until the process is told to end.

    One run at a time: the server holds a second one back until the first has ended, also one that another process
    serves. tell: called with a line when runs can come. Raises UsageError where the server has a deployment of this
    name for another store.
    """
    import asyncio

    _refuse_other_store(name, night)
    runner = Runner(name=name, limit=1)
    runner.add_flow(
        nightly,
        name=name,
        schedule=schedule,  # type: ignore[arg-type]
        parameters={"night": asdict(night)},
        description=f"Read what is new into {night.store}, group, decide, publish.",
        concurrency_limit=ConcurrencyLimitConfig(limit=1, collision_strategy=ConcurrencyLimitStrategy.ENQUEUE),
        entrypoint_type=EntrypointType.MODULE_PATH,
    )
    tell(f"{FLOW}/{name}")
    with suppress(KeyboardInterrupt):
        asyncio.run(runner.start())


def _refuse_other_store(name: str, night: Night) -> None:
    with get_client(sync_client=True) as client:
        try:
            found = client.read_deployment_by_name(f"{FLOW}/{name}")
        except ObjectNotFound:
            return
    theirs = (found.parameters.get("night") or {}).get("store")
    if theirs != night.store and Path(str(theirs)).exists():
        raise UsageError(f"The server has a schedule {name!r} already, for {theirs}. Give another --name.")
