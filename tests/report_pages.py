"""What the exams of the report share: a store with hostile labels, its page, many groups, and a reader of HTML."""

from __future__ import annotations

from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import numpy as np

from lattice_census.output.report import report_html
from lattice_census.output.report_groups import Groups
from lattice_census.store.connect import open_for_reading

from . import strategies as draw
from .proven_store import labelled_crystals, moved, run_group
from .tables_of_structures import text_of, write_csv

HOSTILE = "<img src=x onerror=alert(1)>"
SECTIONS = ("summary", "lattice-types", "map", "sizes", "tolerance", "groups", "pairs", "findings", "leakage",
            "refusals", "settings", "cautions")  # fmt: skip
OF_SOURCE = {"split_column": "split"}


def make_report_store(folder: Path) -> Path:
    """The crystals of the proven store, with hostile labels, file names and splits among them."""
    crystals = labelled_crystals()
    rows: list[dict[str, Any]] = [
        {"material_id": n, "cif": text_of(c), "split": "train" if i % 2 else "</script><b>"}
        for i, (n, c) in enumerate(crystals.items())
    ]
    base = draw.random_crystal(np.random.default_rng(9), "mP", 4, ("Zn", "O"), 1.7)
    copies = {HOSTILE: base, f"{HOSTILE}2": moved(base, 0.05), "evil</title>": moved(base, 0.02)}
    rows += [{"material_id": n, "cif": text_of(c), "split": "train"} for n, c in copies.items()]
    inputs = folder / "<i>in & out"
    inputs.mkdir()
    write_csv(inputs / "t<u>.csv", rows)
    (inputs / "<s>odd.cif").write_text("data_odd\n_cell_length_a 3\n")
    from lattice_census.flows.ingest import IngestJob, ingest
    from lattice_census.ingest.progress import Silent, call_directly
    from lattice_census.ingest.scan import IngestRequest
    from lattice_census.settings import resolve_settings

    resolved = resolve_settings({"workers": 1, "orchestrator": "direct"}, {})
    path = folder / "census.duckdb"
    ingest(IngestJob(path, IngestRequest((inputs,), None, OF_SOURCE, False), resolved, 0.0), call_directly, Silent())
    run_group(path)
    return path


def page_of(store: Path) -> str:
    """The report of a store."""
    connection = open_for_reading(store)
    try:
        return report_html(connection)
    finally:
        connection.close()


def many_groups(count: int) -> Groups:
    """Invented rows of the table of groups."""
    rng = np.random.default_rng(1)
    rows = [
        (f"some-source.csv:material-{i:06d}", "Ca2N4O8Ti3", "mS", "P2_1/c", int(2 + 40 / (i + 1)), 3,
         float(rng.random() * 0.05), float(rng.random() * 0.01), float(rng.random()), "test, train, validation",
         float(rng.random()), "energy_conflict")
        for i in range(count)
    ]  # fmt: skip
    return Groups("near", 0.05, 0.01, [f"{i:020x}" for i in range(count)], rows)


class Reader(HTMLParser):
    """Every element with its attributes, and whether open and closing tags balance."""

    VOID = frozenset({"meta", "input", "br", "link", "img", "use"})

    def __init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.wrong: list[str] = []
        self.words: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if tag in self.VOID:
            return
        if not self.open or self.open.pop() != tag:
            self.wrong.append(tag)

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] not in ("script", "style"):
            self.words.append(data)


def read(html: str) -> Reader:
    """All elements of a page."""
    reader = Reader()
    reader.feed(html)
    reader.close()
    return reader
