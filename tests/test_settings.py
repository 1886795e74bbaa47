"""Settings: precedence, limits, and that every one is documented."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from lattice_census.errors import UsageError
from lattice_census.settings import STAGES, Settings, resolve_settings, stage_of
from lattice_census.tolerances import Tolerances


def test_precedence_option_environment_file_store_default(tmp_path: Path):
    file = tmp_path / "s.toml"
    file.write_text("near_shift = 0.03\nmax_sites = 300\nsame_shift = 0.004\n")
    environment = {"LATTICE_CENSUS_NEAR_SHIFT": "0.02", "LATTICE_CENSUS_MAX_SITES": "200", "LATTICE_CENSUS_DEBUG": "1"}
    stored = {"near_shift": 0.04, "near_strain": 0.004, "same_shift": 0.009, "max_sites": 400}
    found = resolve_settings({"near_shift": 0.01}, environment, file, stored)
    assert found.near_shift == 0.01
    assert found.max_sites == 200
    assert found.same_shift == 0.004
    assert found.near_strain == 0.004
    assert found.near_strain != Settings().near_strain
    assert found.matches_per_record == 32


@pytest.mark.parametrize(
    ("options", "environment", "text", "told"),
    [
        (
            {"near_shfit": 1},
            {},
            "",
            r"near_shfit \(from an option\): there is no such setting; did you",
        ),
        ({}, {"LATTICE_CENSUS_NEAR_SHFIT": "1"}, "", "LATTICE_CENSUS_NEAR_SHFIT"),
        ({}, {}, "nearshift = 1", "nearshift \\(from .*s.toml\\): there is no such setting"),
        ({"max_sites": 0}, {}, "", "max_sites"),
        ({"mirror_images": "flip"}, {}, "", "mirror_images"),
        (
            {},
            {},
            "[sources.a]\nenergie_column = 'e'",
            r"a\.energie_column \(from .*s.toml\): there is no such .*mean energy_column",
        ),
        ({}, {}, "near_shift = = 3", "not TOML"),
    ],
)
def test_what_cannot_be_meant_is_refused_by_name(tmp_path: Path, options, environment, text, told):
    file = tmp_path / "s.toml"
    file.write_text(text)
    with pytest.raises(UsageError, match=told):
        resolve_settings(options, environment, file)


def test_every_setting_has_a_meaning_and_a_known_stage():
    for name, field in Settings.model_fields.items():
        assert field.description, name
        assert stage_of(name) in (None, *STAGES)


def test_tolerances_and_settings_agree():
    assert Settings().tolerances == Tolerances()


def test_every_setting_stands_in_the_readme():
    text = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")
    documented = set(re.findall(r"^\| `([a-z_]+)` \|", text, re.MULTILINE))
    assert set(Settings.model_fields) <= documented | {"sources"}
