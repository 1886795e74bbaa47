"""The work folder of a store: lock, work store, parts; and the way back to the published file."""

from __future__ import annotations

import json
import os
import shutil
import uuid
from contextlib import suppress
from pathlib import Path
from types import TracebackType
from typing import Any

import duckdb

from ..errors import StoreError
from .connect import has_store, no_store, open_for_reading, open_for_writing
from .copy_ahead import LEAST, CopyAhead
from .lock import WriterLock
from .manifest import Manifest
from .parts import empty_place, make_place, place_named
from .publish import mark_of, publish
from .rows import one_number, one_row
from .schema import migrate
from .stages import stored_settings
from .transaction import transaction


class Workspace:
    """The right to write to a store. Use as a context; nothing is visible to readers before `publish`.

    The folder FILE.work/ holds `work.duckdb` (the store that is worked on), `parts/` (results of chunks on their way,
    unless they are kept elsewhere), `manifest.jsonl` (which of them are whole), `lock`, `published.json` (how the
    published file looked when it was last put in place), and in a long run `next.duckdb` (the file to be published).
    """

    def __init__(
        self,
        published: Path,
        command: str,
        wait_seconds: float = 0.0,
        scratch: bool = False,
        must_exist: bool = False,
        parts: str | None = None,
    ) -> None:
        """scratch: work on a copy that is thrown away at the end (a dry run). must_exist: make no new store.

        parts: a folder or URL in which parts are kept, in a folder of this store's own; None: in the work folder.
        """
        self.published = published.absolute()
        self.folder = self.published.with_name(self.published.name + ".work")
        self.work_file = self.folder / "work.duckdb"
        self.place = str(self.folder / "parts")
        self._parts = parts
        self._scratch = scratch
        self._must_exist = must_exist
        self._lock = WriterLock(self.folder / "lock", command, wait_seconds)
        self._connection: duckdb.DuckDBPyConnection | None = None
        self._manifest: Manifest | None = None
        self._ahead: CopyAhead | None = None

    def __enter__(self) -> Workspace:
        if self.published.is_dir():
            raise StoreError(f"{self.published} is a folder; --store names a file.")
        if self._must_exist and not has_store(self.published):
            raise no_store(self.published)
        try:
            self._lock.__enter__()
        except OSError as error:
            raise StoreError(f"The work folder {self.folder} cannot be written: {error.strerror}.") from error
        try:
            self._settle_which_store()
            if self._scratch:
                self._work_on_a_copy()
            self._connection = open_for_writing(self.work_file)
            migrate(self._connection)
            self._connection.execute(
                "INSERT INTO store_facts SELECT 'store_id', ? "
                "WHERE NOT EXISTS (SELECT 1 FROM store_facts WHERE name = 'store_id')",
                [uuid.uuid4().hex],
            )
            self._connection.execute("SET preserve_insertion_order = true")
            self._choose_place()
        except BaseException:
            self.__exit__(None, None, None)
            raise
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        if self._connection is not None:
            with suppress(duckdb.Error):
                self._connection.close()
            self._connection = None
        if self._ahead is not None:
            self._ahead.__exit__(kind, error, at)
            self._ahead = None
        if self._scratch:
            if self._manifest is not None and self._parts:
                empty_place(self.place)
            shutil.rmtree(self.folder / "scratch", ignore_errors=True)
        self._lock.__exit__(None, None, None)

    @property
    def connection(self) -> duckdb.DuckDBPyConnection:
        """The one connection to the work store; for use in the thread that drives the run."""
        if self._connection is None:
            raise RuntimeError("the workspace is not open")
        return self._connection

    @property
    def manifest(self) -> Manifest:
        """The parts that are done and not yet in the store."""
        if self._manifest is None:
            raise RuntimeError("the workspace is not open")
        return self._manifest

    @property
    def ahead_of_published(self) -> bool:
        """True where the work store holds runs that the published file does not."""
        marked = self._published_facts()
        newest = one_number(self.connection, "SELECT max(run_id) FROM runs")
        return marked.get("mark") != mark_of(self.published) or marked.get("run") != newest

    @property
    def mostly_in_log(self) -> bool:
        """True where more of the work store stands in its write-ahead log than in the file."""
        log = self.work_file.with_name(self.work_file.name + ".wal")
        return log.exists() and log.stat().st_size > self.work_file.stat().st_size

    def expect_publication(self) -> None:
        """Begin to copy the published file for the publication that this run will end in, where that saves time."""
        if (
            self._ahead is None
            and not self._scratch
            and self.published.exists()
            and (self.published.stat().st_size >= LEAST)
        ):
            self._ahead = CopyAhead(self.published, self.folder / "next.duckdb")
            self._ahead.__enter__()

    def publish(self) -> None:
        """Count the publication, checkpoint, and put a copy in the place of the published file."""
        connection = self.connection
        with transaction(connection):
            number = 1 + one_number(connection, "SELECT value FROM store_facts WHERE name = 'publication'")
            connection.execute("DELETE FROM store_facts WHERE name = 'publication'")
            connection.execute("INSERT INTO store_facts VALUES ('publication', ?)", [str(number)])
        newest = one_number(connection, "SELECT max(run_id) FROM runs")
        settings = stored_settings(connection)
        connection.execute("CHECKPOINT")
        connection.close()
        self._connection = None
        ahead = self._ahead is not None and self._ahead.brought_up_to(self.work_file)
        publish(self.work_file, self.published, self.folder / "next.duckdb" if ahead else None)
        if self._ahead is not None:
            self._ahead.__exit__(None, None, None)
            self._ahead = None
        self._write("settings.json", settings)
        self._write("published.json", {"mark": mark_of(self.published), "run": newest})
        self._connection = open_for_writing(self.work_file)

    def clear_parts(self) -> None:
        """Remove the results of chunks that are all in the store by now."""
        self.manifest.clear()
        empty_place(self.place)
        make_place(self.place)

    def _choose_place(self) -> None:
        """Where parts are kept, and the manifest of those that are done; it stays on this machine."""
        folder = self.work_file.parent
        if self._parts:
            row = one_row(self.connection, "SELECT value FROM store_facts WHERE name = 'store_id'")
            store_id = row[0] if row else ""
            self.place = f"{place_named(self._parts)}/census-{store_id[:16]}{'-dry' if self._scratch else ''}"
        make_place(self.place)
        self._manifest = Manifest(folder / "manifest.jsonl", folder / "fetched")

    def _settle_which_store(self) -> None:
        """Go on from the work store, or from the published file where only that is there.

        A published file that another program or a restored backup put in place is told by its mark and then by the
        identity inside it, read from a copy, since a reader elsewhere may hold a lock on the file itself.
        """
        mark = mark_of(self.published)
        if not self.work_file.exists():
            if mark is not None:
                self._copy_published_to(self.work_file)
            return
        if mark is None or mark == self._published_facts().get("mark"):
            return
        copy = self.folder / "published-copy.duckdb"
        try:
            self._copy_published_to(copy)
            theirs, ours = _identity(copy), _identity(self.work_file)
        finally:
            copy.unlink(missing_ok=True)
        if theirs[0] != ours[0] or theirs[1] > ours[1] or theirs[1] < ours[1] - 1:
            raise StoreError(
                f"{self.published} is not the file that the work folder {self.folder} last published (it is "
                f"publication {theirs[1]} of store {theirs[0][:8]}, the folder holds {ours[1]} of {ours[0][:8]}). "
                "To go on from the file, move the folder away; to go on from the folder, move the file away."
            )

    def _write(self, name: str, facts: dict[str, Any]) -> None:
        temporary = self.folder / f"{name}.new"
        temporary.write_text(json.dumps(facts), encoding="utf-8")
        temporary.replace(self.folder / name)

    def _published_facts(self) -> dict[str, Any]:
        try:
            facts = json.loads((self.folder / "published.json").read_text(encoding="utf-8"))
        except (OSError, ValueError):
            return {}
        return facts if isinstance(facts, dict) else {}

    def _work_on_a_copy(self) -> None:
        scratch = self.folder / "scratch"
        shutil.rmtree(scratch, ignore_errors=True)
        scratch.mkdir()
        if self.work_file.exists():
            # Opened and closed first, so that a write-ahead log left by a kill is in the file that is copied.
            open_for_writing(self.work_file).close()
            shutil.copyfile(self.work_file, scratch / "work.duckdb")
        self.work_file = scratch / "work.duckdb"
        self.place = str(scratch / "parts")

    def _copy_published_to(self, target: Path) -> None:
        temporary = target.with_name(f"{target.name}.{os.getpid()}.new")
        try:
            shutil.copyfile(self.published, temporary)
            open_for_reading(temporary).close()
            temporary.replace(target)
        except StoreError as error:
            raise StoreError(str(error).replace(str(temporary), str(self.published))) from error
        finally:
            temporary.unlink(missing_ok=True)


def _identity(path: Path) -> tuple[str, int]:
    """(store_id, publication) of a store file."""
    connection = open_for_reading(path)
    try:
        facts = dict(connection.execute("SELECT name, value FROM store_facts").fetchall())
        return facts.get("store_id", ""), int(facts.get("publication", "0"))
    finally:
        connection.close()
