"""A small grouped store with one pair of each kind, for the tests of `check` and `witness`."""

from __future__ import annotations

import zipfile
from pathlib import Path
from typing import Any

import numpy as np

from lattice_census.flows.group import GroupJob, group
from lattice_census.flows.ingest import IngestJob
from lattice_census.flows.ingest import ingest as read
from lattice_census.ingest.progress import Silent, call_directly
from lattice_census.ingest.scan import IngestRequest
from lattice_census.settings import resolve_settings

from . import strategies as draw
from .tables_of_structures import text_of, write_csv


def moved(crystal: draw.Crystal, distance: float, site: int = 0) -> draw.Crystal:
    """One site moved by so many angstrom along x: of n sites it is shifted by (1 - 1/n) of that, mean removed."""
    cell, positions, tokens = crystal
    changed = positions.copy()
    changed[site] += np.array([distance, 0, 0]) @ np.linalg.inv(cell)
    return cell, changed, tokens


def strained(crystal: draw.Crystal, along: tuple[float, float, float]) -> draw.Crystal:
    """With so large logarithmic strains along x, y, z."""
    cell, positions, tokens = crystal
    return cell @ np.diag(np.exp(along)), positions, tokens


def labelled_crystals() -> dict[str, draw.Crystal]:
    """Crystals by label; the first letter names the family that they are made from, each in its own composition."""
    rng = np.random.default_rng(71)

    def base(kind: str, *elements: str) -> draw.Crystal:
        return draw.random_crystal(rng, kind, 4, elements, 1.6)

    key, near, same, window, alone = (
        base("oP", "K", "Cl"), base("aP", "Ga", "N"), base("mP", "Mg", "O"), base("aP", "Li", "F"),
        base("tI", "Si", "C"),
    )  # fmt: skip
    chiral = base("aP", "Si", "O")
    return {
        "k1": key,
        "k2": draw.disguise(rng, draw.supercell(key, np.diag([1, 2, 1])), 1),
        "n1": near,
        "n2": draw.disguise(rng, moved(near, 0.04), 1),
        "r1": same,
        "r2": moved(same, 0.004),
        "w1": window,
        "w2": draw.disguise(rng, moved(window, 0.08), 1),
        "alone": alone,
        "c1": chiral,
        "c-copy": chiral,
        "c-mirror": draw.disguise(rng, draw.mirror(moved(chiral, 0.02)), 1),
        "c-double": draw.disguise(rng, moved(draw.supercell(chiral, np.diag([1, 1, 2])), 0.03), 1),
        "c-triple": draw.disguise(rng, moved(draw.supercell(chiral, np.diag([3, 1, 1])), 0.03), 1),
        "c-large": (chiral[0] * 1.02, chiral[1], chiral[2]),
        "c-strained": strained(chiral, (0.02, -0.02, 0.0)),
        "c-moved": moved(chiral, 0.6),
        "c-farther": moved(chiral, 0.13),
    }


def make_proven_store(folder: Path) -> Path:
    """Ingest a folder of a table, single files and an archive, lose a file, and group; returns the store."""
    inputs = folder / "in"
    (inputs / "more").mkdir(parents=True)
    crystals = labelled_crystals()
    write_csv(inputs / "t.csv", [{"material_id": n, "cif": text_of(c, n), "batch": "b"} for n, c in crystals.items()])
    (inputs / "more" / "odd.cif").write_text("data_odd\n_cell_length_a 3\n")
    others = [draw.random_crystal(np.random.default_rng(72 + i), "hP", 3, ("Zn", "S")) for i in range(3)]
    with zipfile.ZipFile(inputs / "more" / "pack.zip", "w") as archive:
        archive.writestr("one.cif", text_of(others[0]))
        archive.writestr("deep/two.cif", text_of(others[1]))
        archive.writestr("deep/odd.cif", "data_odd\n_cell_length_a 3\n")
    (inputs / "gone.cif").write_text(text_of(others[2]))
    store = folder / "census.duckdb"
    run_ingest(store, inputs)
    (inputs / "gone.cif").unlink()
    run_ingest(store, inputs)
    run_group(store)
    return store


def run_ingest(store: Path, *paths: Path, **settings: Any) -> None:
    """`ingest` without an orchestrator."""
    resolved = resolve_settings({"workers": 1, "orchestrator": "direct", **settings}, {})
    read(IngestJob(store, IngestRequest(paths, None, {}, False), resolved, 0.0), call_directly, Silent())


def run_group(store: Path, recompute: bool = False, **settings: Any) -> dict[str, Any]:
    """`group` without an orchestrator."""
    resolved = resolve_settings({"workers": 1, "orchestrator": "direct", **settings}, {})
    return group(GroupJob(store, resolved, recompute=recompute), call_directly, Silent())
