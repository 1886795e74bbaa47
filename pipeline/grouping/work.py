"""The work on one job of whole compositions: from Parquet to Parquet, in a worker."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import polars as pl
import pyarrow as pa
from numpy.typing import NDArray

from ..ingest.recompute import stored_batch
from ..model.batch import CrystalBatch, Ints
from ..settings import Settings
from ..store.manifest import Done
from ..store.parts import Part, files_there
from .composition import CROWDED, Grouping, Options, group_composition
from .earlier import Earlier, MayBeCrowded
from .pinned_matches import by_key, measured, verified_together
from .reasons import reasons
from .verification import NO_MATCH, Verified
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
    """One job: names and settings only."""

    number: int
    records: int
    """Of its compositions, whether or not they take part."""

    raw: Part
    """Parquet of the records that take part: composition, with its digest and number of records and keys, record_id,
    label, source, crystal_key, rank, whether the composition was grouped before and only added to, whether the record
    was grouped (old) and has more matches than are stored, and canonical form and matrix where they are asked for."""

    known: Part | None
    """Parquet of the matches that old records had, if any."""

    part: Part
    """Stem of the parts to write."""

    settings: Settings
    pins: tuple[PairPin, ...] = ()


PARTS = ("matches", "members", "summary", "dropped")


def parts_of(part: Part) -> tuple[Part, ...]:
    """The four parts of a job: rows of `matches`, without those known; one row a record with group, family, shift and
    strain at each grade, and whether it has more matches; one row a composition; and the known matches that are
    stored no longer."""
    return tuple(part.with_name(f"{part.name}.{name}.parquet") for name in PARTS)


def group_chunk(job: GroupJob) -> Done:
    """Group every composition of the job, unless its parts are there already."""
    frame = job.raw.frame()
    there = files_there(parts_of(job.part))
    if there is not None:
        return Done(len(frame), there)
    known = _NO_MATCHES if job.known is None else job.known.frame()
    done = [_grouped(rows, known, job) for rows in _bundles(frame, {pin.composition for pin in job.pins})]
    tables = (pl.concat(frames).to_arrow() for frames in zip(*done, strict=True))
    files = tuple(part.write(table) for part, table in zip(parts_of(job.part), tables, strict=True))
    return Done(len(frame), files)


def _bundles(frame: pl.DataFrame, pinned: set[str]) -> Iterator[pl.DataFrame]:
    """The rows of what is grouped in one call: a composition that is large or has pins by itself, all others with those
    of equally many species. Ascending by record id."""
    told = frame.with_columns(
        pl.col("records").gt(CROWDED).or_(pl.col("composition").is_in(list(pinned))).alias("alone"),
        pl.col("species").list.n_unique().max().over("composition").alias("kinds"),
    )
    alone = told.filter("alone").partition_by("composition", maintain_order=True)
    for rows in alone + told.filter(~pl.col("alone")).partition_by("kinds", maintain_order=True):
        yield rows.sort("record_id")


def _grouped(rows: pl.DataFrame, known: pl.DataFrame, job: GroupJob) -> tuple[pl.DataFrame, ...]:
    """The rows of PARTS of one bundle; of a composition that must be compared as a whole, that it must."""
    there = rows["species"].is_not_null().to_numpy()
    crystals = rows.filter(there)
    batch = stored_batch(crystals)
    ids = rows["record_id"].to_list()
    part = rows["composition"].rank("dense").to_numpy().astype(np.int64) - 1
    told = (pl.col(name).first() for name in ("digest", "records", "keys"))
    of_part = rows.group_by("composition").agg(*told, pl.col("added").first()).sort("composition")
    pins = [pin for pin in job.pins if pin.composition in set(of_part["composition"])] if job.pins else []
    together, refused = verified_together(batch, ids, pins, job.settings)
    options = Options(
        job.settings.mirror_images,
        "near",
        job.settings.fingerprint_k,
        job.settings.matches_per_record,
        together=tuple(pair.ids for pair in together),
        apart=tuple((pin.record_a, pin.record_b) for pin in pins if pin.kind == "apart"),
    )
    try:
        found = group_composition(
            batch,
            rows["crystal_key"].to_list(),
            ids,
            rows["rank"].to_list(),
            job.settings.tolerances,
            options,
            part if len(of_part) > 1 else None,
            _earlier(rows, known, there) if rows["added"].any() else None,
        )
    except MayBeCrowded:
        return _NO_MATCHES, _NO_MEMBERS, _summary(of_part, None, refused), _NO_PAIRS
    place = np.cumsum(there) - 1
    new = replace(found.matches, pairs=place[found.matches.pairs])
    matches = _matches_frame(crystals, batch, new, found.witnesses, job.settings)
    members = _members_frame(found).hstack(rows.sort("record_id").select("label", "source"))
    if pins:
        more = [_matches_frame(rows[p.places], p.batch, p.match, p.witness, job.settings) for p in together]
        matches = by_key(pl.concat([matches, *more]), rows)
        members = measured(members, matches, rows, job.settings.mirror_images == "separate")
    dropped = pl.DataFrame(
        {f"record_{end}": found.ids[found.dropped[:, i]].tolist() for i, end in enumerate("ab")},
        schema=_NO_PAIRS.schema,
    )
    return matches, members, _summary(of_part, found, refused), dropped


def _summary(of_part: pl.DataFrame, found: Grouping | None, refused: list[int]) -> pl.DataFrame:
    """One row a composition; found: None where it is to be compared as a whole."""
    most, close = (None, None) if found is None or found.crowding is None else found.crowding
    return of_part.with_columns(
        again=pl.lit(found is None),
        added=pl.col("added") & (found is not None and found.added),
        candidates=pl.Series(np.zeros(len(of_part), np.int64) if found is None else found.candidates),
        verified=pl.Series(np.zeros(len(of_part), np.int64) if found is None else found.verified),
        most_candidates=pl.lit(most, pl.Int64),
        close_pairs=pl.lit(close, pl.Int64),
        refused=pl.Series([refused] * len(of_part), dtype=pl.List(pl.Int64)),
    )


def _earlier(rows: pl.DataFrame, known: pl.DataFrame, there: NDArray[np.bool_]) -> Earlier:
    """What is known of the old records of a bundle."""
    place = rows.select("record_id", pl.int_range(pl.len(), dtype=pl.Int64).alias("place"))
    for end in ("a", "b"):
        known = known.join(
            place.rename({"record_id": f"record_{end}", "place": f"place_{end}"}), on=f"record_{end}",
            maintain_order="left",
        )  # fmt: skip
    grades = known["grade"].replace_strict(_GRADE_NAMES.tolist(), [0, 1, 2], default=NO_MATCH, return_dtype=pl.Int64)
    measures = ("largest_shift_angstrom", "strain", "proper_shift_angstrom", "proper_strain")
    shift, strain, proper_shift, proper_strain = (known[name].fill_null(np.nan).to_numpy() for name in measures)
    pairs = known.select("place_a", "place_b").to_numpy()
    return Earlier(
        rows["old"].to_numpy(), there, pairs, grades.to_numpy(), shift, strain, proper_shift, proper_strain,
        rows["more"].to_numpy(), int(rows["keys"].to_numpy().max()), _crowding(rows),
    )  # fmt: skip


def _crowding(rows: pl.DataFrame) -> tuple[int, int] | None:
    """Of a bundle of one composition, Grouping.crowding of the earlier grouping."""
    most, close = rows["most_candidates"][0], rows["close_pairs"][0]
    return None if most is None or close is None or rows["composition"].n_unique() > 1 else (int(most), int(close))


def _members_frame(found: Grouping) -> pl.DataFrame:
    columns: dict[str, Any] = {"record_id": found.ids.tolist(), "more": found.more}
    for grade, members in found.members.items():
        columns[f"{grade}_family"] = members.family_id.tolist()
        columns[f"{grade}_group"] = members.group_id.tolist()
        columns[f"{grade}_shift"] = members.witness_shift
        columns[f"{grade}_strain"] = members.witness_strain
    return pl.DataFrame(columns)


def _lists(values: np.ndarray[Any, Any], number: type[np.generic]) -> pl.Series:
    """(n, ...) as lists of a row each."""
    flat = np.ascontiguousarray(values, number).reshape(len(values), -1)
    return _cut(flat, np.arange(len(flat) + 1, dtype=np.int64) * flat.shape[1])


def _cut(values: np.ndarray[Any, Any], offsets: Ints) -> pl.Series:
    """Row i holds values[offsets[i]:offsets[i + 1]]."""
    return pl.Series(pl.from_arrow(pa.LargeListArray.from_arrays(pa.array(offsets), pa.array(values.reshape(-1)))))


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
_NO_MEMBERS = pl.DataFrame(
    schema={
        "record_id": pl.String,
        "more": pl.Boolean,
        **{
            f"{grade}_{name}": kind
            for grade in ("same", "near")
            for name, kind in zip(
                ("family", "group", "shift", "strain"), (pl.String, pl.String, pl.Float64, pl.Float64), strict=True
            )
        },
        "label": pl.String,
        "source": pl.String,
    }
)
_NO_PAIRS = pl.DataFrame(schema={"record_a": pl.String, "record_b": pl.String})


def _matches_frame(
    rows: pl.DataFrame, batch: CrystalBatch, match: Verified, witness: Witnesses, settings: Settings
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
    return pl.DataFrame(
        {
            "record_a": ids[first].tolist(),
            "record_b": ids[second].tolist(),
            "crystal_key_a": keys[first].tolist(),
            "crystal_key_b": keys[second].tolist(),
            "composition": rows["composition"].gather(first),
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
            "p_matrix": _lists(match.p_matrix, np.int32),
            "q_matrix": _lists(match.q_matrix, np.int32),
            "orthogonal": _lists(witness.orthogonal, np.float64),
            "shift_fractional": _lists(match.shift, np.float64),
            "pairing": _cut(witness.pairing.astype(np.int32), witness.offsets),
        },
        schema=_SCHEMA,
    )
