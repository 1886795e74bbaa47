"""The figures of a report about a whole store: they draw the numbers of the store, and hold in its odd corners."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice_census.output.report import report_html
from lattice_census.output.report_figures import (
    LatticeMap,
    curve_figure,
    lattice_map,
    layer_figure,
    layer_map,
    map_figures,
    size_figure,
)
from lattice_census.output.tolerance_curve import ToleranceCurve, counted_at, tolerance_curve
from lattice_census.store.connect import open_for_reading


def test_the_figures_of_the_store_draw_its_numbers(report_store: Path):
    connection = open_for_reading(report_store)
    curve, shapes = tolerance_curve(connection), lattice_map(connection)
    crystals = connection.execute("SELECT count(DISTINCT crystal_key) FROM crystals").fetchall()[0][0]
    connection.close()
    assert curve is not None
    axes = curve_figure(curve).axes[0]
    lines = {line.get_label(): line for line in axes.lines}
    t, families = (np.asarray(v) for v in lines["families"].get_data())
    assert [curve.families(x) for x in t.tolist()] == families.tolist() and set(curve.steps.tolist()) <= set(t.tolist())
    assert lines["groups"].get_ydata().tolist() == curve.groups.tolist()
    assert list(lines["chosen tolerance"].get_xdata()) == [1.0, 1.0]
    for figure in map_figures(shapes):
        marks = [(line.get_marker(), line.get_color()) for line in figure.axes[0].lines]
        assert len({m for m, _ in marks}) == len(marks) and len({c for _, c in marks}) > 1
        counted = sorted((line.get_zorder(), len(line.get_xdata())) for line in figure.axes[0].lines)
        assert [n for _, n in counted] == sorted((n for _, n in counted), reverse=True)  # few lie above many
        assert sum(len(line.get_xdata()) for line in figure.axes[0].lines) == crystals == len(shapes.a_to_b)
    assert (shapes.a_to_b <= 1 + 1e-9).all() and (shapes.b_to_c <= 1 + 1e-9).all()
    assert (shapes.openness > 0.5).all() and (shapes.openness <= 1 + 1e-9).all()  # of Niggli cells
    bars = size_figure([(1, 396), (2, 48)]).axes[0].patches
    assert [b.get_height() for b in bars] == [396, 48]


def test_crystals_of_one_shape_are_not_drawn_apart_by_rounding():
    """All of one cubic lattice: the axes keep a round range that ends at 1."""
    ones = np.array([1.0, 1.0 - 1e-15, 1.0 + 1e-15])
    for figure in map_figures(LatticeMap(np.array(["cP"] * 3), ones, ones, ones)):
        for low, high in (figure.axes[0].get_xlim(), figure.axes[0].get_ylim()):
            assert 0.85 < low < 0.9 and 1.0 < high < 1.01


def test_layers_have_a_map_of_their_own(ingest: Callable[..., dict[str, Any]], tmp_path: Path):
    """A square lattice of edge 4 and an oblique one of edges 3 and 4 at 80 degrees, each with one site, and a bulk
    crystal that the map of layers leaves out."""
    x, y = 4 * math.cos(math.radians(80)), 4 * math.sin(math.radians(80))
    frames = [("4 0 0 0 4 0 0 0 20", "T T F", "square"), (f"3 0 0 {x} {y} 0 0 0 20", "T T F", "oblique"),
              ("3 0 0 0 3 0 0 0 3", "T T T", "bulk")]  # fmt: skip
    (tmp_path / "layers.extxyz").write_text(
        "".join(
            f'1\nLattice="{cell}" Properties=species:S:1:pos:R:3 pbc="{periodic}" label={label}\nC 0 0 1\n'
            for cell, periodic, label in frames
        )
    )
    ingest(tmp_path / "layers.extxyz")
    connection = open_for_reading(tmp_path / "census.duckdb")
    layers, bulk, written = layer_map(connection), lattice_map(connection), report_html(connection)
    connection.close()
    assert bulk.lattice_type.tolist() == ["cP"]
    rows = sorted(zip(layers.lattice_type.tolist(), layers.a_to_b.tolist(), layers.openness.tolist(), strict=True))
    assert [row[0] for row in rows] == ["mp", "tp"]
    assert rows[0][1:] == pytest.approx((0.75, math.sin(math.radians(80))))
    assert rows[1][1:] == pytest.approx((1.0, 1.0))
    assert [len(line.get_xdata()) for line in layer_figure(layers).axes[0].lines] == [1, 1]
    section = written.split('<section id="map"')[1].split("</section>")[0]
    assert section.count("<svg") == 3 and "Layers: a ≤ b" in section and "m in a plane oblique" in written


def test_a_curve_without_a_step_starts_at_zero():
    curve = ToleranceCurve(50, np.zeros(0), 1.5, 0.05, 0.01, counted_at(1.5), np.full(10, 50), 0)
    axes = curve_figure(curve).axes[0]
    assert axes.get_ylim() == (0, 60) and axes.get_xlim() == (0, 1.5)


def test_few_bars_are_no_wider_than_many():
    assert size_figure([(1, 9)]).axes[0].get_xlim() == size_figure([(i, 9) for i in range(1, 6)]).axes[0].get_xlim()
