"""Kept and set-aside structures laid over each other: the measures of the match, and the pictures measured."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lattice_census.output import report_pairs
from lattice_census.output.overlay import best_axis, mean_cell, overlay, plane_along, with_images
from lattice_census.output.overlay_picture import bar_for, factor_for, overlay_figure
from lattice_census.output.svg import inline_svg, raw_svg
from lattice_census.store.connect import open_for_reading

from .tables_of_structures import query


def overlays(report_store: Path) -> list[Any]:
    connection = open_for_reading(report_store)
    try:
        pairs = connection.execute(
            "SELECT group_id, record_id, witness_shift_angstrom, witness_strain FROM members "
            "WHERE grade = 'near' AND NOT kept ORDER BY record_id"
        ).fetchall()
        return [(overlay(connection, kept, aside), shift, strain) for kept, aside, shift, strain in pairs]
    finally:
        connection.close()


def test_an_overlay_has_the_measures_of_the_match(report_store: Path):
    found = overlays(report_store)
    assert len(found) >= 6
    for shown, shift, strain in found:
        assert shown is not None
        assert shown.distances.max() == pytest.approx(shift, abs=2e-5)
        assert np.sqrt((shown.distances**2).mean()) == pytest.approx(shown.rms_shift, abs=2e-5)
        assert shown.strain == pytest.approx(strain, abs=1e-12)
        assert np.abs(shown.delta.sum(axis=0)).max() < 1e-9
        assert len(shown.tokens) == len(shown.sites) and (shown.sites >= -1e-9).all() and (shown.sites < 1).all()
    assert {shown.mirrored for shown, *_ in found} == {True, False}
    assert any(len(shown.sites) > len(shown.kept.tokens) for shown, *_ in found)


def test_an_overlay_is_the_same_from_either_side(report_store: Path):
    connection = open_for_reading(report_store)
    for a, b in connection.execute("SELECT record_a, record_b FROM matches WHERE grade = 'near'").fetchall():
        there, back = overlay(connection, a, b), overlay(connection, b, a)
        assert there is not None and back is not None
        assert np.allclose(there.distances, back.distances, atol=1e-9)
        assert np.allclose(there.delta, -back.delta, atol=1e-9)
        ends = there.sites + there.delta - back.sites
        assert np.abs(ends - np.rint(ends)).max() < 1e-9
    connection.close()


def test_records_without_a_match_have_no_overlay(report_store: Path):
    ids = dict(query(report_store, "SELECT label, record_id FROM records"))
    connection = open_for_reading(report_store)
    assert overlay(connection, ids["c1"], ids["c-moved"]) is None
    connection.close()


def test_lengths_in_the_mean_cell_are_those_of_the_mean_metric():
    rng = np.random.default_rng(8)
    for _ in range(20):
        first = rng.normal(size=(3, 3)) * 4
        second = first @ (np.eye(3) + rng.normal(scale=0.005, size=(3, 3)))
        cell = mean_cell(first, second)
        assert np.allclose(cell @ cell.T, (first @ first.T + second @ second.T) / 2, atol=1e-10)
        assert np.abs(cell - (first + second) / 2).max() < 1e-3


def lines_of(svg: str, gid: str) -> list[np.ndarray]:
    """End points (2, 2) of the lines of a group, in the units of the SVG file."""
    start = svg.index(f'<g id="{gid}"')
    group = svg[start : svg.index("</g>", start)]
    found = []
    for path in re.findall(r'\sd="([^"]*)"', group):
        numbers = [float(n) for n in re.findall(r"-?[0-9.]+(?:e-?\d+)?", path)]
        found.append(np.array(numbers).reshape(-1, 2))
    return found


def measured(svg: str, factor: int) -> tuple[list[np.ndarray], float]:
    """The arrows of a picture, and how many units of the file are one angstrom by its bar."""
    (bar,) = lines_of(svg, "bar")
    told = re.search(r"between sites: ([0-9.]+) Å", svg)
    assert told is not None
    if factor > 1:
        assert f"of an arrow: {float(told[1]) / factor:g} Å ({factor} times as long)" in svg
    return lines_of(svg, "shifts"), float(np.linalg.norm(bar[1] - bar[0])) / float(told[1])


def test_arrows_have_the_length_that_the_scale_bar_says(report_store: Path):
    """In the written file: every arrow over the bar is the shift across the view, and starts where its site stands."""
    checked = 0
    for shown, shift, _ in overlays(report_store):
        if shift < 0.005:
            continue
        figure, factor = overlay_figure(shown)
        arrows, unit = measured(raw_svg(figure, "p"), factor)
        plane = plane_along(shown.cell, shown.axis)
        sites, which = with_images(shown.sites)
        flat = sites @ shown.cell @ plane.T
        moved_by = (shown.delta @ shown.cell @ plane.T)[which] * factor
        wanted = np.linalg.norm(moved_by, axis=1)
        drawn = wanted >= np.sort(wanted)[::-1][len(arrows) - 1] - 1e-9  # the shortest are left out
        assert drawn.sum() == len(arrows)
        ends = np.array(arrows) * [1, -1] / unit  # y goes down in the file
        assert np.allclose(ends[:, 1] - ends[:, 0], moved_by[drawn], atol=1e-3)
        assert np.allclose(ends[:, 0] - ends[0, 0], flat[drawn] - flat[drawn][0], atol=1e-3)
        checked += 1
    assert checked >= 3


def test_a_shift_of_five_hundredths_is_drawn_so_long(report_store: Path):
    shown = replace(
        overlays(report_store)[0][0], cell=np.diag([6.0, 4.0, 5.0]), tokens=["Si", "Si"],
        sites=np.array([[0.5, 0.25, 0.5], [0.5, 0.75, 0.5]]), delta=np.array([[0, 0.05 / 4, 0], [0, -0.05 / 4, 0]]),
    )  # fmt: skip
    figure, factor = overlay_figure(shown)
    arrows, unit = measured(raw_svg(figure, "p"), factor)
    assert factor == 10 and len(arrows) == 2
    for arrow in arrows:
        assert np.linalg.norm(arrow[1] - arrow[0]) / unit / factor == pytest.approx(0.05, abs=1e-5)


def test_factors_and_bars_are_round_and_fit():
    assert factor_for(np.array([0.05]), 8.0) == 20 and factor_for(np.array([0.0]), 8.0) == 1
    assert factor_for(np.array([3.0]), 8.0) == 1
    assert bar_for(8.0) == 2.0 and bar_for(0.3) == 0.5 and bar_for(100.0) == 20.0


def test_the_best_axis_shows_the_shifts():
    cell = np.diag([4.0, 5.0, 6.0])
    sites = np.array([[0.1, 0.2, 0.3], [0.6, 0.7, 0.9]])
    for moved_along in range(3):
        delta = np.zeros((2, 3))
        delta[:, moved_along] = 0.01, -0.01
        assert best_axis(cell, sites, delta) != moved_along


def test_a_picture_is_small_and_named(report_store: Path):
    shown = max((o for o, *_ in overlays(report_store)), key=lambda o: len(o.sites))
    figure, _ = overlay_figure(shown)
    svg = inline_svg(figure, "one", 'A "<b>" title', "said")
    assert len(svg) < 60_000
    assert svg.startswith("<svg role=") and "A &quot;&lt;b&gt;&quot; title</title>" in svg
    assert "<metadata" not in svg and "xmlns" not in svg and "<style" not in svg


def test_a_cell_of_too_many_sites_is_said_and_not_drawn(report_store: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(report_pairs, "MOST_SITES", 2)
    shown = overlays(report_store)[0][0]
    assert "too many to be told apart" in report_pairs.pair_html(shown, "x")
