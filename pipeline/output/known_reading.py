"""New structures of any format, read and brought to their canonical form beside the store, without touching it."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from pathlib import Path

import polars as pl

from ..errors import UsageError
from ..ingest.engine import Engine
from ..ingest.progress import Progress
from ..ingest.reduce import ReduceJob, accepted_part, reduce_chunk, rejects_part
from ..ingest.scan import FileToRead, SourceToRead
from ..ingest.split import raw_chunks
from ..readers.walk import walk
from ..settings import Settings, SourceSettings
from ..store.parts import Part

ACCEPTED = (
    "place", "file", "position", "label", "content_hash", "crystal_key", "composition", "formula",
    "volume_angstrom3_per_site", "area_angstrom2_per_site", "cell_angstrom", "species", "positions_fractional",
    "periodicity",
)  # fmt: skip
REFUSED = ("place", "file", "position", "label", "reason", "message")


def read_new(
    paths: Sequence[Path],
    settings: Settings,
    of_source: Callable[[str], SourceSettings],
    pool: Engine,
    folder: Path,
    progress: Progress,
) -> tuple[pl.DataFrame, pl.DataFrame]:
    """The accepted (columns ACCEPTED) and the refused (columns REFUSED) records of files or folders; `place` counts
    them as they are read.

    of_source: where the tables of a path keep what, by the path's name. folder: an empty one for parts on their way.
    Raises UsageError for a path that is not there.
    """
    progress.start("reading", None)
    accepted, refused, begun = [], [], 0
    for job, done in pool.ordered_results(reduce_chunk, _jobs(paths, settings, of_source, folder)):
        where = job.raw.frame().select("file", "position").with_row_index("place", begun)
        begun += done.records
        part = accepted_part(job.part).frame()
        if len(part):
            accepted.append(part.join(where, on=["file", "position"]).select(ACCEPTED))
        refused.append(rejects_part(job.part).frame().join(where, on=["file", "position"]).select(REFUSED))
        for file in (job.raw, accepted_part(job.part), rejects_part(job.part)):
            file.unlink()
        progress.advance(done.records)
    return (
        pl.concat(accepted) if accepted else pl.DataFrame(),
        pl.concat(refused) if refused else pl.DataFrame(schema=dict.fromkeys(REFUSED, pl.String)),
    )


def _jobs(
    paths: Sequence[Path], settings: Settings, of_source: Callable[[str], SourceSettings], folder: Path
) -> Iterator[ReduceJob]:
    number = 0
    for path in paths:
        if not path.exists():
            raise UsageError(f"There is no file or folder {path}.")
        root = path.resolve()
        name = path.name or root.name
        told = of_source(name)
        prefix = f"{name}/" if root.is_dir() else ""
        for relative, place in walk(root):
            try:
                size, mark = place.stat().st_size, ""
            except OSError as error:
                size, mark = 0, f"unreadable: {error.strerror}"
            file = FileToRead(prefix + relative, place, mark, size, True)
            kind = "folder" if root.is_dir() else "file"
            source = SourceToRead(name, root, kind, told, (file,), (), True)
            for chunk in raw_chunks(source, settings):
                part = Part(str(folder), f"new-{number}")
                raw = part.with_name(part.name + ".raw.parquet")
                raw.write_frame(chunk.records)
                yield ReduceJob(number, raw, part, settings, told)
                number += 1
