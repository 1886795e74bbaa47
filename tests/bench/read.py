"""Reading a table of CIF texts: from the file to parsed crystals, one core."""

from __future__ import annotations

import numpy as np

from .collection import Kind
from .figures import Options, Report
from .ingest import read_and_reduce, table
from .structures import invented
from .timing import each, ratio, reference


def run(options: Options) -> Report:
    """Time the reading; what is read is what was written, to the eight digits of the text."""
    repeat = options.times(3)
    batch, _, read, _ = read_and_reduce(options, repeat)
    path = table(options)
    if options.file is None:
        made = invented(Kind(), len(batch)).batch
        assert (batch.offsets == made.offsets).all()
        assert [batch.tokens[c] for c in batch.species] == [made.tokens[c] for c in made.species]
        gap = batch.positions - made.positions
        assert np.abs(gap - np.rint(gap)).max() < 1e-8, "positions are not those of the table"
        np.testing.assert_allclose(batch.volumes, made.volumes, rtol=1e-6)
    theirs = reference(batch, repeat)
    size = path.stat().st_size / 1e6
    return Report(
        "read",
        {"file": path.name, "structures": len(batch), "megabytes": f"{size:.4g}"},
        (
            each("read", read, len(batch)),
            each("reference", theirs, 1),
            ratio("read", read, len(batch), theirs),
        ),
    )
