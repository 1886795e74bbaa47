"""Small collections with duplicates, and a night's run on them, for the exams of what a curator does."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from lattice_census.flows.group import GroupJob, night
from lattice_census.flows.group import group as group_steps
from lattice_census.flows.ingest import IngestJob
from lattice_census.flows.keeping import KeepJob
from lattice_census.flows.keeping import keep as keep_steps
from lattice_census.ingest.progress import Silent, call_directly
from lattice_census.ingest.scan import IngestRequest
from lattice_census.settings import resolve_settings
from lattice_census.store.stages import settings_of_store

from . import strategies
from .tables_of_structures import crystals, text_of

OF_SOURCE = {
    "energy_column": "energy", "energy_unit": "eV/site", "theory_column": "theory", "split_column": "split",
    "date_column": "date",
}  # fmt: skip

OPTIONS: dict[str, Any] = {"workers": 1, "orchestrator": "direct"}


def row(label: str, crystal: strategies.Crystal, **facts: Any) -> dict[str, Any]:
    """A row of a table: label, structure, and what is told of it."""
    plain = {"energy": None, "theory": None, "split": None, "date": None}
    return {"material_id": label, "cif": text_of(crystal), **plain, **facts}


def copies(count: int, each: int, seed: int = 5, noise: float = 0.01) -> list[tuple[int, int, strategies.Crystal]]:
    """(crystal, copy, structure): `count` different crystals, each as it is and `each` - 1 times disguised.

    Every second disguise is noisy (grade near), the others are exact (grade key).
    """
    rng = np.random.default_rng(seed)
    out = []
    for i, base in enumerate(crystals(count, seed)):
        for j in range(each):
            shaken = {"noise": noise, "strain": 0.001} if j % 2 == 0 else {}
            out.append((i, j, base if j == 0 else strategies.disguise(rng, base, 2, **shaken)))
    return out


def run_night(store: Path, *paths: Path, of_source: dict[str, Any] | None = None, **settings: Any) -> dict[str, Any]:
    """ingest, group, keep."""
    resolved = resolve_settings({**OPTIONS, **settings}, {}, stored=settings_of_store(store))
    request = IngestRequest(tuple(paths), None, OF_SOURCE if of_source is None else of_source)
    return night(IngestJob(store, request, resolved), call_directly, Silent())


def run_group(store: Path, **settings: Any) -> dict[str, Any]:
    """group."""
    recompute = settings.pop("recompute", False)
    resolved = resolve_settings({**OPTIONS, **settings}, {}, stored=settings_of_store(store))
    return group_steps(GroupJob(store, resolved, recompute=recompute), call_directly, Silent())


def run_keep(store: Path, **job: Any) -> dict[str, Any]:
    """keep."""
    resolved = resolve_settings(OPTIONS, {}, stored=settings_of_store(store))
    return keep_steps(KeepJob(store, resolved, **job), call_directly)


def names(store: Path) -> dict[str, str]:
    """Record id by label."""
    from .tables_of_structures import query

    return dict(query(store, "SELECT label, record_id FROM records"))
