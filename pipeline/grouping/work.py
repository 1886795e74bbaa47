"""The work on one job of whole compositions: from Parquet to Parquet, in a worker."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl

from ..ingest.recompute import stored_batch
from ..ingest.reduce import write_part
from ..model.batch import CrystalBatch
from ..settings import Settings
from .composition import Grouping, Options, group_composition
from .pinned_matches import by_key, measured, verified_together
from .reasons import reasons
from .verification import Verified
from .witness import Witnesses

_GRADE_NAMES = np.array(["same", "near", "window"])


@dataclass(frozen=True, slots=True)
class PairPin:
    """A pin of two records of one composition."""

    composition: str
    pin_id: int
    kind: str
    """apart or together."""

    record_a: str
    record_b: str


@dataclass(frozen=True, slots=True)
class GroupJob:
    """One job: paths and settings only."""

    number: int
    raw: Path
    """Parquet of records: composition, digest, record_id, crystal_key, rank, canonical form, matrix."""

    part: Path
    """Stem of the parts to write."""

    settings: Settings
    pins: tuple[PairPin, ...] = ()


def matches_part(part: Path) -> Path:
    """The part with the rows of `matches`."""
    return part.with_name(part.name + ".matches.parquet")


def members_part(part: Path) -> Path:
    """The part with one row a record: group, family, shift and strain at each grade; whether it has more matches."""
    return part.with_name(part.name + ".members.parquet")


def summary_part(part: Path) -> Path:
    """The part with one row a composition; written last, so its presence says that all are there."""
    return part.with_name(part.name + ".summary.parquet")


def group_chunk(job: GroupJob) -> int:
    """Group every composition of the job, unless its parts are there already; returns the number of records."""
    frame = pl.read_parquet(job.raw)
    if summary_part(job.part).exists():
        return len(frame)
    matches, members, summary = [], [], []
    for (composition, digest), rows in frame.group_by(["composition", "digest"], maintain_order=True):
        batch = stored_batch(rows)
        pins = [pin for pin in job.pins if pin.composition == composition]
        ids = rows["record_id"].to_list()
        together, refused = verified_together(batch, ids, pins, job.settings)
        found = group_composition(
            batch,
            rows["crystal_key"].to_list(),
            ids,
            rows["rank"].to_list(),
            job.settings.tolerances,
            Options(
                job.settings.mirror_images,
                "near",
                job.settings.fingerprint_k,
                job.settings.matches_per_record,
                together=tuple(pair.ids for pair in together),
                apart=tuple((pin.record_a, pin.record_b) for pin in pins if pin.kind == "apart"),
            ),
        )
        frame_of = _matches_frame(str(composition), rows, batch, found.matches, found.witnesses, job.settings)
        of_members = _members_frame(found)
        if pins:
            more = [
                _matches_frame(str(composition), rows[p.places], p.batch, p.match, p.witness, job.settings)
                for p in together
            ]
            frame_of = by_key(pl.concat([frame_of, *more]), rows)
            of_members = measured(of_members, frame_of, rows, job.settings.mirror_images == "separate")
        matches.append(frame_of)
        members.append(of_members)
        summary.append(
            {
                "composition": composition,
                "digest": digest,
                "records": len(rows),
                "keys": rows["crystal_key"].n_unique(),
                "candidates": found.counts["candidates"],
                "verified": found.counts["verified"],
                "refused": refused,
            }
        )
    write_part(pl.concat(matches).to_arrow(), matches_part(job.part))
    write_part(pl.concat(members).to_arrow(), members_part(job.part))
    told = pl.DataFrame(summary, schema_overrides={"refused": pl.List(pl.Int64)}, infer_schema_length=None)
    write_part(told.to_arrow(), summary_part(job.part))
    return len(frame)


def _members_frame(found: Grouping) -> pl.DataFrame:
    columns: dict[str, Any] = {"record_id": found.ids.tolist(), "more": found.more}
    for grade, members in found.members.items():
        columns[f"{grade}_family"] = members.family_id.tolist()
        columns[f"{grade}_group"] = members.group_id.tolist()
        columns[f"{grade}_shift"] = members.witness_shift
        columns[f"{grade}_strain"] = members.witness_strain
    return pl.DataFrame(columns)


def _lists(values: np.ndarray[Any, Any], inner: Any) -> pl.Series:
    """(n, ...) as lists of a row each."""
    flat = np.ascontiguousarray(values).reshape(len(values), -1)
    return pl.Series(flat.tolist(), dtype=pl.List(inner))


_SCHEMA: dict[str, Any] = {
    "record_a": pl.String,
    "record_b": pl.String,
    "crystal_key_a": pl.String,
    "crystal_key_b": pl.String,
    "composition": pl.String,
    "grade": pl.String,
    "largest_shift_angstrom": pl.Float64,
    "rms_shift_angstrom": pl.Float64,
    "strain": pl.Float64,
    "shape_strain": pl.Float64,
    "volume_ratio": pl.Float64,
    "larger_record_id": pl.String,
    "mirrored": pl.Boolean,
    "improper": pl.Boolean,
    "proper_shift_angstrom": pl.Float64,
    "proper_strain": pl.Float64,
    "reason": pl.String,
    "p_matrix": pl.List(pl.Int32),
    "q_matrix": pl.List(pl.Int32),
    "orthogonal": pl.List(pl.Float64),
    "shift_fractional": pl.List(pl.Float64),
    "pairing": pl.List(pl.Int32),
}
_NO_MATCHES = pl.DataFrame(schema=_SCHEMA)


def _matches_frame(
    composition: str, rows: pl.DataFrame, batch: CrystalBatch, match: Verified, witness: Witnesses, settings: Settings
) -> pl.DataFrame:
    """The rows of `matches`. `rows` and `batch` are in ascending order of record id, as the result is."""
    pairs = match.pairs
    if not len(pairs):
        return _NO_MATCHES
    ids, keys = np.array(rows["record_id"].to_list()), np.array(rows["crystal_key"].to_list())
    first, second = pairs[:, 0], pairs[:, 1]
    given = np.array(rows["matrix"].to_list(), np.int64).reshape(-1, 3, 3)
    why = reasons(
        batch.cells[first], batch.cells[second], given[first], given[second], match.p_matrix, match.q_matrix,
        match.mirrored, np.zeros(len(pairs), bool), settings.near_strain,
    )  # fmt: skip
    grade = match.proper_grade if settings.mirror_images == "separate" else match.grade
    larger = np.where(match.larger == 0, ids[first], ids[second])
    pairing = [witness.pairing[witness.offsets[i] : witness.offsets[i + 1]].tolist() for i in range(len(pairs))]
    return pl.DataFrame(
        {
            "record_a": ids[first].tolist(),
            "record_b": ids[second].tolist(),
            "crystal_key_a": keys[first].tolist(),
            "crystal_key_b": keys[second].tolist(),
            "composition": [composition] * len(pairs),
            "grade": [_GRADE_NAMES[g] if g < len(_GRADE_NAMES) else None for g in grade.tolist()],
            "largest_shift_angstrom": match.largest_shift,
            "rms_shift_angstrom": match.rms_shift,
            "strain": match.strain,
            "shape_strain": match.shape_strain,
            "volume_ratio": match.volume_ratio,
            "larger_record_id": [w if m >= 0 else None for w, m in zip(larger.tolist(), match.larger, strict=True)],
            "mirrored": match.mirrored,
            "improper": match.improper,
            "proper_shift_angstrom": pl.Series(match.proper_shift).fill_nan(None),
            "proper_strain": pl.Series(match.proper_strain).fill_nan(None),
            "reason": why.tolist(),
            "p_matrix": _lists(match.p_matrix, pl.Int32),
            "q_matrix": _lists(match.q_matrix, pl.Int32),
            "orthogonal": _lists(witness.orthogonal, pl.Float64),
            "shift_fractional": _lists(match.shift, pl.Float64),
            "pairing": pl.Series(pairing, dtype=pl.List(pl.Int32)),
        },
        schema=_SCHEMA,
    )
