"""Memory does not grow with the file, and time grows with it no faster than it does."""

import io
import time
import tracemalloc

import pytest

from lattice_census.model.raw import ParseOptions, SplitOptions
from lattice_census.readers import reader_named

from .broken_files import GOOD_CIF, GOOD_FRAME

PADDING = "# made up, to fill the file\n" * 40


class Endless(io.RawIOBase):
    """A stream that makes its content up as it is read: a beginning, then one piece over and over."""

    def __init__(self, begin: bytes, piece: bytes, size: int) -> None:
        self._begin, self._piece = begin, piece * max(1, 65536 // len(piece))
        self._left, self._rest = max(1, (size - len(begin)) // len(self._piece)), begin

    def readable(self) -> bool:
        return True

    def readinto(self, buffer) -> int:
        if not self._rest and self._left:
            self._left -= 1
            self._rest = self._piece
        part, self._rest = self._rest[: len(buffer)], self._rest[len(buffer) :]
        buffer[: len(part)] = part
        return len(part)


CIF_ROW = '"' + PADDING + GOOD_CIF + '"'
SITE = "Si" + " 0.123456789012345" * 3 + " " * 200 + "\n"
STREAMS = {
    "csv": (b"cif,energy\n", f"{CIF_ROW},1.5\n".encode()),
    "cif": (b"", (GOOD_CIF + PADDING).encode()),
    "extxyz": (b"", GOOD_FRAME.replace("1\n", "20\n", 1).replace("Si 0 0 0\n", SITE * 20).encode()),
    "jsonl": (b"", b'{"cif": "' + PADDING.replace("\n", "\\n").encode() + b'"}\n'),
    "optimade": (
        b'{"x-optimade": {}}\n',
        b'{"id": "a", "attributes": {"note": "' + b"x" * 1000 + b'"}}\n',
    ),
}


@pytest.mark.parametrize("name", STREAMS)
def test_a_file_of_30_megabytes_is_split_in_a_few(name):
    size = 30_000_000
    stream = io.BufferedReader(Endless(*STREAMS[name], size))
    count = refused = 0
    tracemalloc.start()
    try:
        for record in reader_named(name).split(stream, "file", SplitOptions()):
            count += 1
            refused += record.refusal is not None
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert count > 5_000 and not refused
    assert peak < 4_000_000


@pytest.mark.parametrize("name", ["csv", "cif", "jsonl", "extxyz", "poscar"])
def test_a_text_beyond_the_limit_is_not_held(name):
    # Lines, and one line without an end.
    pieces = [b"0 0 0 1" + b" " * 500 + b"\n", b"0 0 0 1 "]
    if name == "jsonl":
        pieces = pieces[1:]
    begin = {"csv": b'cif\n"', "cif": b"data_x\n", "extxyz": b"2\nLattice=", "jsonl": b'{"cif": "'}.get(name, b"")
    for piece in pieces:
        stream = io.BufferedReader(Endless(begin, piece, 20_000_000))
        tracemalloc.start()
        try:
            reasons = set()
            try:
                for record in reader_named(name).split(stream, "file", SplitOptions(max_text_bytes=500_000)):
                    reasons.add(record.refusal and record.refusal.reason)
            except Exception as refused:
                reasons.add(refused.refusal.reason)
            peak = tracemalloc.get_traced_memory()[1]
        finally:
            tracemalloc.stop()
        assert reasons and None not in reasons
        assert peak < 6_000_000, piece


def test_the_time_to_parse_follows_the_number_of_texts_and_sites():
    reader = reader_named("cif")
    reader.parse([GOOD_CIF], ParseOptions())

    def seconds(texts):
        best = 1e9
        for _ in range(3):
            start = time.perf_counter()
            assert len(reader.parse(texts, ParseOptions(100_000)).rows) == len(texts)
            best = min(best, time.perf_counter() - start)
        return best

    assert seconds([GOOD_CIF] * 4000) < 16 * seconds([GOOD_CIF] * 500)
    rows = "".join(f"Si{i} Si {i / 20000} {i % 7 / 7} {i % 11 / 11} 1\n" for i in range(20_000))
    large, small = GOOD_CIF + rows, GOOD_CIF + "".join(rows.splitlines(keepends=True)[:2500])
    assert seconds([large]) < 24 * seconds([small])
