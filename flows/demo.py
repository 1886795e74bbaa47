"""The command `demo`: an invented collection, read into a store, and a clean one taken out of it."""

from __future__ import annotations

import json
from pathlib import Path
from shlex import quote

import typer

from lattice_census.demo.collection import SETTINGS, make_collection, sources_of
from lattice_census.errors import UsageError
from lattice_census.ingest.scan import IngestRequest
from lattice_census.output.export import export
from lattice_census.settings import resolve_settings
from lattice_census.store.connect import open_for_reading

from .driving import drive
from .group import night
from .ingest import IngestJob


def run_demo(folder: Path, direct: bool, workers: int | None, quiet: bool, as_json: bool = False) -> int:
    """Make the collection, ingest all its sources in one run, export the kept records, and say what to try next.

    The folder gets collection/, manifest.json, demo.toml, census.duckdb and clean/. Raises UsageError where it is there
    already and not empty, or is a file.
    """
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise UsageError(f"{folder} is there already and not an empty folder: the demo makes a new one. Name another.")
    collection, settings_file, store = folder / "collection", folder / "demo.toml", folder / "census.duckdb"
    collection.mkdir(parents=True, exist_ok=True)
    manifest = make_collection(collection)
    manifest.write(folder / "manifest.json")
    settings_file.write_text(SETTINGS, encoding="utf-8")
    if not as_json:
        typer.echo(
            f"Made {collection}: {len(manifest.records)} records of an invented survey in "
            f"{len(sources_of(collection))} sources; what they are stands in {folder / 'manifest.json'}. "
            "No number in it is real."
        )
    # So few records are read sooner than worker processes begin.
    options = {"workers": 1 if workers is None else workers, "orchestrator": "direct" if direct else None}
    settings = resolve_settings(options, file=settings_file)
    job = IngestJob(store, IngestRequest(sources_of(collection)), settings)
    counts = drive("demo", settings.orchestrator, quiet, store, lambda step, progress: night(job, step, progress))
    clean = folder / "clean"
    connection = open_for_reading(store)
    try:
        exported = export(connection, clean)
    finally:
        connection.close()
    if as_json:
        facts = {"folder": str(folder), "records": len(manifest.records), "kept": exported.kept,
                 "set_aside": exported.set_aside, **counts}  # fmt: skip
        typer.echo(json.dumps(facts))
        return 0
    read, grouped = counts["ingest"], counts["group"]
    typer.echo(
        f"Read {read['found']} records: {read['accepted']} accepted, {read['rejected']} refused with a reason each."
    )
    typer.echo(
        f"Compared {grouped['compared']:,} pairs site by site: {grouped['families']['near']} families and "
        f"{grouped['groups']['near']} groups at grade near."
    )
    typer.echo("Findings: " + ", ".join(f"{code} {number}" for code, number in grouped["findings"].items()) + ".")

    typer.echo(f"Exported {clean}: {exported.kept} structures, and set_aside.csv with {exported.set_aside} rows.")
    typer.echo(_next_steps(folder, store, settings_file))
    return 0


def _next_steps(folder: Path, store: Path, settings_file: Path) -> str:
    """Three commands that show more of the store."""
    collection, in_store = quote(str(folder / "collection")), quote(str(store))
    return "\n".join(
        (
            "Try next:",
            f"  lattice-census survey --store {in_store}",
            f"  lattice-census ask energy-spread --store {in_store}",
            f"  lattice-census run {collection}/* --store {in_store} --settings {quote(str(settings_file))}",
        )
    )
