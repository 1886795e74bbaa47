"""Peak memory of a night at several sizes, and what that comes to for a million records."""

from __future__ import annotations

from .collection import Kind
from .end_to_end import memory_figure
from .figures import Figure, Options, Report
from .night import nights

MILLION = 1_000_000


def run(options: Options) -> Report:
    """Memory of nights on N / 10, N / 2 and N records.

    What is said of a million is a straight line through the last two, unless a million was asked for. Below some 20,000
    records workers, libraries and chunks are still filling the memory, and the line says nothing;
    `end-to-end --records 1000000` tells.
    """
    large = options.count(20_000)
    repeat = options.times(3 if large <= 20_000 else 1)
    sizes = (large // 10, large // 2, large)
    done = [nights(options.scratch, Kind(), n, options.workers, repeat) for n in sizes]
    figures = [
        Figure(f"peak memory, {n} records", f.value, f.unit, f.least, f.greatest)
        for n, f in zip(sizes, map(memory_figure, done), strict=True)
    ]
    peaks = [f.value for f in figures]
    slope = (peaks[-1] - peaks[-2]) / (sizes[-1] - sizes[-2])
    figures.append(Figure("slope between the last two", slope * 2**20, "KiB/record"))
    if large < MILLION:
        expected = peaks[-1] + slope * (MILLION - large)
        figures.append(Figure(f"a million records, extrapolated from {large}", expected, "GiB", reach=4.0))
    else:
        figures.append(Figure("a million records", peaks[-1], "GiB", reach=4.0))
    last = done[-1][-1]
    told = {"records": ", ".join(map(str, sizes)), "processes": last.peak_processes, "memory as": last.measure}
    return Report("memory", told, tuple(figures))
