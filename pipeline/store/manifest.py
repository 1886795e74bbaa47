"""The manifest: which jobs are done, and what the files of each part were when they were written.

Only the process that writes the store keeps it, in the work folder, a JSON line an entry; the step that writes to the
store takes parts by it alone, and only as they stand in it. A kill may cut its last line off: that job is done again,
which is short where its part is there.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import asdict, dataclass
from pathlib import Path

from ..errors import WorkError
from .parts import Part, PartFile


@dataclass(frozen=True, slots=True)
class Done:
    """What comes back from the work on a job: numbers and names."""

    records: int
    """Records that the job held."""

    files: tuple[PartFile, ...]


class Manifest:
    """The entries of a run that are not yet in the store."""

    def __init__(self, path: Path, fetched: Path) -> None:
        """path: the file with the entries. fetched: folder for copies of parts that lie elsewhere, made when needed."""
        self._path = path
        self._fetched = fetched
        self._entries = _read(path)  # by place and name: a run may be taken up with another place

    def find(self, part: Part) -> Done | None:
        """The entry of a part, None where it is not listed."""
        return self._entries.get(str(part))

    def rows(self, part: Part) -> dict[str, int]:
        """Rows of each file of a listed part, by its name."""
        return {file.name: file.rows for file in self._entries[str(part)].files}

    def add(self, part: Part, done: Done) -> None:
        """List a part as done."""
        self._entries[str(part)] = done
        self._append({"part": str(part), "records": done.records, "files": [asdict(f) for f in done.files]})

    def checked(self, part: Part) -> Part:
        """The listed part on this machine, every file compared with its entry.

        Raises WorkError naming the file that is missing, or is not what was written; its part is struck off and
        removed then, so that the next run makes it anew.
        """
        done = self._entries.get(str(part))
        if done is None:
            raise WorkError(f"The part {part} is not in the manifest {self._path}: it is not known to be whole.")
        local = Part(str(self._fetched), part.name) if part.is_remote else part
        for file in done.files:
            there = part.with_name(file.name)
            wrong = self._compare(there, file, local)
            if wrong is not None:
                self.drop(part)
                raise WorkError(
                    f"The part {there} {wrong}. Nothing of it is in the store; give the same command again and it is "
                    "made anew."
                )
        return local

    def drop(self, part: Part) -> None:
        """Strike a part off and remove its files: it is in the store by now, or not to be used."""
        done = self._entries.pop(str(part), None)
        if done is None:
            return
        self._append({"part": str(part), "dropped": True})
        for file in done.files:
            part.with_name(file.name).unlink()
            if part.is_remote:
                (self._fetched / file.name).unlink(missing_ok=True)

    def clear(self) -> None:
        """Begin anew."""
        self._entries.clear()
        self._path.unlink(missing_ok=True)

    def _compare(self, there: Part, file: PartFile, local: Part) -> str | None:
        """What is wrong with a file, None where it is as listed; a remote one is copied into the local place."""
        try:
            if there.is_remote:
                data = there.data()
                digest = hashlib.sha256(data).hexdigest()
            else:
                with there.path.open("rb") as f:
                    digest = hashlib.file_digest(f, "sha256").hexdigest()
        except FileNotFoundError:
            return "is listed as done and is not there"
        if digest != file.sha256:
            return "is not what was written (its checksum is another)"
        if there.is_remote:
            self._fetched.mkdir(parents=True, exist_ok=True)
            local.with_name(file.name).path.write_bytes(data)
        return None

    def _append(self, entry: dict[str, object]) -> None:
        with self._path.open("a", encoding="utf-8") as f:
            f.write(json.dumps(entry) + "\n")


def _read(path: Path) -> dict[str, Done]:
    """The entries that are still listed. A line that a kill cut short is left out, and out of the file."""
    entries: dict[str, Done] = {}
    try:
        lines = path.read_bytes().splitlines(keepends=True)
    except FileNotFoundError:
        return entries
    whole = 0
    for line in lines:
        try:
            entry = json.loads(line)
            if not line.endswith(b"\n"):
                break
            if entry.get("dropped"):
                entries.pop(entry["part"], None)
            else:
                entries[entry["part"]] = Done(entry["records"], tuple(PartFile(**f) for f in entry["files"]))
        except (ValueError, KeyError, TypeError):
            break
        whole += len(line)
    with path.open("r+b") as f:
        f.truncate(whole)
    return entries
