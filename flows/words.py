"""Counts in words, as every command says them."""

from __future__ import annotations


def counted(count: int, word: str, plural: str | None = None) -> str:
    """`1 record`, `2 records`, `1,000 families` (with a plural of its own)."""
    return f"{count:,} {word if count == 1 else plural or word + 's'}"
