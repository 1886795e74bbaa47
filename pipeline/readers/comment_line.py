"""The comment line of an extended-XYZ frame: key=value pairs, as the open format describes them.

Values are bare words, quoted strings with backslash escapes, arrays in brackets `[1, 2, 3]` (nested for matrices) or,
in the older style, numbers in quotes or braces. A key alone is true.
"""

from __future__ import annotations

import json
import re

_KEY = re.compile(r'\s*(?:"((?:[^"\\]|\\.)*)"|([^\s="\[\]{}]+))')
_EQUALS = re.compile(r"\s*=\s*")
_QUOTED = re.compile(r'"((?:[^"\\]|\\.)*)"|\'((?:[^\'\\]|\\.)*)\'')
_BARE = re.compile(r"\S+")
_INTEGER = re.compile(r"[+-]?\d{1,18}")
_REAL = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eEdD][+-]?\d{1,3})?")
_TRUTH = {"T": True, "F": False, "true": True, "false": False}
_TRUTH |= {k.capitalize(): v for k, v in _TRUTH.items() if len(k) > 1} | {
    k.upper(): v for k, v in _TRUTH.items() if len(k) > 1
}


class CommentError(ValueError):
    """The line breaks the grammar."""


def comment_pairs(line: str) -> dict[str, str]:
    """Keys and their values as written (quotes taken off, brackets and braces kept); `T` for a key alone.

    A key that is repeated has its last value. Raises CommentError.
    """
    pairs: dict[str, str] = {}
    at = 0
    line = line.rstrip()
    while at < len(line):
        match = _KEY.match(line, at)
        if match is None:
            raise CommentError(f"no key at column {at + 1}: {line[at : at + 30]!r}")
        key = match[2] if match[2] is not None else _unescaped(match[1])
        at = match.end()
        equals = _EQUALS.match(line, at)
        if equals is None:
            pairs[key] = "T"
            continue
        at = equals.end()
        if at >= len(line):
            raise CommentError(f"key {key!r} has no value")
        if line[at] in "\"'":
            quoted = _QUOTED.match(line, at)
            if quoted is None:
                raise CommentError(f"the quotes after {key}= are not closed")
            pairs[key] = _unescaped(quoted[1] if quoted[1] is not None else quoted[2])
            at = quoted.end()
        elif line[at] in "[{":
            end = _closing(line, at)
            pairs[key] = line[at:end]
            at = end
        else:
            bare = _BARE.match(line, at)
            assert bare is not None
            pairs[key] = bare[0]
            at = bare.end()
    return pairs


def _closing(line: str, at: int) -> int:
    depth = 0
    for i in range(at, len(line)):
        if line[i] in "[{":
            depth += 1
        elif line[i] in "]}":
            depth -= 1
            if depth == 0:
                return i + 1
    raise CommentError(f"the bracket at column {at + 1} is not closed")


def _unescaped(text: str) -> str:
    return re.sub(r"\\(.)", lambda m: "\n" if m[1] == "n" else m[1], text) if "\\" in text else text


def array_of(text: str) -> list[object]:
    """The entries of an array value; nested lists for a nested array. Raises CommentError."""
    body = text.strip()
    if body[:1] == "[":
        return _bracketed(body, 0)[0]
    if body[:1] == "{":
        body = body[1:-1]
    return [scalar_of(t) for t in re.split(r"[\s,]+", body.strip()) if t]


def _bracketed(text: str, at: int) -> tuple[list[object], int]:
    items: list[object] = []
    at += 1
    while at < len(text):
        if text[at] == "[":
            inner, at = _bracketed(text, at)
            items.append(inner)
        elif text[at] == "]":
            return items, at + 1
        elif text[at] in ", \t":
            at += 1
        elif text[at] == '"':
            quoted = _QUOTED.match(text, at)
            if quoted is None:
                break
            items.append(_unescaped(quoted[1]))
            at = quoted.end()
        else:
            match = re.compile(r"[^,\s\[\]]+").match(text, at)
            if match is None:
                break
            items.append(scalar_of(match[0]))
            at = match.end()
    raise CommentError("an array is not closed")


def scalar_of(text: str) -> object:
    """int, float, bool, or the text itself."""
    if _INTEGER.fullmatch(text):
        return int(text)
    if _REAL.fullmatch(text):
        number = float(text.lower().replace("d", "e"))
        return number if abs(number) < float("inf") else text
    return _TRUTH.get(text, text)


def property_of(text: str) -> object:
    """A value as a property: scalars as such, arrays as JSON text."""
    if text[:1] in ("[", "{"):
        try:
            return json.dumps(array_of(text))
        except (CommentError, RecursionError):
            return text
    words = text.split()
    if len(words) > 1:
        numbers = [scalar_of(w) for w in words]
        return json.dumps(numbers) if all(isinstance(x, int | float) for x in numbers) else text
    return scalar_of(text)
