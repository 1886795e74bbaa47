"""Pins as a TOML file, to be kept under version control or taken to another store of the same collection."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path
from typing import Any

from ..errors import UsageError
from .pins import KINDS

HEAD = "# Pins of lattice-census: `lattice-census pin import FILE` sets them in another store.\n"


def pins_text(pins: list[dict[str, Any]]) -> str:
    """The text of a file with pins as `listed_pins` gives them."""
    blocks = [HEAD]
    for pin in pins:
        lines = ["[[pin]]", f"kind = {_quoted(pin['kind'])}", f"reason = {_quoted(pin['reason'])}"]
        for record in pin["records"]:
            lines.append("[[pin.record]]")
            lines += [f"{name} = {_quoted(record[name])}" for name in ("record_id", "source", "file", "label")]
        blocks.append("\n".join(lines) + "\n")
    return "\n".join(blocks)


def read_pins(path: Path) -> list[tuple[str, tuple[str, ...], str]]:
    """(kind, record ids, reason) of every pin of a file. Raises UsageError naming what is wrong."""
    try:
        content = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise UsageError(f"The file of pins {path} cannot be read: {error.strerror}.") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise UsageError(f"The file of pins {path} is not TOML: {error}.") from error
    listed = content.get("pin", [])
    if set(content) - {"pin"} or not isinstance(listed, list):
        raise UsageError(f"{path} is no file of pins: it has to hold [[pin]] tables and nothing else.")
    out = []
    for number, pin in enumerate(listed, start=1):
        try:
            kind, reason = pin["kind"], pin["reason"]
            records = tuple(str(record["record_id"]) for record in pin["record"])
            good = KINDS.get(kind) == len(set(records)) == len(records) and isinstance(reason, str) and reason.strip()
        except (KeyError, TypeError, AttributeError):
            good = False
        if not good:
            raise UsageError(
                f"Pin {number} of {path} is not whole: it needs a kind (keep, apart, together), a reason, and one or "
                "two [[pin.record]] tables with a record_id each."
            )
        out.append((kind, records, reason))
    return out


def _quoted(text: str) -> str:
    """A basic string of TOML: JSON's escapes, and DEL, which JSON lets stand."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007F")
