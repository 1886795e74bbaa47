"""Layers through the whole product: read, grouped, proved, examined, known again, exported and read once more."""

from __future__ import annotations

import csv
import json
import shutil
from pathlib import Path

import duckdb
import gemmi
import numpy as np
import pytest

from lattice_census.output.check import check_store
from lattice_census.output.export import export
from lattice_census.output.extxyz import extxyz_text
from lattice_census.output.overlay import overlay
from lattice_census.output.report import report_html
from lattice_census.output.survey import survey
from lattice_census.output.witness import examine, witness_text, write_witness
from lattice_census.store.connect import open_for_reading

from .curated import names, run_night
from .strategies import disguise_layer, random_layer
from .tables_of_structures import query, whole_store
from .test_known import ask_known
from .test_layer_form import built, flipped, janus, mirrored
from .test_layer_matches import longer_edge, moved_site


def frames(listed: dict) -> str:
    """Extended XYZ of layers; a label that ends in `bulk` is periodic in three directions."""
    return "".join(
        extxyz_text(*c, label, periodicity=3 if label.endswith("bulk") else 2) for label, c in listed.items()
    )


def collection() -> dict:
    rng = np.random.default_rng(900)
    graphene, chiral = built("graphene"), random_layer(rng, "mp", 4)
    tall = (graphene[0] * np.array([[1], [1], [3]]), graphene[1] * [1, 1, 1 / 3], graphene[2])
    return {
        "graphene": graphene,
        "graphene-tall": tall,
        "graphene-bulk": graphene,
        "mos2-1": disguise_layer(rng, built("MoS2"), 4, 0.02, 0.002),
        "mos2-2": disguise_layer(rng, built("MoS2"), 3, 0.02, 0.002),
        "janus": janus(),
        "janus-down": disguise_layer(rng, flipped(janus())),
        "chiral": chiral,
        "chiral-noisy": disguise_layer(rng, chiral, 2, 0.02, 0.002),
        "chiral-image": disguise_layer(rng, mirrored(chiral), 2),
        "chiral-moved": moved_site(chiral, 0.6),
        "chiral-longer": longer_edge(chiral, 1.02),
        "unclear": (np.diag([4.0, 5, 12]), np.array([[0, 0, 0], [0, 0, 0.5]]), ["C", "C"]),
    }


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("layers")
    (folder / "layers.xyz").write_text(frames(collection()), encoding="utf-8")
    run_night(folder / "census.duckdb", folder / "layers.xyz", of_source={})
    return folder / "census.duckdb"


def test_groups_and_refusals(store: Path):
    rows = query(
        store, "SELECT r.label, k.label FROM members m JOIN records r USING (record_id) JOIN records k "
        "ON k.record_id = m.family_id WHERE m.grade = 'near'",
    )  # fmt: skip
    families = {}
    for label, family in rows:
        families.setdefault(family, set()).add(label)
    assert sorted(map(sorted, families.values())) == [
        ["chiral", "chiral-image", "chiral-noisy"],
        ["chiral-longer"],
        ["chiral-moved"],
        ["graphene", "graphene-tall"],
        ["graphene-bulk"],
        ["janus", "janus-down"],
        ["mos2-1", "mos2-2"],
    ]
    assert query(store, "SELECT label, reason, stage FROM rejects") == [("unclear", "layer_unclear", "canonical")]
    assert query(store, "SELECT DISTINCT composition FROM records WHERE label LIKE 'graphene%' ORDER BY 1") == [
        ("C",), ("C layer",),
    ]  # fmt: skip


def test_columns_of_layers(store: Path):
    """Graphene: 2.46 angstrom, layer group p6/mmm (80), 2.62 square angstrom a site (from the plane cell)."""
    columns = (
        "lattice_type, crystal_lattice_type, layer_group, space_group, area_angstrom2_per_site, "
        "volume_angstrom3_per_site, c_angstrom, alpha_deg, beta_deg, gamma_deg, pearson"
    )
    where = "FROM records JOIN crystals USING (record_id) WHERE label = ?"
    found = query(store, f"SELECT {columns} {where}", "graphene")[0]
    assert found[:4] == ("hp", "hp", 80, None)
    assert found[4] == pytest.approx(2.46**2 * np.sqrt(0.75) / 2)
    assert found[5:9] == (None,) * 4 and found[9] == pytest.approx(120) and found[10] is None
    bulk = query(store, f"SELECT {columns} {where}", "graphene-bulk")[0]
    assert bulk[:4] == ("hP", "hP", None, 191) and bulk[4] is None and None not in bulk[5:]
    assert query(store, f"SELECT layer_group {where}", "janus") == [(69,)]
    assert query(store, "SELECT count(*) FROM matches WHERE strain > 0.005 OR volume_ratio > 1.01") == [(0,)]


def test_every_check_holds_and_sees_a_site_on_the_wrong_side(store: Path, tmp_path: Path):
    with open_for_reading(store) as connection:
        found = {o.name: o for o in check_store(connection, 1000)}
    assert not any(o.failures for o in found.values())
    damaged = shutil.copy(store, tmp_path / "census.duckdb")
    connection = duckdb.connect(str(damaged))
    # A third row too many is taken off the first site of every layer: only the audit can know.
    connection.execute(
        "UPDATE canonical_forms SET site_shift = list_concat(site_shift[:2], [site_shift[3] + 1], site_shift[4:]) "
        "WHERE record_id IN (SELECT record_id FROM records WHERE periodicity = 2)"
    )
    connection.close()
    with open_for_reading(Path(damaged)) as again:
        failing = {o.name for o in check_store(again, 1000) if o.failures}
    assert failing == {"witnesses-of-matches", "witnesses-of-keys"}


def test_the_witness_of_a_pair(store: Path, tmp_path: Path):
    ids = names(store)
    with open_for_reading(store) as connection:
        noisy = examine(connection, ids["mos2-1"], ids["mos2-2"])
        image = examine(connection, ids["chiral"], ids["chiral-image"])
        apart = {
            label: examine(connection, ids[first], ids[label])
            for first, label in (
                ("graphene", "graphene-bulk"), ("chiral", "chiral-moved"), ("chiral", "chiral-longer"),
                ("chiral", "janus"),
            )
        }  # fmt: skip
    text = witness_text(noisy, 20)
    assert "layer, 2.9" in text and "Å2/site" in text and "area ratio" in text and "height (Å)" in text
    heights = [abs(float(line.split()[5])) for line in text.splitlines() if " Mo " in line or " S " in line]
    assert heights and max(heights) < 4
    assert noisy.match is not None and noisy.match.grade == "near"
    assert image.match is not None and image.match.mirrored
    causes = {label: found.apart.cause for label, found in apart.items() if found.apart is not None}
    assert causes["graphene-bulk"] == "periodicity" and causes["janus"] == "composition"
    assert causes["chiral-longer"] == "lattice" and causes["chiral-moved"] in ("means", "columns", "rows", "shift")
    write_witness(noisy, tmp_path / "proof")
    first, second = (gemmi.read_small_structure(str(tmp_path / "proof" / f"{side}.cif")) for side in "ab")
    assert first.cell.c == pytest.approx(3.19 + 6, abs=0.1) and second.cell.c == pytest.approx(first.cell.c)
    gaps = []
    for p, q in zip(first.sites, second.sites, strict=True):
        assert p.type_symbol == q.type_symbol
        gaps.append((first.cell.orthogonalize(p.fract) - first.cell.orthogonalize(q.fract)).length())
    assert max(gaps) == pytest.approx(noisy.match.largest_shift, rel=0.02)
    sides = json.loads((tmp_path / "proof" / "witness.json").read_text())
    assert sides["a"]["volume_angstrom3_per_site"] is None and sides["a"]["area_angstrom2_per_site"] > 2


def test_the_picture_of_a_pair_has_no_vacuum(store: Path):
    ids = names(store)
    with open_for_reading(store) as connection:
        drawn = overlay(connection, ids["mos2-1"], ids["mos2-2"])
        page = report_html(connection)
    assert drawn is not None and drawn.largest_shift == pytest.approx(drawn.distances.max(), abs=1e-9)
    assert np.linalg.norm(drawn.cell[2]) == pytest.approx(3.19 + 6, abs=0.1)
    assert (drawn.sites[:, 2] > 0).all() and (drawn.sites[:, 2] < 1).all()
    assert "mos2-1" in page and "layers" in page


def test_known_again(store: Path, tmp_path: Path):
    rng = np.random.default_rng(901)
    asked = {
        "copy": built("graphene"),
        "noisy": disguise_layer(rng, built("MoS2"), 2, 0.02, 0.002),
        "down": disguise_layer(rng, janus()),
        "other": disguise_layer(rng, built("WTe2-1T")),
        "wider": longer_edge(built("graphene"), 1.03),
        "MoS2-bulk": built("MoS2"),
    }
    (tmp_path / "new.xyz").write_text(frames(asked), encoding="utf-8")
    told = {r["label"]: (r["verdict"], r["grade"]) for r in ask_known(store, tmp_path / "new.xyz")}
    assert told["copy"] == ("known", "key") or told["copy"] == ("known", "copy")
    assert told["noisy"][0] == told["down"][0] == "known" and told["noisy"][1] in ("near", "same")
    assert told["down"][1] == "key"
    assert {told[label][0] for label in ("other", "wider", "MoS2-bulk")} == {"new"}


def test_survey_counts_them(store: Path):
    with open_for_reading(store) as connection:
        found = survey(connection)
    rows = {row[0]: row[1] for row in found.tables["lattice_types"].rows}
    assert rows["hp"] >= 4 and rows["hP"] == 1


def test_exported_layers_are_read_as_the_same_layers(store: Path, tmp_path: Path):
    with open_for_reading(store) as connection:
        export(connection, tmp_path / "clean", "near", "extxyz")
        export(connection, tmp_path / "cif", "near", "cif")
    (text,) = list((tmp_path / "clean").rglob("*.xyz")) or list((tmp_path / "clean").rglob("*.extxyz"))
    again = tmp_path / "again.duckdb"
    run_night(again, text, of_source={})
    keys = "SELECT DISTINCT crystal_key FROM canonical_forms WHERE record_id IN (SELECT record_id FROM members "
    kept = query(store, keys + "WHERE grade = 'near' AND kept) ORDER BY 1")
    assert query(again, "SELECT DISTINCT crystal_key FROM canonical_forms ORDER BY 1") == kept
    with (tmp_path / "cif" / "kept.csv").open(encoding="utf-8") as f:
        listed = {row["label"]: row for row in csv.DictReader(f)}
    for label, row in listed.items():
        assert row["periodicity"] == ("3" if label == "graphene-bulk" else "2")
        assert (
            (row["volume_angstrom3_per_site"] == "")
            == (row["area_angstrom2_per_site"] != "")
            == (row["periodicity"] == "2")
        )
    cifs = [p.read_text(encoding="utf-8") for p in sorted((tmp_path / "cif").rglob("*.cif"))]
    assert sum("_census_periodic_directions 2" in t for t in cifs) == len(cifs) - 1


def test_a_second_run_changes_nothing(store: Path, tmp_path: Path):
    shutil.copytree(store.parent, tmp_path / "copy")
    copy = tmp_path / "copy" / "census.duckdb"
    before = whole_store(copy)
    run_night(copy, store.parent / "layers.xyz", of_source={})
    after = whole_store(copy)
    assert len(before) > 20 and {n for n in before if before[n] != after[n]} <= {"store_facts"}  # times published
