"""New crystals against the store: by key first, then site by site against one record a key of their compositions.

The cost follows the new ones: of the store, only keys of their compositions are looked at, of these only those whose
volume and stored fingerprint the bound of grouping/candidates.py allows, and only these are read, prepared and
verified.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import duckdb
import numpy as np
import polars as pl
from scipy.spatial import cKDTree

from ..fingerprint.distributions import column_means, distributions
from ..grouping.additions import SIZE
from ..grouping.candidates import coordinates_agree, filtered, mean_coordinates, start_search, tree_columns
from ..grouping.preparation import transform_slack
from ..grouping.verification import NO_MATCH, Verified, verify
from ..grouping.window import Window, near_window
from ..ingest.progress import Progress
from ..ingest.recompute import stored_batch
from ..lattice.layer import areas
from ..model.batch import CrystalBatch, Floats, Ints
from ..settings import Settings

NAMES = ("same", "near", "window")

FIRST_TRIED = 200
"""Candidates of one new crystal that are verified at first, nearest in the fingerprint first; the others only where
none of these matches at the grade asked for."""

TOGETHER = 500
"""New crystals of one composition that are prepared together."""


@dataclass(frozen=True, slots=True)
class Neighbour:
    """The closest stored crystal of a new one."""

    record_id: str
    """The record with the smallest id of its key."""

    grade: str
    """same, near or window."""

    shift: float
    strain: float


def neighbours(
    connection: duckdb.DuckDBPyConnection, new: pl.DataFrame, settings: Settings, asked: str, progress: Progress
) -> dict[str, Neighbour]:
    """By key, the closest stored crystal within the window of every key of `new` that has one.

    new: one row a key that the store does not have, with composition, volume and canonical form. The closest is that of
    the strictest grade, then of the smallest shift and strain (where a crystal has more than FIRST_TRIED candidates:
    among those verified). Read-only, but for temporary tables.
    """
    if not len(new):
        return {}
    window = near_window(settings.tolerances)
    stored = _stored_keys(connection, new, window)
    found: dict[str, Neighbour] = {}
    progress.start("comparing", len(new))
    by_composition = {str(c): rows for (c,), rows in stored.group_by(["composition"], maintain_order=True)}
    for (composition,), rows in new.group_by(["composition"], maintain_order=True):
        there = by_composition.get(str(composition))
        for start in range(0, len(rows) if there is not None else 0, TOGETHER):
            if there is not None:
                part = rows.slice(start, TOGETHER)
                found |= _of_one_composition(connection, part, there, settings, window, asked)
        progress.advance(len(rows))
    return found


def _stored_keys(connection: duckdb.DuckDBPyConnection, new: pl.DataFrame, window: Window) -> pl.DataFrame:
    """One row a stored key of the compositions of `new` whose volume could match: composition, record_id, volume,
    means.

    |ln(V_A / V_B)| <= 3 s (candidates.py, step 2); the volume of a layer is its area.
    """
    factor = math.exp(3.0 * window.strain) * (1.0 + 1e-9)
    volume = pl.coalesce("volume_angstrom3_per_site", "area_angstrom2_per_site")
    touched = new.group_by("composition").agg(
        (volume.min() / factor).alias("low"), (volume.max() * factor).alias("high")
    )
    connection.register("touched", touched.to_arrow())
    try:
        frame: pl.DataFrame = connection.sql(
            f"SELECT s.composition, s.record_id, {SIZE.format('f')} AS volume, "
            "t.mean_distances_angstrom AS means "
            "FROM (SELECT r.composition, min(r.record_id) AS record_id FROM current_records r "
            "JOIN canonical_forms g USING (record_id) JOIN touched n ON n.composition = r.composition "
            f"AND {SIZE.format('g')} BETWEEN n.low AND n.high GROUP BY r.composition, g.crystal_key) s "
            "JOIN canonical_forms f USING (record_id) LEFT JOIN crystal_types t USING (crystal_key) "
            "ORDER BY s.composition, s.record_id"
        ).pl()
    finally:
        connection.unregister("touched")
    return frame


def _of_one_composition(
    connection: duckdb.DuckDBPyConnection,
    new: pl.DataFrame,
    stored: pl.DataFrame,
    settings: Settings,
    window: Window,
    asked: str,
) -> dict[str, Neighbour]:
    batch = stored_batch(new)
    pairs = _allowed_by_means(batch, stored, window)
    if not len(pairs):
        return {}
    wanted = np.unique(pairs[:, 1])
    forms = _canonical_forms(connection, [stored["record_id"][int(j)] for j in wanted])
    columns = ("cell_angstrom", "species", "positions_fractional", "periodicity")
    both = stored_batch(pl.concat([new.select(columns), forms.select(columns)], how="vertical_relaxed"))
    search = start_search(both, window)
    pairs = np.stack([pairs[:, 0], len(new) + np.searchsorted(wanted, pairs[:, 1])], axis=1)
    pairs = filtered(search.prepared, search.coordinates, pairs, search.slack)
    if not len(pairs):
        return {}
    matches = _verified(search.coordinates, pairs, asked, lambda p: verify(
        search.prepared, p, window, settings.mirror_images), settings.mirror_images == "separate")  # fmt: skip
    ids = forms["record_id"].to_list()
    keys = new["crystal_key"].to_list()
    found: dict[str, Neighbour] = {}
    for a, b, grade, shift, strain in matches:
        if keys[a] not in found:
            found[keys[a]] = Neighbour(ids[b - len(new)], NAMES[grade], shift, strain)
    return found


def _allowed_by_means(batch: CrystalBatch, stored: pl.DataFrame, window: Window) -> Ints:
    """Pairs (new, stored) that volumes and stored mean distances allow; all pairs with a key without a fingerprint."""
    means = column_means(batch, distributions(batch)).means
    k = means.shape[1]
    own = means.reshape(len(batch), -1, k)
    periods = int(batch.periodicity[0])
    per_site = (batch.volumes if periods == 3 else areas(batch.cells)) / np.diff(batch.offsets)
    has = stored["means"].list.len().fill_null(0).to_numpy() == own.shape[1] * k
    with_means, without = np.flatnonzero(has), np.flatnonzero(~has)
    pairs = [np.stack(np.meshgrid(np.arange(len(batch)), without, indexing="ij"), axis=-1).reshape(-1, 2)]
    if len(with_means):
        rows = stored[with_means]
        theirs = rows["means"].explode(empty_as_null=False).to_numpy().astype(np.float32).reshape(len(rows), -1, k)
        y_new = mean_coordinates(own, per_site, window, periods)
        y_stored = mean_coordinates(theirs, rows["volume"].to_numpy(), window, periods)
        slack = transform_slack(window.strain)
        columns = tree_columns(y_new.shape[1], k)
        balls = cKDTree(y_stored[:, columns]).query_ball_point(y_new[:, columns], slack, p=np.inf)
        first = np.repeat(np.arange(len(batch)), [len(ball) for ball in balls])
        second = np.concatenate([np.sort(np.asarray(ball, np.int64)) for ball in balls])
        near = np.stack([first, len(batch) + second], axis=1).astype(np.int64)
        near = near[coordinates_agree(np.concatenate([y_new, y_stored]), near, slack)]
        pairs.append(np.stack([near[:, 0], with_means[near[:, 1] - len(batch)]], axis=1))
    return np.concatenate(pairs).astype(np.int64)


def _canonical_forms(connection: duckdb.DuckDBPyConnection, ids: list[str]) -> pl.DataFrame:
    """Canonical forms of records, in the order of the ids."""
    connection.register("wanted", pl.DataFrame({"record_id": ids}).with_row_index("place").to_arrow())
    try:
        frame: pl.DataFrame = connection.sql(
            "SELECT w.record_id, f.cell_angstrom, f.species, f.positions_fractional, r.periodicity FROM wanted w "
            "JOIN canonical_forms f USING (record_id) JOIN records r USING (record_id) ORDER BY w.place"
        ).pl()
    finally:
        connection.unregister("wanted")
    return frame


def _verified(
    coordinates: Floats, pairs: Ints, asked: str, verify_pairs: Any, separate: bool
) -> list[tuple[int, int, int, float, float]]:
    """Matches (new, stored, grade, shift, strain), the closest of each new crystal first."""
    order = np.lexsort(
        (pairs[:, 1], np.abs(coordinates[pairs[:, 0]] - coordinates[pairs[:, 1]]).max(axis=1), pairs[:, 0])
    )
    pairs = pairs[order]
    starts = np.searchsorted(pairs[:, 0], pairs[:, 0])
    first = np.arange(len(pairs)) - starts < FIRST_TRIED
    limit = NAMES.index(asked) if asked in NAMES else -1
    rows = _rows(verify_pairs(pairs[first]), separate)
    done = {a for a, _, grade, _, _ in rows if grade <= limit}
    rest = pairs[~first]
    rest = rest[~np.isin(rest[:, 0], list(done))] if done else rest
    if len(rest):
        rows += _rows(verify_pairs(rest), separate)
    return sorted(rows, key=lambda m: (m[0], m[2], round(m[3], 9), round(m[4], 9), m[1]))


def _rows(found: Verified, separate: bool) -> list[tuple[int, int, int, float, float]]:
    grade = found.proper_grade if separate else found.grade
    shift = found.proper_shift if separate else found.largest_shift
    strain = found.proper_strain if separate else found.strain
    good = grade < NO_MATCH
    return list(
        zip(
            *(column.tolist() for column in found.pairs[good].T),
            grade[good].tolist(), shift[good].tolist(), strain[good].tolist(), strict=True,
        )
    )  # fmt: skip
