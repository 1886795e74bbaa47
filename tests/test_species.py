"""Species tokens and formulas; the conventions are those of the OPTIMADE specification."""

import numpy as np
import pytest

from lattice_census.model.species import (
    ELEMENTS,
    OccupancyError,
    anonymous_symbol,
    element_of,
    element_of_number,
    formula_of,
    formulas_of,
    is_full,
    parse_token,
    smallest_integers,
    token_of,
)

from . import strategies


def test_the_elements_are_those_of_ase():
    from ase.data import chemical_symbols

    assert list(ELEMENTS) == chemical_symbols[1:119]
    assert element_of_number(26) == "Fe" and element_of_number(0) is None and element_of_number(119) is None


def test_isotopes_are_hydrogen_and_case_counts_unless_asked():
    assert element_of("D") == element_of("T") == "H"
    assert element_of("FE") is None and element_of("FE", any_case=True) == "Fe"
    assert element_of("X") is None and element_of("") is None and element_of("Vac") is None


@pytest.mark.parametrize(
    ("parts", "token"),
    [
        ([("Fe", 1.0)], "Fe"),
        ([("Ni", 0.5), ("Fe", 0.5)], "Fe0.5Ni0.5"),
        ([("Li", 0.5)], "Li0.5"),
        ([("Li", 0.25), ("Li", 0.25)], "Li0.5"),
        ([("Li", 0.5), ("Li", 0.5)], "Li"),
        ([("Li", 0.99996)], "Li"),
        ([("Li", 1.005)], "Li"),
        ([("Fe", 1 / 3), ("Ni", 2 / 3)], "Fe0.3333Ni0.6667"),
        ([("Na", 0.0001)], "Na0.0001"),
    ],
)
def test_tokens_are_written_and_parsed_back(parts, token):
    assert token_of(parts) == token
    assert token_of(parse_token(token)) == token
    assert is_full(token) == (len(parse_token(token)) == 1 and parse_token(token)[0][1] == 1)


@pytest.mark.parametrize(
    "parts",
    [[("Fe", 0.0)], [("Fe", -0.5)], [("Fe", float("nan"))], [("Fe", float("inf"))], [("Fe", 0.00001)], [],
     [("Fe", 0.6), ("Ni", 0.5)], [("Fe", 1.02)]],
)  # fmt: skip
def test_impossible_occupancies_are_refused(parts):
    with pytest.raises(OccupancyError):
        token_of(parts)


@pytest.mark.parametrize("text", ["", "fe", "Xx", "Fe0.5Fe0.5", "Ni0.5Fe0.5", "Fe1.0", "Fe0.50", "Fe 0.5", "0.5"])
def test_what_is_no_token_is_not_parsed(text):
    with pytest.raises(ValueError):
        parse_token(text)


@pytest.mark.parametrize(
    ("tokens", "formula", "anonymous", "composition"),
    [
        (["Ti", "O", "O"], "O2Ti", "A2B", "O2 Ti"),
        (["O", "Ti", "O"] * 4, "O2Ti", "A2B", "O2 Ti"),
        (["Si"] * 8, "Si", "A", "Si"),
        (["Li0.5", "Co", "O", "O"], "Co2LiO4", "A4B2C", "Co (Li0.5) O2"),
        (["Fe0.5Ni0.5"] * 3 + ["O"] * 4, "Fe3Ni3O8", "A8B3C3", "(Fe0.5Ni0.5)3 O4"),
        (["Fe0.3333Ni0.6667"], "FeNi2", "A2B", "(Fe0.3333Ni0.6667)"),
        (["Fe0.9998Ni0.0002"], None, None, "(Fe0.9998Ni0.0002)"),
    ],
)
def test_formulas(tokens, formula, anonymous, composition):
    found = formula_of(tokens)
    assert found.composition == composition
    if formula is not None:
        assert (found.formula, found.formula_anonymous) == (formula, anonymous)
    else:
        # A trace of an element is never rounded away.
        assert found.elements == ("Fe", "Ni") and "Ni" in found.formula


def test_a_half_filled_site_and_half_the_sites_are_different_compositions():
    assert formula_of(["Fe0.5Ni0.5"]).formula == formula_of(["Fe", "Ni"]).formula == "FeNi"
    assert formula_of(["Fe0.5Ni0.5"]).composition != formula_of(["Fe", "Ni"]).composition


def test_integers_are_those_of_a_plain_search_by_the_rule():
    rng = np.random.default_rng(1)
    for _ in range(200):
        amounts = [float(x) for x in np.round(rng.uniform(0.001, 5, rng.integers(1, 6)), 4)]
        for k in range(1, 10_001):
            n = [round(x * k) for x in amounts]
            if min(n) >= 1 and all(abs(x - m / k) <= 1e-3 + 1e-12 for x, m in zip(amounts, n, strict=True)):
                break
        divisor = int(np.gcd.reduce(n))
        assert smallest_integers(amounts) == tuple(m // divisor for m in n)


def test_anonymous_symbols_go_on_after_z():
    assert [anonymous_symbol(i) for i in (0, 25, 26, 27, 51, 52)] == ["A", "Z", "Aa", "Ba", "Za", "Ab"]


def test_formulas_of_a_batch_are_those_of_its_crystals_whatever_else_is_in_it():
    rng = np.random.default_rng(2)
    crystals = []
    for _ in range(60):
        crystal = strategies.random_crystal(rng, sites=int(rng.integers(1, 6)), elements=("Si", "O", "Fe"), apart=0.9)
        tokens = [t if rng.random() < 0.8 else "Fe0.5Ni0.5" for t in crystal[2]]
        crystals.append((crystal[0], crystal[1], tokens))
    whole = formulas_of(strategies.batch(crystals))
    assert whole == [formula_of(c[2]) for c in crystals]
    assert whole[10:20] == formulas_of(strategies.batch(crystals[10:20]))


def test_a_supercell_has_the_formulas_of_its_crystal():
    rng = np.random.default_rng(3)
    for crystal in strategies.type_crystals():
        assert formula_of(strategies.disguise(rng, crystal, 6)[2]) == formula_of(crystal[2])
