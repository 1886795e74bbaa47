"""`python -m tests.bench PART [FILE]`: times one part, as JSON on stdout."""

from __future__ import annotations

import argparse
import json
from importlib import import_module
from pathlib import Path

PARTS = {
    "ingest": "read, reduce and store of a table of structures",
    "reduce": "canonical form",
    "classify": "reduce, lattice type, space group once a distinct key, fingerprint",
    "fingerprint": "distance distributions",
    "verify": "comparing candidate pairs",
    "group": "grouping one composition",
}


def main() -> None:
    """Run one part."""
    parser = argparse.ArgumentParser(prog="python -m tests.bench", description=__doc__)
    parser.add_argument("part", choices=sorted(PARTS), help="; ".join(f"{k}: {v}" for k, v in PARTS.items()))
    parser.add_argument("file", type=Path, nargs="?", help="a collection to run on; without it an invented one")
    parser.add_argument("--repeat", type=int, default=3, help="how often each timing is taken")
    options = parser.parse_args()
    print(json.dumps(import_module(f"tests.bench.{options.part}").run(options.file, options.repeat), indent=2))


if __name__ == "__main__":
    main()
