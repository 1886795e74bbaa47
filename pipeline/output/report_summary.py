"""The summary of a report: what the store holds, in plain words."""

from __future__ import annotations

from ..store.rows import one_number
from .report_facts import Facts, counted, ungrouped
from .report_page import paragraph
from .tolerance_curve import ToleranceCurve


def _share(part: int, whole: int) -> str:
    return f"{part:,} ({100.0 * part / whole if whole else 0.0:.1f} %)"


def summary_html(facts: Facts) -> str:
    """What the store holds, in plain words."""
    told, totals = facts.status, facts.survey.totals
    records, crystals = told["current"], totals["crystals"]
    out = {
        "refused": told["rejected"], "gone from their files": told["missing"], "withdrawn": told["withdrawn"]
    }  # fmt: skip
    left = ", ".join(f"{number:,} {word}" for word, number in out.items() if number)
    parts = [
        paragraph(
            f"The collection holds {counted(records, 'record')} of {counted(totals['formulas'], 'formula')} from "
            f"{counted(totals['sources'], 'source')}."
            + (f" Not counted here: {left}." if left else " None is refused, missing or withdrawn.")
        ),
        paragraph(f"By their canonical form they are {counted(crystals, 'distinct crystal')}."),
        paragraph(
            f"{_share(totals['oversized_cells'], records)} of the records came in a cell larger than the primitive "
            f"one. In {_share(totals['pseudo_symmetric'], records)} the lattice has more symmetry than the crystal, "
            f"and in {_share(totals['symmetry_unsure'], records)} the space group depends on the tolerance."
        ),
    ]
    at = next((g for g in told["groups"] if g["grade"] == facts.grade), None)
    if at is None:
        return "\n".join([*parts, ungrouped()])
    limits = ""
    if facts.grade == "near":
        limits = f" (largest shift {facts.settings.near_shift:g} Å, strain {facts.settings.near_strain:g})"
    decided = one_number(
        facts.connection,
        "SELECT count(DISTINCT record_id) FROM decisions_in_force JOIN current_records USING (record_id)",
    )
    repeat = (
        f"{_share(at['set_aside'], records)} of the records repeat another one; the largest group holds "
        f"{at['largest']:,}. {counted(decided, 'record')} {'is' if decided == 1 else 'are'} set aside by a decision, "
        "which can be taken back."
        if at["set_aside"]
        else "No record repeats another one."
    )
    groups = f"At grade {at['grade']}{limits} they fall into {counted(at['groups'], 'group')}."
    parts.append(paragraph(groups, repeat))
    if facts.curve is not None:
        parts.append(paragraph(_steadiness(facts.curve)))
    findings = one_number(facts.connection, "SELECT count(*) FROM findings")
    held = len(facts.holds)
    if findings or held:
        parts.append(
            paragraph(
                f"For a curator to look at: {counted(findings, 'finding')}, and {counted(held, 'group')} or records "
                "that `keep` leaves alone."
                if held
                else f"For a curator to look at: {counted(findings, 'finding')}."
            )
        )
    return "\n".join(parts)


def _steadiness(curve: ToleranceCurve) -> str:
    """What the curve says of the chosen tolerance, in a sentence or two."""
    if not len(curve.steps):
        return (
            f"The number of families does not depend on the tolerance at all: up to {curve.window:g} times the limits "
            "of near no two crystals match."
        )
    longest = curve.plateaus()[0]
    told = (
        f"The number of families stays at {longest.families:,} from {longest.start:.2f} to {longest.end:.2f} times the "
        "limits of near, the longest stretch without a change."
    )
    if longest.start <= 1.0 < longest.end:
        return told + " The chosen tolerance lies in it."
    low, high = curve.families(1.1), curve.families(0.9)
    return (
        told + f" The chosen tolerance does not lie in it: from 0.9 to 1.1 times the limits the number goes from "
        f"{high:,} to {low:,}."
    )
