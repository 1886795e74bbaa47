"""Chemical elements, species tokens, and the formulas that follow from them.

A species token is what one site holds, as text: the symbol of an element where the site is full (`Fe`), else the
sorted elements with their occupancies rounded to 1e-4 (`Fe0.5Ni0.5`, `Li0.5`). Two sites are of equal species if and
only if their tokens are equal. Deuterium and tritium (`D`, `T`) are read as hydrogen: they are isotopes of one element,
and a geometry is compared here, not a mass.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np

from .batch import CrystalBatch

_PERIODIC_TABLE = """
H He Li Be B C N O F Ne Na Mg Al Si P S Cl Ar K Ca Sc Ti V Cr Mn Fe Co Ni Cu Zn Ga Ge As Se Br Kr Rb Sr Y Zr Nb Mo Tc Ru
Rh Pd Ag Cd In Sn Sb Te I Xe Cs Ba La Ce Pr Nd Pm Sm Eu Gd Tb Dy Ho Er Tm Yb Lu Hf Ta W Re Os Ir Pt Au Hg Tl Pb Bi Po At
Rn Fr Ra Ac Th Pa U Np Pu Am Cm Bk Cf Es Fm Md No Lr Rf Db Sg Bh Hs Mt Ds Rg Cn Nh Fl Mc Lv Ts Og
"""

ELEMENTS: tuple[str, ...] = tuple(_PERIODIC_TABLE.split())
"""The 118 symbols of the IUPAC periodic table in order of atomic number (ELEMENTS[0] is H)."""

ISOTOPES = {"D": "H", "T": "H"}
"""Symbols of isotopes, read as their element."""

OCCUPANCY_DECIMALS = 4
"""Occupancies are rounded to this many decimals in a token."""

OCCUPANCY_EXCESS = 0.01
"""A site may add up to 1 plus this: room for occupancies that were rounded in print."""

AMOUNT_TOLERANCE = 1e-3
"""Amounts of a formula with fractions are reproduced by integers to this, per smallest unit of whole sites."""

_ELEMENT_SET = frozenset(ELEMENTS)
_SYMBOLS = {symbol: symbol for symbol in ELEMENTS} | ISOTOPES
_PART = re.compile(r"([A-Z][a-z]?)(\d+\.\d+|\d+)?")


class OccupancyError(ValueError):
    """Occupancies that no site can have."""


def element_of(text: str, any_case: bool = False) -> str | None:
    """The element that a symbol names, or None. `any_case` also takes `FE` and `fe`; D and T give H."""
    return _SYMBOLS.get(text.capitalize() if any_case else text)


def element_of_number(number: int) -> str | None:
    """The element of an atomic number, 1 to 118, or None."""
    return ELEMENTS[number - 1] if 1 <= number <= len(ELEMENTS) else None


def token_of(parts: Iterable[tuple[str, float]]) -> str:
    """The token of a site from (element symbol, occupancy) pairs; equal elements are added up.

    Raises OccupancyError for an occupancy that is not a finite number above 0 (or rounds to 0), and for a sum above
    1 + OCCUPANCY_EXCESS. One element that rounds to 1, or lies above it within the excess, is a full site.
    """
    amounts: dict[str, float] = {}
    for symbol, occupancy in parts:
        if not (math.isfinite(occupancy) and occupancy > 0):
            raise OccupancyError(f"occupancy {occupancy} of {symbol} is not a finite number above 0")
        amounts[symbol] = amounts.get(symbol, 0.0) + occupancy
    total = sum(amounts.values())
    if total > 1 + OCCUPANCY_EXCESS + 1e-9:
        raise OccupancyError(f"the occupancies of {', '.join(sorted(amounts))} on one site add up to {total:.4f}")
    rounded = {symbol: round(amount, OCCUPANCY_DECIMALS) for symbol, amount in amounts.items()}
    if not rounded or min(rounded.values()) <= 0:
        raise OccupancyError("an occupancy rounds to 0")
    if len(rounded) == 1:
        ((symbol, occupancy),) = rounded.items()
        if occupancy >= 1:
            return symbol
    return "".join(f"{symbol}{_decimal(rounded[symbol])}" for symbol in sorted(rounded))


def _decimal(value: float) -> str:
    return f"{value:.{OCCUPANCY_DECIMALS}f}".rstrip("0").rstrip(".")


@lru_cache(maxsize=65536)
def parse_token(token: str) -> tuple[tuple[str, float], ...]:
    """The (element, occupancy) pairs of a token, sorted by element; raises ValueError for a text that is no token."""
    parts: list[tuple[str, float]] = []
    end = 0
    for match in _PART.finditer(token):
        if match.start() != end or match[1] not in _ELEMENT_SET:
            break
        parts.append((match[1], float(match[2]) if match[2] else 1.0))
        end = match.end()
    if end != len(token) or not parts or token_of(parts) != token:
        raise ValueError(f"{token!r} is no species token")
    return tuple(parts)


def is_full(token: str) -> bool:
    """Whether the token is one element at occupancy 1."""
    return token in _ELEMENT_SET


@dataclass(frozen=True, slots=True)
class Formula:
    """What a list of tokens says about chemistry; equal for every cell of one crystal."""

    formula: str
    """chemical_formula_reduced of OPTIMADE: elements in alphabetical order, the smallest integers, 1 left out."""

    formula_anonymous: str
    """chemical_formula_anonymous of OPTIMADE: the integers in descending order with A, B, ... for the elements."""

    elements: tuple[str, ...]
    """Element symbols in alphabetical order."""

    composition: str
    """Species tokens with reduced counts, such as `O2 Ti` or `(Fe0.5Ni0.5)3 O4`, and `layer` after those of a layer:
    equal exactly where two crystals have the same periodicity and the same reduced composition over tokens, which a
    match requires."""


def formula_of(tokens: Sequence[str]) -> Formula:
    """The formulas of one crystal from the tokens of its sites, at least one."""
    counts: dict[str, int] = {}
    for token in tokens:
        counts[token] = counts.get(token, 0) + 1
    names = sorted(counts)
    return _formula(tuple(names), _reduced(tuple(counts[n] for n in names)))


def formulas_of(batch: CrystalBatch) -> list[Formula]:
    """The formulas of every crystal of a batch (each with at least one site), computed once a distinct composition."""
    n, width = len(batch), max(len(batch.tokens), 1)
    owner = np.repeat(np.arange(n, dtype=np.int64), np.diff(batch.offsets))
    keys, counts = np.unique(owner * width + batch.species, return_counts=True)
    starts = np.searchsorted(keys, np.arange(n + 1, dtype=np.int64) * width)
    codes = (keys % width).tolist()
    numbers = counts.tolist()
    layers = (batch.periodicity == 2).tolist()
    seen: dict[tuple[tuple[int, ...], tuple[int, ...], bool], Formula] = {}
    result: list[Formula] = []
    for low, high, layer in zip(starts[:-1].tolist(), starts[1:].tolist(), layers, strict=True):
        key = (tuple(codes[low:high]), tuple(numbers[low:high]), layer)
        formula = seen.get(key)
        if formula is None:
            formula = _formula(tuple(batch.tokens[c] for c in key[0]), _reduced(key[1]))
            if layer:
                formula = replace(formula, composition=f"{formula.composition} layer")
            seen[key] = formula
        result.append(formula)
    return result


def _reduced(counts: tuple[int, ...]) -> tuple[int, ...]:
    divisor = math.gcd(*counts)
    return tuple(c // divisor for c in counts)


@lru_cache(maxsize=65536)
def _formula(names: tuple[str, ...], counts: tuple[int, ...]) -> Formula:
    amounts: dict[str, float] = {}
    for name, count in zip(names, counts, strict=True):
        for symbol, occupancy in parse_token(name):
            amounts[symbol] = amounts.get(symbol, 0.0) + count * occupancy
    elements = sorted(amounts)
    integers = smallest_integers([amounts[e] for e in elements])
    return Formula(
        formula="".join(f"{e}{n if n > 1 else ''}" for e, n in zip(elements, integers, strict=True)),
        formula_anonymous="".join(
            f"{anonymous_symbol(i)}{n if n > 1 else ''}" for i, n in enumerate(sorted(integers, reverse=True))
        ),
        elements=tuple(elements),
        composition=" ".join(
            f"{name if name in _ELEMENT_SET else f'({name})'}{count if count > 1 else ''}"
            for name, count in zip(names, counts, strict=True)
        ),
    )


def smallest_integers(amounts: Sequence[float]) -> tuple[int, ...]:
    """The integers of a reduced formula from positive amounts per smallest unit of whole sites.

    The rule: the smallest k >= 1 for which every amount lies within AMOUNT_TOLERANCE of n/k with an integer n >= 1;
    the n, divided by their common divisor, are the formula. Amounts are multiples of 1e-4 (occupancies are rounded to
    that), so that k = 10000 always does and the search ends.
    """
    whole = [round(a) for a in amounts]
    if all(n >= 1 and abs(a - n) <= AMOUNT_TOLERANCE + 1e-12 for a, n in zip(amounts, whole, strict=True)):
        return _reduced(tuple(whole))  # k = 1, as in every crystal without mixed sites
    x = np.asarray(amounts, dtype=np.float64)
    k = np.arange(1, 10**OCCUPANCY_DECIMALS + 1)[:, None]
    n = np.rint(x * k)
    fits = ((n >= 1) & (np.abs(x - n / k) <= AMOUNT_TOLERANCE + 1e-12)).all(axis=1)
    return _reduced(tuple(int(i) for i in n[int(np.argmax(fits))]))


def anonymous_symbol(index: int) -> str:
    """A, B, ... Z, Aa, Ba, ... Za, Ab, Bb, ...: the symbols of an anonymous formula (OPTIMADE specification)."""
    letter = chr(ord("A") + index % 26)
    return letter if index < 26 else letter + chr(ord("a") + index // 26 - 1)
