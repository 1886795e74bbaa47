"""Distance distributions (k = 64) and their means, one core, against the plain twin on a few."""

from __future__ import annotations

import numpy as np

from lattice_census.fingerprint.distributions import column_means, distributions
from lattice_census.model.batch import CrystalBatch, select

from .figures import Options, Report
from .structures import canonical_of, mixed
from .timing import each, ratio, reference, timed


def run(options: Options) -> Report:
    """Time the fingerprint and check it."""
    batch, repeat = mixed(options, 2000), options.times(3)
    crystals = canonical_of(batch).crystals
    distributions(select(crystals, np.arange(1)))
    rows, seconds = timed(lambda: distributions(crystals, 64), repeat)
    _, means = timed(lambda: column_means(crystals, rows), repeat)
    for i in range(0, len(crystals), max(1, len(crystals) // 10)):
        np.testing.assert_allclose(rows.total[crystals.sites(i)], _plain(crystals, i, 64), atol=1e-8)
    theirs = reference(batch, repeat)
    return Report(
        "fingerprint",
        {"structures": len(batch), "sites_mean": f"{len(crystals.species) / len(crystals):.4g}", "k": 64},
        (
            each("distributions", seconds, len(batch)),
            each("means", means, len(batch)),
            ratio("fingerprint", seconds + means, len(batch), theirs),
        ),
    )


def _plain(crystals: CrystalBatch, i: int, k: int) -> np.ndarray:
    """The same by listing every site of a block of cells that is surely large enough."""
    cell, positions = crystals.cells[i], crystals.positions[crystals.sites(i)]
    reach = 4.0 * (k * abs(np.linalg.det(cell)) / len(positions)) ** (1 / 3)
    heights = abs(np.linalg.det(cell)) / np.linalg.norm(np.cross(cell[[1, 2, 0]], cell[[2, 0, 1]]), axis=1)
    spans = [np.arange(-n, n + 1) for n in np.ceil(reach / heights).astype(int) + 1]
    shifts = np.stack(np.meshgrid(*spans, indexing="ij"), -1).reshape(-1, 3)
    out = []
    for x in positions:
        lengths = np.linalg.norm((positions[None] + shifts[:, None] - x) @ cell, axis=-1).ravel()
        out.append(np.sort(lengths[lengths > 1e-6])[:k])
    return np.array(out)
