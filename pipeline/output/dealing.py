"""Splits that do not leak: whole families are dealt out, so that one crystal never stands in two sets."""

from __future__ import annotations

import hashlib
import math
from collections import Counter
from collections.abc import Mapping, Sequence

import duckdb
import polars as pl

from ..decisions.ledger import default_grade
from ..errors import UsageError


def parse_splits(text: str) -> dict[str, float]:
    """`train=0.8,val=0.1,test=0.1` as names and fractions, in that order; UsageError where it cannot be meant so."""
    fractions: dict[str, float] = {}
    for part in text.split(","):
        name, equals, number = (piece.strip() for piece in part.partition("="))
        try:
            fraction = float(number)
        except ValueError:
            fraction = math.nan
        if not equals or not name or not 0 < fraction <= 1:
            raise UsageError(f"--splits {text}: give names and fractions, like train=0.8,val=0.1,test=0.1.")
        if not all(c.isalnum() or c in "_-" for c in name):
            raise UsageError(f"--splits {text}: a name is made of letters, digits, _ and -.")
        if name in fractions:
            raise UsageError(f"--splits {text}: {name} stands twice.")
        fractions[name] = fraction
    if abs(math.fsum(fractions.values()) - 1) > 1e-9:
        raise UsageError(f"--splits {text}: the fractions add up to {math.fsum(fractions.values()):g}, not to 1.")
    return fractions


def deal(families: Sequence[str], fractions: Mapping[str, float], seed: int) -> list[str]:
    """The split of each record, from its family: families in the order of a hash of seed and id, each to the split that
    lacks most records.

    A pure function of the families, fractions and seed. With more records than fit one family, every split ends within
    the size of one family of its share.
    """
    sizes = Counter(families)
    order = sorted(sizes, key=lambda family: hashlib.sha256(f"{seed}\0{family}".encode()).digest())
    lacking = {name: fraction * len(families) for name, fraction in fractions.items()}
    chosen = {}
    for family in order:
        name = max(lacking, key=lambda split: lacking[split])
        chosen[family] = name
        lacking[name] -= sizes[family]
    return [chosen[family] for family in families]


def families_of(connection: duckdb.DuckDBPyConnection, records: pl.DataFrame) -> tuple[list[str], str]:
    """The family of each record, and the grade it was taken at: near where it was computed, else key.

    Raises UsageError where a record has none because its composition waits for `group`.
    """
    grade = default_grade(connection)
    known = dict(connection.execute("SELECT record_id, family_id FROM members WHERE grade = ?", [grade]).fetchall())
    waiting = sum(record not in known for record in records["record_id"])
    if waiting:
        raise UsageError(
            f"--splits: {waiting} of the records have no family of grade {grade} yet, so a split could leak. "
            "Give `lattice-census group` first."
        )
    return [known[record] for record in records["record_id"]], grade
