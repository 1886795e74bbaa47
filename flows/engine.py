"""Which engine does the work of a run: worker processes of this machine, or a Dask scheduler's."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from lattice_census.ingest.engine import Engine
from lattice_census.ingest.pool import WorkerPool
from lattice_census.settings import Settings
from lattice_census.store.workspace import Workspace


@contextmanager
def engine_for(settings: Settings, workspace: Workspace) -> Iterator[Engine]:
    """The engine that the settings name, for parts in the place of the workspace."""
    if settings.engine == "dask":
        from .dask_engine import dask_engine

        with dask_engine(settings, workspace.place) as elsewhere:
            yield elsewhere
        return
    with WorkerPool(settings.worker_count) as pool:
        yield pool
