"""The layers of the package: imports run one way, and some libraries stay where they belong."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

import lattice_census
import lattice_census.flows

PIPELINE = Path(lattice_census.__file__).parent
FLOWS = Path(lattice_census.flows.__file__).parent

LAYERS = (
    {"errors", "tolerances"},
    {"settings"},
    {"model"},
    {"lattice"},
    {"kernels"},
    {"readers", "cell", "fingerprint"},
    {"store"},
    {"ingest"},
    {"grouping"},
    {"decisions"},
    {"output", "demo"},
    {"flows"},
)
"""Lowest first; a module may import its own part and any lower layer."""

RANK = {part: rank for rank, layer in enumerate(LAYERS) for part in layer}


def modules():
    for root in (PIPELINE, FLOWS):
        for path in sorted(root.rglob("*.py")):
            if "__pycache__" not in path.parts and not (root == PIPELINE and "flows" in path.parts):
                yield path, ("flows",) * (root == FLOWS) + path.relative_to(root).parts


def imported(path, parts):
    """(dotted name inside the package, line) of every import of the package, and (top-level name, line) of others."""
    inside, outside = [], []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            for alias in node.names:
                top, *rest = alias.name.split(".")
                (inside if top == "lattice_census" else outside).append((tuple(rest) or (top,), node.lineno))
                if top != "lattice_census":
                    outside[-1] = ((top,), node.lineno)
        elif isinstance(node, ast.ImportFrom):
            if node.level:
                base = parts[: len(parts) - node.level]
            else:
                top, *rest = (node.module or "").split(".")
                if top != "lattice_census":
                    outside.append(((top,), node.lineno))
                    continue
                base = ()
                for alias in node.names:
                    inside.append(((*rest, alias.name), node.lineno))
                continue
            name = tuple((node.module or "").split(".")) if node.module else ()
            for alias in node.names:
                inside.append(((*base, *name, alias.name), node.lineno))
    return inside, outside


ALL = list(modules())
IDS = ["/".join(parts) for _, parts in ALL]
INNER = [m for m in ALL if m[1][0] != "flows"]
INNER_IDS = ["/".join(parts) for _, parts in INNER]


@pytest.mark.parametrize(("path", "parts"), ALL, ids=IDS)
def test_imports_run_one_way(path, parts):
    own = parts[0].removesuffix(".py")
    for name, line in imported(path, parts)[0]:
        part = name[0]
        if part in RANK and own in RANK and part != own:
            assert RANK[part] < RANK[own], f"{'/'.join(parts)}:{line} imports {'.'.join(name)}"


@pytest.mark.parametrize(("path", "parts"), INNER, ids=INNER_IDS)
def test_libraries_stay_where_they_belong(path, parts):
    """pipeline/ never imports Prefect, only kernels/ imports numba, and nothing in pipeline/ prints."""
    for (name,), line in imported(path, parts)[1]:
        assert name not in ("prefect", "prefect_dask"), f"{path}:{line}"
        assert name != "numba" or parts[0] == "kernels", f"{path}:{line}"
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
            assert node.func.id != "print", f"{path}:{node.lineno}"


@pytest.mark.parametrize(("path", "parts"), INNER, ids=INNER_IDS)
def test_imports_inside_the_package_are_relative(path, parts):
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and not node.level:
            assert (node.module or "").split(".")[0] != "lattice_census", f"{path}:{node.lineno}"
        if isinstance(node, ast.Import):
            assert all(a.name.split(".")[0] != "lattice_census" for a in node.names), f"{path}:{node.lineno}"


def test_the_test_sees_a_wrong_import(tmp_path):
    """The reading of imports itself: each form of import is recognised."""
    path = tmp_path / "wrong.py"
    path.write_text(
        "import numba\nfrom ..store import schema\nfrom . import other\nfrom lattice_census.grouping import x\n"
    )
    inside, outside = imported(path, ("cell", "wrong.py"))
    assert [n for n, _ in inside] == [("store", "schema"), ("cell", "other"), ("grouping", "x")]
    assert [n for n, _ in outside] == [("numba",)]


def test_every_part_has_a_layer():
    parts = {parts[0].removesuffix(".py") for _, parts in ALL} - {"__init__", "sql"}  # sql/ holds no code
    assert parts == set(RANK)
