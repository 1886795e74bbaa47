"""Which format a file or a text is in: by its name, else by how it begins."""

from __future__ import annotations

import re

COMPRESSIONS = (".gz", ".bz2", ".xz")
"""Suffixes of files that are one compressed stream."""

_SUFFIXES = {
    ".cif": "cif",
    ".mcif": "cif",
    ".csv": "csv",
    ".tsv": "csv",
    ".parquet": "parquet",
    ".pq": "parquet",
    ".jsonl": "jsonl",
    ".ndjson": "jsonl",
    ".xyz": "extxyz",
    ".extxyz": "extxyz",
    ".vasp": "poscar",
    ".poscar": "poscar",
    ".contcar": "poscar",
}
_POSCAR_NAME = re.compile(r"(?:POSCAR|CONTCAR)(?:[._-].*)?")
_NUMBER = r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eEdD][-+]?\d+)?"
_THREE = rf"[ \t]*{_NUMBER}[ \t]+{_NUMBER}[ \t]+{_NUMBER}[^\n]*\n"
_POSCAR_TEXT = re.compile(rf"[^\n]*\n[ \t]*{_NUMBER}(?:[ \t]+{_NUMBER}){{0,2}}[^\n]*\n(?:{_THREE}){{3}}")
_XYZ_TEXT = re.compile(r"\s*\d+[ \t]*\r?\n[^\n]*(?:lattice|properties)\s*=", re.IGNORECASE)
_BLOCK = re.compile(r"^[ \t]*data_", re.IGNORECASE | re.MULTILINE)
_HEADER = re.compile(r"[^\n]*\b(?:cif|structure)\b[^\n]*\n")


def base_name(name: str) -> str:
    """The last part of a path (with / or \\), without the suffix of a compression."""
    base = re.split(r"[/\\]", name)[-1]
    for suffix in COMPRESSIONS:
        if base.lower().endswith(suffix) and len(base) > len(suffix):
            return base[: -len(suffix)]
    return base


def stem_of(name: str) -> str:
    """A file's name without folder, the suffix of a compression, and the suffix of its format."""
    base = base_name(name)
    dot = base.rfind(".")
    return base[:dot] if dot > 0 and base[dot:].lower() in (*_SUFFIXES, ".json") else base


def format_of_name(name: str) -> str | None:
    """The format that a name states: a reader's name, `json` (undecided), or None."""
    base = base_name(name)
    dot = base.rfind(".")
    suffix = base[dot:].lower() if dot >= 0 else ""
    if suffix in _SUFFIXES:
        return _SUFFIXES[suffix]
    if suffix == ".json":
        return "json"
    return "poscar" if _POSCAR_NAME.fullmatch(base) else None


def format_of_content(head: bytes) -> str | None:
    """The format that the first bytes of a file show, or None."""
    if head[:4] == b"PAR1":
        return "parquet"
    text = head.decode("utf-8", "replace").removeprefix("\ufeff")
    if "\0" in text:
        return None
    start = text.lstrip()[:1]
    if start in ("{", "["):
        return _json_format(text, lines=True)
    if _XYZ_TEXT.match(text):
        return "extxyz"
    if _BLOCK.search(text) and not _HEADER.match(text):
        return "cif"
    if _POSCAR_TEXT.match(text):
        return "poscar"
    return "csv" if _HEADER.match(text) and re.match(r"[^\n]*[,;\t]", text) else None


def _json_format(text: str, lines: bool) -> str | None:
    first = text.lstrip().split("\n", 1)[0]
    if '"x-optimade"' in first or ('"attributes"' in first and '"lattice_vectors"' in first):
        return "optimade"
    if '"data"' in text or '"lattice_vectors"' in text:
        return "optimade"
    return "jsonl" if lines and text.lstrip().startswith("{") and first.rstrip().endswith("}") else None


def format_of_file(name: str, head: bytes, by_content: bool = True) -> str | None:
    """The reader's name for a file: by its name, then by its content (unless that is not asked for).

    JSON lines and .json files are always looked into, since the suffix does not tell a table from OPTIMADE entries.
    """
    named = format_of_name(name)
    if named in ("jsonl", "json"):
        text = head.decode("utf-8", "replace").removeprefix("\ufeff")
        if named == "json":
            return _json_format(text, lines=by_content)
        first = text.lstrip().split("\n", 1)[0]
        entries = '"x-optimade"' in first or ('"attributes"' in first and '"lattice_vectors"' in first)
        return "optimade" if entries else "jsonl"
    return named or (format_of_content(head) if by_content else None)


def format_of_text(text: str | None) -> str:
    """The format of a structure text in a table: CIF unless it plainly is another."""
    if text is None:
        return "cif"
    start = text[:2000]
    stripped = start.lstrip()
    if stripped[:5].lower() == "data_" or stripped[:1] in ("#", "_"):
        return "cif"
    if stripped[:1] == "{":
        return "optimade"
    if _XYZ_TEXT.match(start):
        return "extxyz"
    if not _BLOCK.search(start) and _POSCAR_TEXT.match(start):
        return "poscar"
    return "cif"
