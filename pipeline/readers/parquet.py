"""Parquet tables, read in batches of rows."""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Iterator, Sequence
from typing import BinaryIO

from ..model.raw import FileRefused, Parsed, ParseOptions, RawRecord, SplitOptions
from ..model.refusals import Refusal
from .tables import chosen_columns, parse_texts, record_of

BATCH_ROWS = 1024
"""Rows decoded at a time."""


class ParquetReader:
    """One structure a row."""

    name = "parquet"

    def split(self, stream: BinaryIO, stem: str, options: SplitOptions) -> Iterator[RawRecord]:
        """One record a row. A stream that cannot seek (an archive member) goes through a temporary file."""
        if stream.seekable():
            yield from self._rows(stream, options)
            return
        with tempfile.TemporaryFile() as spooled:
            shutil.copyfileobj(stream, spooled, 1 << 20)
            spooled.seek(0)
            yield from self._rows(spooled, options)

    def _rows(self, stream: BinaryIO, options: SplitOptions) -> Iterator[RawRecord]:
        import pyarrow as pa
        import pyarrow.parquet as pq

        number = 0
        try:
            table = pq.ParquetFile(stream)
            id_column, structure_column = chosen_columns(table.schema_arrow.names, options)
            for batch in table.iter_batches(batch_size=BATCH_ROWS):
                for values in batch.to_pylist():
                    number += 1
                    yield record_of(number, values, id_column, structure_column, options.max_text_bytes)
        except (pa.ArrowException, OSError, ValueError, OverflowError, MemoryError) as error:
            message = f"after row {number}: {str(error).splitlines()[0] if str(error) else type(error).__name__}"
            raise FileRefused(Refusal("file_unreadable", message, "read")) from None

    def parse(self, texts: Sequence[str | None], options: ParseOptions) -> Parsed:
        """Crystals of the texts of the structure column."""
        return parse_texts(texts, options)
