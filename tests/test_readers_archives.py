"""Archives, compressed files, folders, and which format a file is in."""

import bz2
import gzip
import io
import lzma
import os
import tarfile
import zipfile

import pytest

from lattice_census.model.raw import SplitOptions
from lattice_census.readers import READER_NAMES, reader_for, reader_named
from lattice_census.readers.archives import ArchiveLimits, open_members, open_records
from lattice_census.readers.detect import format_of_content, stem_of
from lattice_census.readers.walk import walk

from .broken_files import GOOD_CIF, GOOD_FRAME, HEADER, POSCAR

FILES = {
    "a.cif": GOOD_CIF.encode(),
    "inner/b.cif": GOOD_CIF.encode() * 2,
    "inner/deep/c.extxyz": GOOD_FRAME.encode() * 3,
    "POSCAR_x": POSCAR.encode(),
    "readme.md": b"# nothing",
}


def found(path, limits=None, **options):
    records = open_records(path, path.name, SplitOptions(), limits, **options)
    return [(f.file, f.reader, f.record.label, f.record.refusal and f.record.refusal.reason) for f in records]


def tar_bytes(files, mode="w"):
    buffer = io.BytesIO()
    with tarfile.open(fileobj=buffer, mode=mode) as archive:
        for name, content in files.items():
            info = tarfile.TarInfo(name)
            info.size = len(content)
            archive.addfile(info, io.BytesIO(content))
    return buffer.getvalue()


def zip_bytes(files):
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, content in files.items():
            archive.writestr(name, content)
    return buffer.getvalue()


@pytest.mark.parametrize(
    ("name", "content"),
    [
        ("all.zip", zip_bytes(FILES)),
        ("all.tar", tar_bytes(FILES)),
        ("all.tar.gz", tar_bytes(FILES, "w:gz")),
        ("all.tgz", tar_bytes({f"./{k}": v for k, v in FILES.items()}, "w:gz")),
        ("all.tar.bz2", tar_bytes(FILES, "w:bz2")),
        ("all.TAR.XZ", tar_bytes(FILES, "w:xz")),
    ],
)
def test_members_of_archives(tmp_path, name, content):
    (tmp_path / name).write_bytes(content)
    assert found(tmp_path / name) == [
        (f"{name}/a.cif", "cif", "a", None),
        (f"{name}/inner/b.cif", "cif", "b/good", None),
        (f"{name}/inner/b.cif", "cif", "b/good", None),
        (f"{name}/inner/deep/c.extxyz", "extxyz", "c/1", None),
        (f"{name}/inner/deep/c.extxyz", "extxyz", "c/2", None),
        (f"{name}/inner/deep/c.extxyz", "extxyz", "c/3", None),
        (f"{name}/POSCAR_x", "poscar", "POSCAR_x", None),
    ]
    assert [m.file for m in open_members(tmp_path / name, name) if m.reader is None] == [f"{name}/readme.md"]


@pytest.mark.parametrize(("suffix", "module"), [(".gz", gzip), (".bz2", bz2), (".xz", lzma)])
def test_compressed_files(tmp_path, suffix, module):
    path = tmp_path / f"a.v2.cif{suffix}"
    path.write_bytes(module.compress(GOOD_CIF.encode()))
    assert found(path) == [(path.name, "cif", "a.v2", None)]
    # Two compressed streams one after the other are one file (RFC 1952, 2.2).
    path.write_bytes(module.compress(GOOD_CIF.encode()) * 2)
    assert [r[2] for r in found(path)] == ["a.v2/good", "a.v2/good"]


def test_a_compressed_member_is_read_and_a_parquet_member_too(tmp_path):
    import pyarrow as pa
    import pyarrow.parquet as pq

    buffer = io.BytesIO()
    pq.write_table(pa.table({"id": ["k"], "cif": [GOOD_CIF]}), buffer)
    files = {"a.cif.gz": gzip.compress(GOOD_CIF.encode()), "t.parquet": buffer.getvalue()}
    for name, content in (("all.zip", zip_bytes(files)), ("all.tar", tar_bytes(files))):
        (tmp_path / name).write_bytes(content)
        assert found(tmp_path / name) == [
            (f"{name}/a.cif.gz", "cif", "a", None), (f"{name}/t.parquet", "parquet", "k", None)
        ]  # fmt: skip


SMALL = ArchiveLimits(member_bytes=5000, total_bytes=20_000, ratio=100, ratio_after=4000, members=50)


@pytest.mark.parametrize("pack", [zip_bytes, tar_bytes])
def test_limits_hold_by_counting_what_comes_out(tmp_path, pack):
    long = GOOD_CIF.encode() + os.urandom(6000).hex().encode()
    path = tmp_path / ("x.zip" if pack is zip_bytes else "x.tar")
    path.write_bytes(pack({"a.cif": GOOD_CIF.encode(), "b.cif": b"#" + long, "c.cif": GOOD_CIF.encode()}))
    assert [r[2:] for r in found(path, SMALL)] == [("a", None), ("b", "archive_unsafe"), ("c", None)]
    path.write_bytes(pack({f"{i:03}.cif": b"#" + os.urandom(1900).hex().encode() for i in range(10)}))
    reasons = [r[3] for r in found(path, SMALL)]
    assert reasons[:4] == [None] * 4 and reasons[-1] == "archive_unsafe" and len(reasons) < 8
    path.write_bytes(pack({f"{i:03}.cif": b"#" for i in range(60)}))
    reasons = [r[3] for r in found(path, SMALL)]
    assert len(reasons) == 51 and reasons[-1] == "archive_unsafe"


def test_a_zip_whose_header_lies_about_the_size_is_stopped(tmp_path):
    content = bytearray(zip_bytes({"a.cif": b"\n" * 100_000}))
    for at in (content.find(b"PK\x03\x04") + 22, content.find(b"PK\x01\x02") + 24):
        assert int.from_bytes(content[at : at + 4], "little") == 100_000
        content[at : at + 4] = (10).to_bytes(4, "little")
    (tmp_path / "x.zip").write_bytes(content)
    assert [r[3] for r in found(tmp_path / "x.zip")] == ["file_unreadable"]


def test_nothing_is_written_while_archives_are_read(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "all.tar").write_bytes(tar_bytes({**FILES, "../up.cif": b"x"}))
    before = sorted(tmp_path.rglob("*"))
    found(tmp_path / "all.tar")
    assert sorted(tmp_path.rglob("*")) == before and not (tmp_path.parent / "up.cif").exists()


def test_an_unknown_format_is_ignored_or_refused_where_it_was_named(tmp_path):
    (tmp_path / "notes.txt").write_text("nothing\n")
    (tmp_path / "crystals.txt").write_text(GOOD_CIF)
    assert found(tmp_path / "notes.txt") == []
    assert found(tmp_path / "notes.txt", explicit=True) == [("notes.txt", "", "notes.txt", "file_unreadable")]
    assert found(tmp_path / "crystals.txt") == []
    assert found(tmp_path / "crystals.txt", explicit=True) == [("crystals.txt", "cif", "crystals.txt", None)]


@pytest.mark.parametrize(
    ("name", "head", "reader"),
    [
        ("a.cif", b"", "cif"), ("A.CIF", b"", "cif"), ("a.mcif", b"", "cif"), ("a.csv.gz", b"", "csv"),
        ("a.tsv", b"", "csv"), ("a.parquet", b"", "parquet"), ("a.xyz", b"", "extxyz"), ("a.extxyz", b"", "extxyz"),
        ("POSCAR", b"", "poscar"), ("CONTCAR.relaxed", b"", "poscar"), ("run/POSCAR_2", b"", "poscar"),
        ("a.vasp", b"", "poscar"), ("a.jsonl", b'{"id": 1, "cif": "x"}', "jsonl"), ("a.jsonl", HEADER, "optimade"),
        ("a.json", b'{\n "data": [', "optimade"), ("a.json", b'{"x": 1}\n', "jsonl"), ("a.json", b"[1]", None),
        ("a.txt", b"# c\ndata_x\n_cell_length_a 1\n", "cif"), ("a.txt", GOOD_FRAME.encode(), "extxyz"),
        ("a", POSCAR.encode(), "poscar"), ("a", b"PAR1....", "parquet"), ("a", b"id,cif\n1,data_x\n", "csv"),
        ("a", b'id,cif\n1,"data_x\n', "csv"), ("a.png", b"\x89PNG\0", None), ("a.md", b"# words\n", None),
        ("POSCARS.md", b"", None),
    ],
)  # fmt: skip
def test_which_reader(name, head, reader):
    chosen = reader_for(name, head)
    assert (chosen.name if chosen else None) == reader


def test_every_reader_has_its_name():
    assert [reader_named(n).name for n in READER_NAMES] == list(READER_NAMES)
    assert format_of_content(b"") is None


@pytest.mark.parametrize(
    ("name", "stem"),
    [("a.cif", "a"), ("x/a.b.cif.gz", "a.b"), ("POSCAR", "POSCAR"), ("POSCAR.1", "POSCAR.1"), ("a.json", "a"),
     (".cif", ".cif"), ("a.unknown", "a.unknown"), ("x\\y\\b.vasp", "b")],
)  # fmt: skip
def test_stems(name, stem):
    assert stem_of(name) == stem


def test_folders_are_walked_in_one_order_without_hidden_files_and_loops(tmp_path):
    for name in ("b/2.cif", "b/10.cif", "a.cif", "B.cif", ".hidden/x.cif", "b/.x.cif", "c/d/e.cif"):
        (tmp_path / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / name).write_text("")
    (tmp_path / "c" / "loop").symlink_to(tmp_path)
    (tmp_path / "c" / "other").symlink_to(tmp_path / "b")
    (tmp_path / "c" / "gone").symlink_to(tmp_path / "nowhere")
    os.mkfifo(tmp_path / "pipe.cif")
    names = [name for name, _ in walk(tmp_path)]
    assert names == ["B.cif", "a.cif", "b/10.cif", "b/2.cif", "c/d/e.cif", "c/other/10.cif", "c/other/2.cif"]
    assert all((tmp_path / name).samefile(path) for name, path in walk(tmp_path))
    assert list(walk(tmp_path / "a.cif")) == [("a.cif", tmp_path / "a.cif")]
