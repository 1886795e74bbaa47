"""The work on one chunk: raw records to parsed, canonical crystals, written as two Parquet parts.

Runs in a worker; takes and returns names and counts. A part that is there is whole (store/parts.py), and named by the
digest of what it was made from.
"""

from __future__ import annotations

import hashlib
from collections import defaultdict
from dataclasses import dataclass
from typing import Any

import numpy as np
import polars as pl
import pyarrow as pa

from .. import __version__
from ..cell.canonical import CanonicalBatch, canonicalise
from ..lattice.layer import areas
from ..model.batch import CrystalBatch, select
from ..model.raw import ParseOptions
from ..model.refusals import Refusal
from ..model.species import formulas_of
from ..readers import reader_named
from ..settings import Settings, SourceSettings
from ..store.manifest import Done
from ..store.parts import Part, files_there, raw_and_part
from .energies import RecordFacts, record_facts

STAGE_VERSION = 1
"""Counts up whenever the same input would give other rows: parts of an older version are never taken over."""


@dataclass(frozen=True, slots=True)
class ReduceJob:
    """One chunk's work: names and settings only."""

    number: int
    raw: Part
    """Parquet of raw records (split.RAW_SCHEMA) that need work."""

    part: Part
    """Stem of the parts to write: PART.accepted.parquet and PART.rejects.parquet."""

    settings: Settings
    source: SourceSettings


def part_name(digest: str, left_out: list[str], settings: Settings, source: SourceSettings) -> str:
    """Name of a chunk's parts: digest of its raw records, of those left out as unchanged, and of the settings."""
    h = hashlib.sha256(f"{__version__}\0{STAGE_VERSION}\0{digest}\0{settings.of_stage('parse')}\0".encode())
    h.update(f"{settings.of_stage('canonical')}\0{source.model_dump()}\0".encode())
    h.update("\0".join(left_out).encode())
    return h.hexdigest()[:32]


def stored_job(place: str, kind: str, number: int, frame: pl.DataFrame, settings: Settings) -> ReduceJob:
    """A job on rows of the store: they are written down for a worker, and its part is named by what they are."""
    stages = ("parse", "canonical", "fingerprint")
    raw, part = raw_and_part(place, kind, frame, STAGE_VERSION, [settings.of_stage(stage) for stage in stages])
    return ReduceJob(number, raw, part, settings, SourceSettings())


def accepted_part(part: Part) -> Part:
    """The part of accepted records."""
    return part.with_name(part.name + ".accepted.parquet")


def rejects_part(part: Part) -> Part:
    """The part of refused records."""
    return part.with_name(part.name + ".rejects.parquet")


def reduce_chunk(job: ReduceJob) -> Done:
    """Do the work unless its parts are there already."""
    raw = job.raw.frame().with_row_index("row")
    there = files_there((rejects_part(job.part), accepted_part(job.part)))
    if there is not None:
        return Done(len(raw), there)
    rejects: list[tuple[int, Refusal]] = []
    accepted: list[pa.Table] = []
    refused = raw["reason"].to_list()
    readers = raw["reader"].to_list()
    by_reader: dict[str, list[int]] = defaultdict(list)
    for i, reason in enumerate(refused):
        if reason is not None:
            rejects.append((i, Refusal(reason, raw["message"][i], "read")))
        else:
            by_reader[readers[i]].append(i)
    texts = raw["text"].to_list()
    for name in sorted(by_reader):
        rows = by_reader[name]
        present = [i for i in rows if texts[i] is not None]
        rejects += [(i, Refusal("text_missing", "the structure column is empty")) for i in rows if texts[i] is None]
        parsed = reader_named(name).parse([texts[i] for i in present], ParseOptions(job.settings.max_sites))
        rejects += [(present[r], refusal) for r, refusal in parsed.refusals]
        canonical = canonicalise(parsed.batch, job.settings.tolerances)
        origin = [present[r] for r in parsed.rows]
        rejects += [(origin[r], refusal) for r, refusal in canonical.refusals]
        kept = [origin[r] for r in canonical.rows]
        if kept:
            given = select(parsed.batch, canonical.rows)
            facts = record_facts(
                raw["properties"].gather(kept).to_list(),
                [parsed.properties[r] for r in canonical.rows],
                np.diff(given.offsets),
                job.source,
            )
            accepted.append(_table(raw[kept], given, canonical, facts))
    rejects.sort(key=lambda r: r[0])
    where = raw.select("record_id", "file", "position", "label")
    refused_file = rejects_part(job.part).write(_rejects_table(where, rejects))
    table = pa.concat_tables(accepted).sort_by("row") if accepted else pa.table({"row": pa.array([], pa.uint32())})
    return Done(len(raw), (refused_file, accepted_part(job.part).write(table)))


def content_hashes(batch: CrystalBatch) -> list[str]:
    """SHA-256 of each crystal's cell, species, occupancies and positions as parsed, in order."""
    cells, positions = batch.cells + 0.0, batch.positions + 0.0  # -0.0 is 0.0
    out = []
    for i in range(len(batch)):
        h = hashlib.sha256(bytes([int(batch.periodicity[i])]))
        h.update(cells[i].tobytes())
        h.update("\0".join(batch.tokens_of(i)).encode())
        h.update(positions[batch.sites(i)].tobytes())
        out.append(h.hexdigest())
    return out


def _table(raw: pl.DataFrame, given: CrystalBatch, canonical: CanonicalBatch, facts: list[RecordFacts]) -> pa.Table:
    """One row a record, with every column of `records`, `structures` (given_*) and `canonical_forms`."""
    described = formulas_of(given)
    columns: dict[str, Any] = {
        "row": raw["row"].to_arrow(),
        "record_id": raw["record_id"].to_arrow(),
        "file": raw["file"].to_arrow(),
        "position": raw["position"].to_arrow(),
        "label": raw["label"].to_arrow(),
        "reader": raw["reader"].to_arrow(),
        "raw_hash": raw["raw_hash"].to_arrow(),
        "content_hash": pa.array(content_hashes(given)),
        "formula": pa.array([d.formula for d in described]),
        "formula_anonymous": pa.array([d.formula_anonymous for d in described]),
        "elements": pa.array([list(d.elements) for d in described], pa.list_(pa.string())),
        "composition": pa.array([d.composition for d in described]),
        "sites_given": pa.array(np.diff(given.offsets).astype(np.int32)),
        "periodicity": pa.array(given.periodicity),
        "energy_ev_per_site": pa.array([f.energy_ev_per_site for f in facts], pa.float64()),
        "theory": pa.array([f.theory for f in facts], pa.string()),
        "split": pa.array([f.split for f in facts], pa.string()),
        "record_date": pa.array([f.record_date for f in facts], pa.timestamp("us")),
        "properties": pa.array([f.properties for f in facts], pa.string()),
        "given_cell": fixed(given.cells),
        "given_species": token_lists(given),
        "given_positions": ragged(given.positions, given.offsets, 3),
        **crystal_columns(given, canonical),
    }
    return pa.table(columns)


def crystal_columns(given: CrystalBatch, canonical: CanonicalBatch) -> dict[str, Any]:
    """The columns of `canonical_forms`, and sites_primitive; `given` holds the accepted crystals alone."""
    crystal = canonical.crystals
    cells = crystal.cells
    edges = np.linalg.norm(cells, axis=2)
    sites = np.diff(crystal.offsets)
    layers = crystal.periodicity == 2  # the third row of theirs is only a frame
    columns: dict[str, Any] = {
        "sites_primitive": pa.array(sites.astype(np.int32)),
        "crystal_key": pa.array(canonical.crystal_key),
        "volume_angstrom3_per_site": pa.array(crystal.volumes / sites, mask=layers),
        "area_angstrom2_per_site": pa.array(areas(cells) / sites, mask=~layers),
        "supercell_index": pa.array(canonical.supercell_index.astype(np.int32)),
        "residual_angstrom": pa.array(canonical.residual),
        "pseudo_index": pa.array(canonical.pseudo_index.astype(np.int32)),
        "pseudo_residual_angstrom": pa.array(canonical.pseudo_residual),
        "cell_angstrom": fixed(cells),
        "species": token_lists(crystal),
        "positions_fractional": ragged(crystal.positions, crystal.offsets, 3),
        "matrix": fixed(canonical.multiplicity_matrix.astype(np.int32)),
        "rotation": fixed(canonical.rotation),
        "origin_fractional": fixed(canonical.origin),
        "site_map": ragged(canonical.site_map, given.offsets, 1),
        "site_shift": ragged(canonical.site_shift, given.offsets, 3),
        "pseudo_matrix": fixed(canonical.pseudo_matrix.astype(np.int32)),
    }
    for i, name in enumerate("abc"):
        columns[f"{name}_angstrom"] = pa.array(edges[:, i], mask=layers if name == "c" else None)
    for name, i, j in (("alpha", 1, 2), ("beta", 0, 2), ("gamma", 0, 1)):
        cosine = np.einsum("nx,nx->n", cells[:, i], cells[:, j]) / (edges[:, i] * edges[:, j])
        degrees = np.degrees(np.arccos(np.clip(cosine, -1, 1)))
        columns[f"{name}_deg"] = pa.array(degrees, mask=layers if name != "gamma" else None)
    return columns


def fixed(values: np.ndarray[Any, Any]) -> pa.Array:
    """(n, ...) as a fixed-size list column."""
    flat = np.ascontiguousarray(values).reshape(-1)
    return pa.FixedSizeListArray.from_arrays(pa.array(flat), int(np.prod(values.shape[1:])))


def ragged(values: np.ndarray[Any, Any], offsets: np.ndarray[Any, Any], width: int) -> pa.Array:
    """(m,) or (m, width) by crystal as a list column."""
    flat = np.ascontiguousarray(values).reshape(-1)
    return pa.LargeListArray.from_arrays(pa.array(offsets * width), pa.array(flat))


def token_lists(batch: CrystalBatch) -> pa.Array:
    """The species tokens of each crystal as a list column."""
    words = pa.DictionaryArray.from_arrays(pa.array(np.asarray(batch.species)), pa.array(batch.tokens, pa.string()))
    return pa.LargeListArray.from_arrays(pa.array(np.asarray(batch.offsets)), words.dictionary_decode())


def _rejects_table(where: pl.DataFrame, rejects: list[tuple[int, Refusal]]) -> pa.Table:
    rows = [i for i, _ in rejects]
    picked = where[rows]
    return pa.table(
        {
            "file": picked["file"].to_arrow(),
            "position": picked["position"].to_arrow(),
            "label": picked["label"].to_arrow(),
            "stage": pa.array([r.stage for _, r in rejects], pa.string()),
            "reason": pa.array([r.reason for _, r in rejects], pa.string()),
            "message": pa.array([r.message for _, r in rejects], pa.string()),
        }
    )
