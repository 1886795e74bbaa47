"""`python -m tests.bench PART [FILE]`: times a part, or all, and checks its answers; JSON on stdout, or a table."""

from __future__ import annotations

import argparse
import json
import platform
import sys
import tempfile
import time
import traceback
from collections.abc import Sequence
from importlib import import_module
from pathlib import Path
from typing import Any

from .figures import Options, Report, table

PARTS = {
    "read": "a table of CIF texts to parsed crystals",
    "reduce": "canonical form",
    "classify": "reduce, lattice type, space group once a distinct key, fingerprint",
    "fingerprint": "distance distributions and their means",
    "verify": "comparing candidate pairs, cubic metrics apart",
    "group": "grouping one composition",
    "store": "splitting, parts and commits",
    "ingest": "read, reduce and store, on one and two cores",
    "workers": "a night with two workers against one, and the same outcome",
    "copies": "many copies of one crystal, many crystals of one composition",
    "end-to-end": "a whole night against a known answer: stages, memory, store, groups",
    "grow": "ten times the records",
    "memory": "peak memory against the number of records",
    "nightly": "1 % new records on a grouped store",
    "start": "commands that read; compiling the kernels",
}
"""In the order in which `all` runs them. Nights on the same collection are shared; `nightly` goes on from the last."""


def main(words: Sequence[str] | None = None) -> int:
    """Run; exit code 1 where an answer is wrong (a figure that is not reached is told, no more)."""
    chosen = _parser().parse_args(words)
    names = list(PARTS) if chosen.part == "all" else [chosen.part]
    if chosen.part == "all" and (chosen.records or chosen.file):
        _parser().error("`all` runs every part at sizes of its own; give --records or FILE to single parts")
    with tempfile.TemporaryDirectory() as temporary:
        scratch = chosen.scratch or Path(temporary)
        scratch.mkdir(parents=True, exist_ok=True)
        options = Options(chosen.file, chosen.records, chosen.repeat, chosen.workers, scratch.absolute())
        reports, wrong = run_parts(names, options)
    if chosen.table:
        print(table(reports, wrong))
    else:
        told: dict[str, Any] = {"machine": {"cores": chosen.workers, "python": platform.python_version()}}
        told["parts"] = [r.as_json() for r in reports]
        told["wrong"] = [{"part": part, "message": message} for part, message in wrong]
        print(json.dumps(told, indent=2))
    return 1 if wrong else 0


def run_parts(names: Sequence[str], options: Options) -> tuple[list[Report], list[tuple[str, str]]]:
    """The reports of the parts that gave the right answer, and what was wrong with others; a line each on stderr."""
    reports, wrong = [], []
    for name in names:
        begun = time.perf_counter()
        try:
            reports.append(import_module(f"tests.bench.{name.replace('-', '_')}").run(options))
            outcome = "right"
        except AssertionError as error:
            wrong.append((name, (str(error).strip() or traceback.format_exc(limit=-1)).splitlines()[0]))
            outcome = "WRONG ANSWER: " + wrong[-1][1]
        print(f"{name}: {outcome}, {time.perf_counter() - begun:.1f} s", file=sys.stderr, flush=True)
    return reports, wrong


def _parser() -> argparse.ArgumentParser:
    told = "\n".join(f"  {name:12} {what}" for name, what in PARTS.items())
    parser = argparse.ArgumentParser(
        prog="python -m tests.bench", description=f"{__doc__}\n\nparts:\n{told}\n  all          every part",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )  # fmt: skip
    parser.add_argument("part", choices=[*PARTS, "all"], metavar="PART")
    parser.add_argument("file", type=Path, nargs="?", help="a real collection; without it an invented one")
    parser.add_argument("--records", type=int, help="size of an invented collection (each part has a default)")
    parser.add_argument("--repeat", type=int, help="how often each timing is taken; the median counts")
    parser.add_argument("--workers", type=int, default=2, help="worker processes of a night [2]")
    parser.add_argument("--scratch", type=Path, help="keep collections and stores in this folder, and use them again")
    parser.add_argument("--table", action="store_true", help="a table to read in place of JSON")
    return parser


if __name__ == "__main__":
    sys.exit(main())
