"""Matches of compositions with pins: the verified pairs of pins `together`, and rows of `matches` by key again.

A record that a pin names is a node of its own in the grouping, also beside records of its key. In `matches`, a pair of
keys stands once, each key by its record with the smallest id, whether or not pins name records of it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import polars as pl

from ..model.batch import CrystalBatch, select
from ..settings import Settings
from .preparation import prepare
from .verification import NO_MATCH, Verified, verify
from .window import near_window
from .witness import Witnesses, witnesses


class Pin(Protocol):
    """What is asked of a pin."""

    @property
    def pin_id(self) -> int:
        """Its number."""

    @property
    def kind(self) -> str:
        """apart or together."""

    @property
    def record_a(self) -> str:
        """The record with the smaller id."""

    @property
    def record_b(self) -> str:
        """The other."""


@dataclass(frozen=True, slots=True)
class PinnedPair:
    """A pair pinned together that matches in the window."""

    ids: tuple[str, str]
    places: list[int]
    """Rows of the composition."""

    batch: CrystalBatch
    """The two crystals."""

    match: Verified
    witness: Witnesses


def verified_together(
    batch: CrystalBatch, ids: list[str], pins: Iterable[Pin], settings: Settings
) -> tuple[list[PinnedPair], list[int]]:
    """The pairs pinned together that match in the window, and the numbers of the pins that do not."""
    window = near_window(settings.tolerances)
    good, refused = [], []
    for pin in pins:
        if pin.kind != "together":
            continue
        places = [ids.index(pin.record_a), ids.index(pin.record_b)]
        two = select(batch, np.array(places, dtype=np.int64))
        prepared = prepare(two, window)
        found = verify(prepared, np.array([[0, 1]]), window, settings.mirror_images)
        grade = found.proper_grade if settings.mirror_images == "separate" else found.grade
        if int(grade[0]) < NO_MATCH:
            pair = (pin.record_a, pin.record_b)
            good.append(PinnedPair(pair, places, two, found, witnesses(prepared, found, window)))
        else:
            refused.append(pin.pin_id)
    return good, refused


def by_key(matches: pl.DataFrame, rows: pl.DataFrame) -> pl.DataFrame:
    """Rows of `matches`, one a pair of distinct keys, standing by the records of the keys with the smallest ids."""
    stands = dict(rows.group_by("crystal_key").agg(pl.col("record_id").min()).iter_rows())
    chosen: dict[tuple[str, str], dict[str, Any]] = {}
    listed = sorted(matches.iter_rows(named=True), key=lambda m: (m["record_a"], m["record_b"]))
    for row in listed:
        if row["crystal_key_a"] == row["crystal_key_b"]:
            continue  # equal keys need no witness
        if stands[row["crystal_key_a"]] > stands[row["crystal_key_b"]]:
            row = _turned(row)
        pair = (row["crystal_key_a"], row["crystal_key_b"])
        if pair in chosen:
            continue
        larger = row["larger_record_id"]
        if larger is not None:
            larger = stands[pair[0] if larger == row["record_a"] else pair[1]]
        ends = {"record_a": stands[pair[0]], "record_b": stands[pair[1]], "larger_record_id": larger}
        chosen[pair] = row | ends
    ordered = sorted(chosen.values(), key=lambda m: (m["record_a"], m["record_b"]))
    return pl.DataFrame(ordered, schema=matches.schema)


def _turned(row: dict[str, Any]) -> dict[str, Any]:
    """The match from b to a: P and Q change places, the pairing and the orthogonal part are inverted (witness.py)."""
    shift = -np.array(row["shift_fractional"])
    pairing = np.empty(len(row["pairing"]), np.int64)
    pairing[np.array(row["pairing"])] = np.arange(len(pairing))
    return row | {
        "record_a": row["record_b"],
        "record_b": row["record_a"],
        "crystal_key_a": row["crystal_key_b"],
        "crystal_key_b": row["crystal_key_a"],
        "p_matrix": row["q_matrix"],
        "q_matrix": row["p_matrix"],
        "orthogonal": np.array(row["orthogonal"]).reshape(3, 3).T.ravel().tolist(),
        "shift_fractional": (shift - np.floor(shift + 5e-10)).tolist(),
        "pairing": pairing.tolist(),
    }


def measured(members: pl.DataFrame, matches: pl.DataFrame, rows: pl.DataFrame, separate: bool) -> pl.DataFrame:
    """Members with the shift and strain that `matches` states for their key and that of the kept record."""
    columns = ("proper_shift_angstrom", "proper_strain") if separate else ("largest_shift_angstrom", "strain")
    stated: dict[tuple[str, str], tuple[float, float]] = {}
    for a, b, shift, strain in matches.select("crystal_key_a", "crystal_key_b", *columns).iter_rows():
        stated[a, b] = stated[b, a] = (shift, strain)
    keys = dict(rows.select("record_id", "crystal_key").iter_rows())
    changed = {}
    for grade in ("same", "near"):
        pairs = list(zip(members["record_id"], members[f"{grade}_group"], strict=True))
        found = [(0.0, 0.0) if keys[a] == keys[b] else stated[keys[a], keys[b]] for a, b in pairs]
        changed[f"{grade}_shift"] = pl.Series([shift for shift, _ in found], dtype=pl.Float64)
        changed[f"{grade}_strain"] = pl.Series([strain for _, strain in found], dtype=pl.Float64)
    return members.with_columns(**changed)
