"""The wheel holds what it should and works outside the checkout."""

from __future__ import annotations

import os
import re
import subprocess
import sys
import tomllib
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The wheel, built from the files that git knows (a stray build folder must not help)."""
    folder = tmp_path_factory.mktemp("wheel")
    source = folder / "source"
    names = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True).stdout.split("\n")
    for name in filter(None, names):
        if (ROOT / name).is_file():
            target = source / name
            target.parent.mkdir(parents=True, exist_ok=True)
            target.write_bytes((ROOT / name).read_bytes())
    subprocess.run(
        [sys.executable, "-m", "build", "--wheel", "--no-isolation", "--outdir", str(folder), str(source)],
        check=True, capture_output=True,
    )  # fmt: skip
    return next(folder.glob("*.whl"))


def test_every_package_and_data_file_is_in_the_wheel(wheel: Path):
    names = set(zipfile.ZipFile(wheel).namelist())
    folders = {"pipeline": "lattice_census", "flows": "lattice_census/flows", "sql": "lattice_census/sql"}
    for folder, package in folders.items():
        for path in (ROOT / folder).rglob("*"):
            if path.suffix in (".py", ".sql", ".csv", ".css", ".js", ".typed"):
                assert f"{package}/{path.relative_to(ROOT / folder).as_posix()}" in names
    tops = {name.split("/")[0] for name in names}
    assert {t for t in tops if not t.endswith(".dist-info")} == {"lattice_census"}
    assert any(name.endswith("licenses/pipeline/LICENSE") for name in names)


def test_packages_are_named_one_by_one():
    listed = tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["setuptools"]["packages"]
    found = {"lattice_census"}
    for folder, package in {
        "pipeline": "lattice_census",
        "flows": "lattice_census.flows",
        "sql": "lattice_census.sql",
    }.items():
        for path in (ROOT / folder).rglob("__init__.py"):
            inner = path.parent.relative_to(ROOT / folder).parts
            found.add(".".join((package, *inner)))
    assert set(listed) == found


def test_the_wheel_runs_in_a_folder_with_flows_of_its_own(wheel: Path, tmp_path: Path):
    installed = tmp_path / "installed"
    subprocess.run(
        [sys.executable, "-m", "pip", "install", "--quiet", "--no-deps", "--target", str(installed), str(wheel)],
        check=True,
    )
    here = tmp_path / "here"
    for folder in ("flows", "pipeline", "sql"):
        (here / folder).mkdir(parents=True)
        (here / folder / "__init__.py").write_text("raise RuntimeError('the wrong package')\n")
    (here / "one.cif").write_text(
        "data_one\n_cell_length_a 4\n_cell_length_b 4\n_cell_length_c 4\n_cell_angle_alpha 90\n_cell_angle_beta 90\n"
        "_cell_angle_gamma 90\nloop_\n_atom_site_label\n_atom_site_fract_x\n_atom_site_fract_y\n_atom_site_fract_z\n"
        "Po1 0 0 0\n"
    )
    environment = {**os.environ, "PYTHONPATH": str(installed)}
    where = subprocess.run(
        [sys.executable, "-c", "import lattice_census.flows as f; print(f.__file__)"],
        cwd=here, env=environment, check=True, capture_output=True, text=True,
    )  # fmt: skip
    assert where.stdout.startswith(str(installed))
    done = subprocess.run(
        [sys.executable, str(installed / "bin" / "lattice-census"), "ingest", "one.cif", "--direct", "--workers", "1"],
        cwd=here, env=environment, capture_output=True, text=True,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert "1 accepted + 0 refused" in done.stdout


def test_the_top_level_holds_what_it_should():
    names = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True).stdout.split("\n")
    tops = {name.split("/")[0] for name in filter(None, names)}
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "pipeline", "flows", "tests", "sql"}
    assert {top for top in tops if not top.startswith(".")} == allowed


def test_the_licence_is_the_one_that_is_declared():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    assert project["license"] == "MIT"
    assert re.match(r"MIT License\n", (ROOT / "pipeline" / "LICENSE").read_text())
