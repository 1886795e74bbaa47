"""The crystals that the demo's records describe: structure types under several compositions, scaled to one density.

Many share a composition: polytypes, ordered alloys, the two hands of quartz, polymorphs. A row of FAMILIES is an
invented choice for the demo; volumes are rough, and no real measurement stands behind any of it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import gemmi
import numpy as np

from .disguises import Crystal, inverse, product
from .structure_types import StructureType, structure_types

# (elements, the rarest first; volume in cubic angstrom per site; Strukturbericht labels, `-` for alpha-quartz)
FAMILIES: tuple[tuple[str, float, tuple[str, ...]], ...] = (
    ("Fe", 11.8, ("A1", "A2", "A3", "A13")),
    ("Co", 11.2, ("A1", "A3", "A3'")),
    ("La", 36.8, ("A1", "A3'", "C19 (Sm)")),
    ("Sn", 27.4, ("A4", "A5", "A1", "A6")),
    ("C", 7.0, ("A4", "A9")),
    ("Se", 27.3, ("A8",)),
    ("As", 21.6, ("A7",)),
    ("Ga", 19.8, ("A11", "A20")),
    ("Mn", 12.2, ("A12", "A13", "A2")),
    ("I", 40.9, ("A14",)),
    ("Zn S", 19.8, ("B1", "B3", "B4", "B5", "B6")),
    ("Si C", 10.4, ("B3", "B4", "B5", "B6")),
    ("Mg O", 9.6, ("B1", "B2", "B4", "B_k")),
    ("Fe S", 14.9, ("B8_1", "B10", "B13", "B31")),
    ("Cu Au", 14.4, ("L1_0", "L1_1", "B2", "B32")),
    ("Cu Pt", 13.4, ("L1_0", "L1_1")),
    ("W C", 10.4, ("B_h", "B1", "B8_1")),
    ("Co Sn", 17.1, ("B35", "B20", "B33 (B_f)")),
    ("Cr B", 8.6, ("B33 (B_f)", "B31")),
    ("Hg S", 23.6, ("B9", "B3")),
    ("Ni As", 14.1, ("B8_1", "B31", "B20")),
    ("Li Al", 16.2, ("B32", "B2")),
    ("Si O", 12.6, ("C8", "C9", "C4", "-", "C2")),
    ("Ge O", 12.9, ("C4", "-")),
    ("Ti O", 11.0, ("C4", "C5", "C1", "C18")),
    ("O Ti", 14.8, ("C4", "C5")),
    ("Mo Si", 13.4, ("C11_a", "C11_b")),
    ("Ca C", 16.0, ("C11_a", "C11_b")),
    ("Mg Zn", 16.9, ("C14", "C15", "C36")),
    ("Mg Cu", 14.5, ("C14", "C15", "C36")),
    ("Fe S", 13.2, ("C2", "C18", "C7")),
    ("Mo S", 17.7, ("C7", "C6", "C19")),
    ("Cd I", 35.5, ("C6", "C19")),
    ("Al B", 8.5, ("C32",)),
    ("Ca F", 13.6, ("C1", "C23")),
    ("O Cu", 13.0, ("C3",)),
    ("P Fe", 11.4, ("C22", "C23")),
    ("Cu Al", 15.0, ("C16", "C15")),
    ("Sb Cu", 16.2, ("C38", "B8_2")),
    ("In Ni", 12.9, ("B8_2", "C38")),
    ("Au Be", 12.5, ("D1_a", "D2_d")),
    ("Ti Ni", 11.7, ("L1_2", "D0_19", "D0_22", "D0_24")),
    ("Ti Al", 15.9, ("L1_2", "D0_19", "D0_22")),
    ("Al Fe", 12.1, ("D0_3", "L1_2")),
    ("Si Cr", 11.9, ("A15", "L1_2")),
    ("C Fe", 9.7, ("D0_11",)),
    ("W O", 13.3, ("D0_9",)),
    ("Co As", 17.3, ("D0_2",)),
    ("As Na", 25.2, ("D0_18",)),
    ("Ba Al", 23.5, ("D1_3",)),
    ("Mo Ni", 11.7, ("D1_a",)),
    ("Ca Cu", 15.3, ("D2_d",)),
    ("Ca B", 10.2, ("D2_1",)),
    ("Al O", 8.6, ("D5_1", "D5_2")),
    ("La O", 16.5, ("D5_1", "D5_2")),
    ("In O", 12.9, ("D5_1", "D5_3")),
    ("Cu Fe S", 18.2, ("E1_1",)),
    ("Sr Ti O", 11.9, ("E2_1",)),
    ("Ca C O", 12.3, ("G0_1",)),
    ("Na Cr S", 17.0, ("F5_1",)),
    ("Ca W O", 13.0, ("H0_4",)),
    ("Mg Al O", 9.4, ("H1_1",)),
    ("Al Mn Cu", 13.2, ("L2_1",)),
    ("Mg Ag As", 20.4, ("C1_b",)),
)

# Solid solutions: (type, the token of each element of the type, volume per site).
MIXED: tuple[tuple[str, dict[str, str], float], ...] = (
    ("A1", {"Cu": "Cu0.5Ni0.5"}, 11.4),
    ("A2", {"W": "Mo0.25W0.75"}, 15.8),
    ("B1", {"Na": "Fe0.2Mg0.8", "Cl": "O"}, 9.5),
    ("G0_1", {"Ca": "Ca0.5Mg0.5", "C": "C", "O": "O"}, 11.3),
    ("E2_1", {"Ca": "Ba0.5Sr0.5", "Sr": "Ba0.5Sr0.5", "Ti": "Ti", "O": "O"}, 12.3),
)

# Steps from the primitive to the conventional cell (rows: conventional vectors in primitive ones), by centring letter.
CENTRING = {
    "P": ((1, 0, 0), (0, 1, 0), (0, 0, 1)),
    "S": ((1, -1, 0), (1, 1, 0), (0, 0, 1)),
    "C": ((1, -1, 0), (1, 1, 0), (0, 0, 1)),
    "I": ((0, 1, 1), (1, 0, 1), (1, 1, 0)),
    "F": ((-1, 1, 1), (1, -1, 1), (1, 1, -1)),
    "R": ((1, -1, 0), (0, 1, -1), (1, 1, 1)),
}

# Of these both hands are in the collection.
BOTH_HANDS = {("Si O", "-"), ("Se", "A8"), ("Co Sn", "B20")}

# Space groups without improper operations, among the structure types: their crystals come in two hands.
CHIRAL_GROUPS = frozenset({152, 154, 180, 198, 213})


@dataclass(frozen=True, slots=True)
class DemoCrystal:
    """One crystal of the demo."""

    name: str
    """Composition and structure type, and the hand where it has one."""

    conventional: Crystal
    primitive: Crystal
    conventional_index: int
    """Primitive cells in the conventional one."""

    chiral: bool
    mirror_of: str | None
    """Name of the crystal whose mirror image this is."""

    unit: tuple[tuple[str, tuple[float, float, float]], ...]
    """(token, fractional position) of one site an orbit, in the conventional cell."""

    operations: tuple[str, ...]

    @property
    def mixed(self) -> bool:
        """Whether a site is shared by several elements."""
        return any(c.isdigit() for t in self.primitive[2] for c in t)


def demo_crystals() -> list[DemoCrystal]:
    """All crystals, in a fixed order; the other hand of a crystal stands right after the first."""
    types = {t.label: t for t in structure_types()}
    out = []
    for elements, volume, labels in FAMILIES:
        for label in labels:
            crystal = _crystal(types[label], _renaming(types[label], elements.split()), volume)
            out.append(crystal)
            if (elements, label) in BOTH_HANDS:
                out.append(other_hand(crystal))
    return out + [_crystal(types[label], tokens, volume) for label, tokens, volume in MIXED]


def other_hand(crystal: DemoCrystal) -> DemoCrystal:
    """The mirror image as a crystal of its own, inverted through the origin."""

    def inverted(c: Crystal) -> Crystal:
        return c[0], (-c[1]) - np.floor(-c[1]), c[2]

    return DemoCrystal(
        f"{crystal.name}, other hand",
        inverted(crystal.conventional),
        inverted(crystal.primitive),
        crystal.conventional_index,
        crystal.chiral,
        crystal.name,
        tuple((token, (-x, -y, -z)) for token, (x, y, z) in crystal.unit),
        tuple(_inverted_operation(op) for op in crystal.operations),
    )


def _inverted_operation(triplet: str) -> str:
    """x' = R x + t about the inverted origin: x' = R x - t."""
    op = gemmi.Op(triplet)
    op.tran = [-t % op.DEN for t in op.tran]
    return op.triplet()


def _renaming(found: StructureType, elements: list[str]) -> dict[str, str]:
    """The type's elements, the rarest first, to those of the composition."""
    order = list(dict.fromkeys(found.species))
    order.sort(key=lambda e: (found.species.count(e), found.species.index(e)))
    return dict(zip(order, elements, strict=True))


def _crystal(found: StructureType, tokens: dict[str, str], volume_per_site: float) -> DemoCrystal:
    # The type's edges anew from its parameters, so that no library's cosine enters.
    a, b, c = (round(math.sqrt(sum(x * x for x in row)), 6) for row in found.cell.tolist())
    hexagonal = abs(found.cell[1, 0]) > 1e-6
    shape = np.array([[a, 0, 0], [-b / 2, b * math.sqrt(3) / 2, 0] if hexagonal else [0, b, 0], [0, 0, c]])
    volume = a * b * c * (math.sqrt(3) / 2 if hexagonal else 1)
    factor = round((volume_per_site * len(found.species) / volume) ** (1 / 3), 6)
    names = [tokens[e] for e in found.species]
    conventional: Crystal = (shape * factor, found.positions, names)
    centring = CENTRING[found.pearson[1]]
    primitive = _primitive(conventional, centring)
    if len(primitive[2]) != found.sites_primitive:
        raise AssertionError(f"{found.label}: {len(primitive[2])} sites in the primitive cell")
    return DemoCrystal(
        f"{_composition(names)} {found.prototype if found.label == '-' else found.label}",
        conventional,
        primitive,
        len(names) // found.sites_primitive,
        found.space_group in CHIRAL_GROUPS,
        None,
        tuple((tokens[element], at) for element, at in found.asymmetric_unit),
        found.operations,
    )


def _primitive(conventional: Crystal, steps: tuple[tuple[int, ...], ...]) -> Crystal:
    """conventional = steps @ primitive, so that primitive positions are x @ steps; equal ones are one site."""
    cell, positions, tokens = conventional
    wanted = product(inverse(np.array(steps)), cell)
    moved = product(positions, np.array(steps))
    kept: list[int] = []
    for i, x in enumerate(moved):
        if all(np.abs((x - moved[j]) - np.round(x - moved[j])).max() > 1e-6 for j in kept):
            kept.append(i)
    return wanted, moved[kept] - np.floor(moved[kept]), [tokens[i] for i in kept]


def _composition(names: list[str]) -> str:
    """Tokens with their smallest integer counts, in alphabetical order."""
    counts = {t: names.count(t) for t in sorted(set(names))}
    divisor = math.gcd(*counts.values())
    parts = []
    for token, n in counts.items():
        shown = f"({token})" if any(c.isdigit() for c in token) else token
        parts.append(shown + (str(n // divisor) if n > divisor else ""))
    return "".join(parts)
