"""The generated tables of README.md and DEVELOPERS.md: `python -m tests.documents` writes them, a test compares."""

from __future__ import annotations

import ast
import re
from pathlib import Path

from typer.main import get_command

from lattice_census.flows.cli import app
from lattice_census.model.columns import TABLES, VIEWS
from lattice_census.model.refusals import REASONS
from lattice_census.output.questions import questions as all_questions
from lattice_census.settings import Settings, SourceSettings, stage_of

ROOT = Path(__file__).parent.parent
FILES = ("README.md", "DEVELOPERS.md")


def _table(*rows: tuple[str, ...]) -> str:
    head, *body = rows
    lines = [head, tuple("---" for _ in head), *body]
    return "\n".join("| " + " | ".join(cell.replace("|", "\\|") for cell in line) + " |" for line in lines)


def commands() -> str:
    """Every command with its first sentence."""
    rows = [("command", "what it does")]
    for name, command in get_command(app).commands.items():  # type: ignore[attr-defined]
        arguments = [p for p in command.params if p.param_type_name == "argument"]
        words = [(p.metavar or p.name.upper()) + ("..." if p.nargs == -1 else "") for p in arguments]
        rows.append((f"`{' '.join([name, *words])}`", command.help.strip().splitlines()[0]))
    return _table(*rows)


def settings() -> str:
    """Every setting with default, stage and meaning."""
    rows = [("setting", "default", "decides", "meaning")]
    for name, field in Settings.model_fields.items():
        if name != "sources":
            default = ", ".join(field.default) if isinstance(field.default, tuple) else str(field.default)
            rows.append((f"`{name}`", default or "(none)", stage_of(name) or "-", field.description or ""))
    return _table(*rows)


def source_settings() -> str:
    """Every setting of a source."""
    fields = SourceSettings.model_fields.items()
    return _table(("setting of a source", "meaning"), *((f"`{n}`", f.description or "") for n, f in fields))


def tables() -> str:
    """Every table and view of the store."""
    rows = [("table or view", "what it holds")]
    rows += [(f"`{name}`", table.meaning) for name, table in TABLES.items()]
    rows += [(f"`{name}` (view)", meaning) for name, meaning in VIEWS.items()]
    return _table(*rows)


def questions() -> str:
    """Every named question."""
    rows = [("question", "what it answers", "parameters")]
    for question in all_questions().values():
        rows.append((f"`{question.name}`", question.sentence, ", ".join(f"`{p.name}`" for p in question.parameters)))
    return _table(*rows)


def reasons() -> str:
    """Every reason code of a refusal."""
    return _table(("reason", "meaning"), *((f"`{code}`", meaning) for code, meaning in REASONS.items()))


def modules() -> str:
    """One line a module: the first sentence of its docstring."""
    lines = []
    for folder in ("pipeline", "flows"):
        for path in sorted((ROOT / folder).rglob("*.py")):
            if path.name != "__init__.py":
                text = " ".join((ast.get_docstring(ast.parse(path.read_text(encoding="utf-8"))) or "").split())
                first = re.split(r"(?<=[.]) ", text, maxsplit=1)[0].rstrip(".")
                lines.append(f"- `{path.relative_to(ROOT).as_posix()}`: {first}.")
    return "\n".join(lines)


PARTS = {f.__name__: f for f in (commands, settings, source_settings, tables, questions, reasons, modules)}


def filled(text: str) -> str:
    """The text with every part between `<!-- NAME -->` and `<!-- end NAME -->` made anew."""

    def part(match: re.Match[str]) -> str:
        name = match[1]
        return f"<!-- {name} -->\n\n{PARTS[name]()}\n\n<!-- end {name} -->"

    return re.sub(r"<!-- (\w+) -->\n.*?<!-- end \1 -->", part, text, flags=re.DOTALL)


def main() -> None:
    """Write the parts into the files."""
    for name in FILES:
        path = ROOT / name
        path.write_text(filled(path.read_text(encoding="utf-8")), encoding="utf-8")


if __name__ == "__main__":
    main()
