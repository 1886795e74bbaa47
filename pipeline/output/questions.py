"""The named questions: sql/questions/NAME.sql, each with a header that documents and types it.

The header is the run of comment lines at the top of the file:

    -- Which records stand in one group with this one?
    -- $record RECORD: the record, as an id or SOURCE:LABEL
    -- $grade GRADE = 'key': grade of the groups
    -- $least INTEGER = 1: only groups of at least so many records

The first line is the question. Every further line is a parameter: name, type, default where there is one (NULL, a
number, true, false, or a quoted text), and meaning. A parameter without a default has to be given. Values are bound to
the statement, never pasted into it.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from ..errors import UsageError

if TYPE_CHECKING:
    import duckdb

TYPES: dict[str, str] = {
    "VARCHAR": "text",
    "INTEGER": "a whole number",
    "DOUBLE": "a number",
    "BOOLEAN": "true or false",
    "FORMULA": "a chemical formula in any order; bound reduced and in alphabetical order, as in records.formula",
    "RECORD": "a record id or SOURCE:LABEL; bound as the id",
    "GRADE": "a grade that the store has groups of",
}
"""Types of parameters and what a person gives for them."""

_PARAMETER = re.compile(
    r"\$(?P<name>[a-z][a-z0-9_]*) (?P<type>[A-Z]+)(?: = (?P<default>'[^']*'|[^\s:]+))?: (?P<meaning>.+)"
)


@dataclass(frozen=True, slots=True)
class Parameter:
    """One parameter of a question."""

    name: str
    type: str
    """A key of TYPES."""

    required: bool
    default: Any
    meaning: str

    @property
    def option(self) -> str:
        """How it is given: `--name`, with hyphens."""
        return "--" + self.name.replace("_", "-")


@dataclass(frozen=True, slots=True)
class Question:
    """One named question."""

    name: str
    sentence: str
    parameters: tuple[Parameter, ...]
    sql: str

    def usage(self) -> str:
        """One line a parameter: option, type, default, meaning."""
        lines = []
        for p in self.parameters:
            shown = str(p.default).lower() if p.type == "BOOLEAN" else f"{p.default}".removesuffix(".0")
            default = "" if p.required or p.default is None else f" = {shown}"
            lines.append(f"{p.option} {p.type}{default}: {p.meaning}{' (has to be given)' if p.required else ''}")
        return "\n".join(lines)


def parse_question(name: str, text: str) -> Question:
    """The question of a file. Raises ValueError that says what is wrong with its header."""
    header: list[str] = []
    body: list[str] = []
    for line in text.splitlines():
        if not body and line.startswith("--"):
            header.append(line.removeprefix("--").strip())
        else:
            body.append(line)
    sql = "\n".join(body).strip().removesuffix(";")
    if not header or not header[0].endswith("?"):
        raise ValueError(f"{name}: the first line must be a comment with the question, ending in a question mark")
    if not sql:
        raise ValueError(f"{name}: there is no statement")
    parameters = tuple(_parse_parameter(name, line) for line in header[1:])
    if len({p.name for p in parameters}) < len(parameters):
        raise ValueError(f"{name}: a parameter stands twice in the header")
    return Question(name, header[0], parameters, sql)


def _parse_parameter(name: str, line: str) -> Parameter:
    match = _PARAMETER.fullmatch(line)
    if match is None:
        raise ValueError(f"{name}: {line!r} is no line of the form `$name TYPE = default: meaning`")
    kind, default = match["type"], match["default"]
    if kind not in TYPES:
        raise ValueError(f"{name}: {kind} is no type of a parameter; there are {', '.join(TYPES)}")
    value = None
    if default is not None and default != "NULL":
        quoted = default.startswith("'")
        if quoted != (kind in ("VARCHAR", "FORMULA", "RECORD", "GRADE")):
            raise ValueError(f"{name}: the default of ${match['name']} is no {kind}")
        try:
            value = _value(kind, default.strip("'"))
        except ValueError as error:
            raise ValueError(f"{name}: the default of ${match['name']} is no {kind}") from error
    return Parameter(match["name"], kind, default is None, value, match["meaning"])


@cache
def questions() -> dict[str, Question]:
    """Every named question by name, in alphabetical order."""
    found = {}
    for entry in (files("lattice_census.sql") / "questions").iterdir():
        if entry.name.endswith(".sql"):
            name = entry.name.removesuffix(".sql")
            found[name] = parse_question(name, entry.read_text(encoding="utf-8"))
    return dict(sorted(found.items()))


def question_named(name: str) -> Question:
    """The question of that name (hyphens and underscores alike); UsageError listing the names there are."""
    wanted = name.replace("_", "-")
    known = questions()
    if wanted in known:
        return known[wanted]
    close = difflib.get_close_matches(wanted, known, n=3)
    hint = f" Did you mean: {', '.join(close)}?" if close else ""
    raise UsageError(
        f"There is no question {name!r}.{hint}\nThe questions: {', '.join(known)}\n"
        "`lattice-census ask` lists them with what they mean."
    )


def bind(question: Question, given: Mapping[str, str], connection: duckdb.DuckDBPyConnection) -> dict[str, Any]:
    """Values for every parameter of the question from texts by name; read-only.

    Raises UsageError for an unknown or missing parameter and for a text that is no value of the type, saying what the
    question takes.
    """
    known = {p.name: p for p in question.parameters}
    texts = {name.replace("-", "_"): text for name, text in given.items()}
    takes = f"\n{question.name} takes:\n{question.usage()}" if known else f"\n{question.name} takes no parameters."
    for name in texts:
        if name not in known:
            raise UsageError(f"The question {question.name} has no parameter --{name.replace('_', '-')}.{takes}")
    values = {}
    for p in question.parameters:
        if p.name in texts:
            try:
                value = _value(p.type, texts[p.name])
            except ValueError:
                raise UsageError(f"{p.option} {texts[p.name]}: give {TYPES[p.type]}.{takes}") from None
        elif p.required:
            raise UsageError(f"The question {question.name} needs {p.option}.{takes}")
        else:
            value = p.default
        if value is not None and p.type == "RECORD":
            value = _record(connection, value)
        if value is not None and p.type == "GRADE":
            _check_grade(connection, p, value)
        values[p.name] = value
    return values


def _value(kind: str, text: str) -> Any:
    """The text as a value of the type; ValueError where it is none."""
    if kind == "INTEGER":
        value = int(text)
        if abs(value) >= 1 << 63:
            raise ValueError(text)
        return value
    if kind == "DOUBLE":
        number = float(text)
        if not math.isfinite(number):
            raise ValueError(text)
        return number
    if kind == "BOOLEAN":
        truth = {"true": True, "yes": True, "false": False, "no": False}
        if text.lower() not in truth:
            raise ValueError(text)
        return truth[text.lower()]
    if kind == "FORMULA":
        return reduced_formula(text)
    return text


def reduced_formula(text: str) -> str:
    """`TiO2` or `Ti2O4` as records.formula has it: `O2Ti`. ValueError for a text that is no plain formula."""
    if not re.fullmatch(r"(?:[A-Z][a-z]?(?:[1-9]\d{0,8})?)+", text):
        raise ValueError(text)
    counts: dict[str, int] = {}
    for symbol, count in re.findall(r"([A-Z][a-z]?)(\d*)", text):
        counts[symbol] = counts.get(symbol, 0) + int(count or 1)
    divisor = math.gcd(*counts.values())
    return "".join(f"{s}{n // divisor if n // divisor > 1 else ''}" for s, n in sorted(counts.items()))


def _record(connection: duckdb.DuckDBPyConnection, text: str) -> str:
    from ..store.find import find_record

    return find_record(connection, text)


def _check_grade(connection: duckdb.DuckDBPyConnection, parameter: Parameter, grade: str) -> None:
    rows = connection.execute(
        "SELECT DISTINCT grade FROM members ORDER BY list_position(['copy', 'key', 'same', 'near', 'rescaled', "
        "'isotypic'], grade)"
    ).fetchall()
    grades = [g for (g,) in rows]
    if grades and grade not in grades:
        raise UsageError(f"{parameter.option} {grade}: the store has groups of grade {', '.join(grades)}.")
