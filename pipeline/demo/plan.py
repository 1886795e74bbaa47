"""Which record of the demo describes which crystal, and how: drawn once, from a fixed seed."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from datetime import date

import numpy as np

from .crystals import DemoCrystal, demo_crystals
from .disguises import (
    Crystal,
    another_cell,
    inverse,
    mirror,
    moved,
    product,
    scaled,
    shaken,
    strained,
    supercell,
    turned,
)
from .draws import Draws

SEED = 20260217
NOISE = 0.02
"""angstrom, the largest step of a site."""

STRAIN = 0.002
MOST_SITES = 80

# Sources with the share of records that each takes; the first five hold CIF texts.
CARDS, COARSE, FINE, GUESSES, ATTIC = "field-cards", "coarse.csv", "fine.parquet", "guesses.jsonl", "attic.zip"
FURNACE, EXCHANGE, PRESS = "furnace.extxyz", "exchange.jsonl", "press"
SHARES = {CARDS: 14, COARSE: 26, FINE: 16, GUESSES: 13, ATTIC: 5, FURNACE: 9, EXCHANGE: 9, PRESS: 8}
CIF_SOURCES = (CARDS, COARSE, FINE, GUESSES, ATTIC)
SPLIT_SOURCES = (COARSE, FINE, GUESSES)
MIXED_SOURCES = (CARDS, COARSE, FINE, GUESSES, EXCHANGE)
SECOND_THEORY = (FINE, EXCHANGE)
THEORIES = {COARSE: "level-one", GUESSES: "level-one", FURNACE: "level-one", FINE: "level-two", EXCHANGE: "level-two"}
"""Sources with energies, each of one invented theory."""

TREATMENTS = {
    "copy": 12, "other cell": 26, "supercell": 20, "mirror": 10, "six digits": 8, "noise": 10, "strain": 5,
    "noisy supercell": 5, "rescaled": 6,
}  # fmt: skip

NEAR_MISSES: tuple[tuple[str, tuple[str, ...]], ...] = (
    ("a site moved", ("SZn B3", "CSi B5", "O2Ti C5", "MgO B4", "CCaO3 G0_1", "FeS2 C2")),
    ("two species swapped", ("O2Ti C4", "O3SrTi E2_1", "CuFeS2 E1_1", "CCaO3 G0_1", "CaO4W H0_4")),
    ("an edge longer", ("O2Ti C4", "AuCu L1_0", "MgO B1", "MgZn2 C14", "MoSi2 C11_b", "O2Si C2")),
    ("sheared", ("AuCu B2", "CaF2 C1", "CSi B6", "Fe A2", "MgO B1", "Al3Ti D0_22")),
)
TRAJECTORY = "O3SrTi E2_1"
TRAJECTORY_FRAMES = 14
LEAKS = 8


@dataclass(slots=True)
class Planned:
    """A record before it has a file and a label."""

    crystal: str
    structure: Crystal
    source: str
    done: tuple[str, ...]
    reason: str | None = None
    grade: str | None = None
    same_as: Planned | None = None
    exact: bool = True
    digits: int = 12
    base: DemoCrystal | None = None
    """Set where a CIF gives the asymmetric unit of the conventional cell, with its operations."""

    energy: float | None = None
    """eV per site."""

    theory: str | None = None
    split: str | None = None
    date: str | None = None
    in_trajectory: bool = False


@dataclass(slots=True)
class Plan:
    """All records that are to be accepted, and what was planted among them."""

    records: list[Planned]
    mirror_images: dict[str, str]
    near_misses: dict[str, str]
    conflicts: list[Planned] = field(default_factory=list)
    totals: list[Planned] = field(default_factory=list)
    leaks: list[Planned] = field(default_factory=list)


def make_plan() -> Plan:
    """The plan: always the same."""
    rng = Draws(SEED)
    crystals = demo_crystals()
    plan = Plan([], {c.name: c.mirror_of for c in crystals if c.mirror_of}, {})
    for crystal in crystals:
        u = rng.random()
        _add_records(rng, plan, crystal, 1 + int(12 * u * u * u))
    by_name = {c.name: c for c in crystals}
    for kind, names in NEAR_MISSES:
        for name in names:
            _add_near_miss(rng, plan, by_name[name], kind)
    _add_trajectory(rng, plan, by_name[TRAJECTORY])
    _add_facts(rng, plan)
    _plant(rng, plan)
    return plan


def _weighted(rng: Draws, weights: dict[str, int]) -> str:
    at = rng.integers(0, sum(weights.values()))
    for name, weight in weights.items():
        at -= weight
        if at < 0:
            return name
    raise AssertionError("weights add up")


def _source(rng: Draws, among: tuple[str, ...]) -> str:
    return _weighted(rng, {name: SHARES[name] for name in among})


def _add_records(rng: Draws, plan: Plan, crystal: DemoCrystal, count: int) -> None:
    sources = MIXED_SOURCES if crystal.mixed else tuple(SHARES)
    source = _source(rng, sources)
    base = crystal if source in (CARDS, ATTIC) else None
    first = Planned(crystal.name, crystal.conventional, source, ("as it is",), base=base)
    added = [first]
    for _ in range(count - 1):
        added.append(_again(rng, crystal, added, sources))
    plan.records += added


def _again(rng: Draws, crystal: DemoCrystal, earlier: list[Planned], sources: tuple[str, ...]) -> Planned:
    """One more record of a crystal."""
    kind = _weighted(rng, TREATMENTS)
    texts = [p for p in earlier if p.source in CIF_SOURCES and p.exact]
    if (kind == "copy" and not texts) or (kind == "mirror" and crystal.chiral):
        kind = "other cell"
    first = earlier[0]
    if kind == "copy":
        model: Planned = rng.choice(texts)
        return replace(
            model, source=_source(rng, CIF_SOURCES), done=("copy",), reason="copy", grade="copy", same_as=model
        )
    if kind == "six digits":
        sources = tuple(s for s in sources if s in CIF_SOURCES)
    elif kind == "rescaled":
        sources = tuple(s for s in sources if s in SECOND_THEORY)
    room = min(8, max(1, MOST_SITES // len(crystal.primitive[2])))
    index = 1 + rng.integers(0, room) if "supercell" in kind else 1
    done: tuple[str, ...] = ("other cell", "origin", "order", "orientation")
    if index > 1:
        done = (f"supercell of {index}", *done[1:])
    reason, grade, exact = ("supercell" if index != first_index(first, crystal) else "other_cell"), "key", True
    structure = another_cell(rng, crystal.primitive, index)
    if kind == "mirror":
        structure, done, reason = mirror(structure), ("mirror image", *done), reason
    structure = moved(rng, structure)
    if kind in ("strain", "noisy supercell"):
        structure = strained(rng, structure, STRAIN)
        done, grade, exact = (*done, f"strain to {STRAIN:g}"), "near", False
    if kind in ("noise", "noisy supercell"):
        structure = shaken(rng, structure, NOISE)
        done, grade, exact = (*done, f"noise to {NOISE:g} angstrom"), "near", False
    if kind == "rescaled":
        factor = round(rng.uniform(1.02, 1.06), 4)
        structure, exact = scaled(structure, factor), False
        done, reason, grade = (*done, f"edges times {factor:g}"), "rescaled", "rescaled"
    if kind == "six digits":
        grade, exact, done = "same", False, (*done, "six digits")
    return Planned(
        crystal.name, turned(rng, structure), _source(rng, sources), done, reason, grade, first, exact,
        6 if kind == "six digits" else 12,
    )  # fmt: skip


def first_index(first: Planned, crystal: DemoCrystal) -> int:
    """Primitive cells in the cell of a crystal's first record."""
    return len(first.structure[2]) // len(crystal.primitive[2])


def _add_near_miss(rng: Draws, plan: Plan, crystal: DemoCrystal, kind: str) -> None:
    """A crystal that is nearly another, once or twice."""
    cell, positions, tokens = crystal.conventional
    positions, tokens = positions.copy(), list(tokens)
    if kind == "a site moved":
        away = rng.normal(size=(1, 3))
        step = away / np.sqrt((away[:, 0] ** 2 + away[:, 1] ** 2) + away[:, 2] ** 2)[:, None] * 0.6
        positions[0:1] += product(step, inverse(cell))
    elif kind == "two species swapped":
        other = next(i for i, t in enumerate(tokens) if t != tokens[0])
        tokens[0], tokens[other] = tokens[other], tokens[0]
    elif kind == "an edge longer":
        cell = cell * np.array([[1.02], [1.0], [1.0]])
    else:
        cell = product(cell, np.array([[1, 0.05, 0], [0, 1, 0], [0, 0, 1]]))
    name = f"{crystal.name}, {kind}"
    plan.near_misses[name] = crystal.name
    structure = (cell, positions - np.floor(positions), tokens)
    first = Planned(name, structure, _source(rng, tuple(SHARES)), (kind,))
    plan.records.append(first)
    if rng.random() < 0.5:
        again = turned(rng, moved(rng, supercell(structure, another_basis(rng))))
        done = (kind, "other cell", "origin", "order", "orientation")
        plan.records.append(
            Planned(name, again, _source(rng, tuple(SHARES)), done, "other_cell", "key", first)
        )  # fmt: skip


def another_basis(rng: Draws) -> np.ndarray[tuple[int, ...], np.dtype[np.int64]]:
    """A plain change of basis, determinant 1."""
    i, j = (int(x) for x in rng.permutation(3)[:2])
    matrix = np.eye(3, dtype=np.int64)
    matrix[i, j] = rng.choice([-1, 1])
    return matrix


def _add_trajectory(rng: Draws, plan: Plan, crystal: DemoCrystal) -> None:
    """Frames of a relaxation that ends in the crystal itself: one cell, less noise with every frame."""
    first = next(p for p in plan.records if p.crystal == crystal.name)
    start = supercell(crystal.primitive, np.diag([2, 1, 1]))
    for frame in range(TRAJECTORY_FRAMES):
        left = NOISE * (TRAJECTORY_FRAMES - 1 - frame) / (TRAJECTORY_FRAMES - 1)
        structure = shaken(rng, start, left) if left else start
        done = (f"frame {frame + 1} of a relaxation", f"noise to {left:.4f} angstrom")
        plan.records.append(
            Planned(
                crystal.name, structure, FURNACE, done, "supercell", "near" if left else "key", first, not left,
                in_trajectory=True,
            )
        )  # fmt: skip


def _add_facts(rng: Draws, plan: Plan) -> None:
    """Energies, splits and dates: made up, but of one mind about each crystal."""
    energy: dict[tuple[str, str], float] = {}
    split: dict[str, str] = {}
    start = date(2024, 1, 8).toordinal()
    for p in plan.records:
        crystal = plan.mirror_images.get(p.crystal, p.crystal)
        theory = THEORIES.get(p.source)
        if theory is not None:
            level = energy.setdefault((crystal, "level-one"), round(-2 - 6 * rng.random(), 4))
            energy.setdefault((crystal, "level-two"), round(level - 0.3 * rng.random(), 4))
            p.energy = energy[crystal, theory] + 0.0008 * rng.random()
            p.theory = theory
        kept = split.setdefault(crystal, _weighted(rng, {"train": 70, "val": 15, "test": 15}))
        if p.source in SPLIT_SOURCES:
            p.split = kept
        if p.source not in (CARDS, PRESS, ATTIC):
            p.date = date.fromordinal(start + rng.integers(0, 600)).isoformat()


def _plant(rng: Draws, plan: Plan) -> None:
    """One conflict of energies, one energy of a whole cell, and records in the wrong split."""
    joined: dict[str, list[Planned]] = {}
    for p in plan.records:
        if p.grade in (None, "copy", "key"):
            joined.setdefault(p.crystal, []).append(p)
    for members in joined.values():
        of_theory = [p for p in members if p.theory == "level-two"]
        if len(of_theory) > 2 and of_theory[-1].energy is not None:
            of_theory[-1].energy += 0.02
            plan.conflicts.append(of_theory[-1])
            break
    taken = {p.crystal for p in plan.conflicts}
    plan.totals.append(
        next(
            p for p in plan.records
            if p.source == GUESSES and p.crystal not in taken
            and len(p.structure[2]) >= 8 and len(joined[p.crystal]) > 2
        )
    )  # fmt: skip
    names = [n for n, members in joined.items() if n not in plan.mirror_images and len(members) > 1]
    for name in (names[i] for i in rng.permutation(len(names))):
        told = [p for p in joined[name] if p.split is not None]
        if len(told) > 1 and told[0].split == "train" and len(plan.leaks) < LEAKS:
            told[-1].split = "test"
            plan.leaks.append(told[-1])
