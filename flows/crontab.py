"""Times of a crontab: what the five fields mean, and how a night is written down for cron and for systemd.

The fields are those of POSIX crontab: minute, hour, day of the month, month, day of the week, each `*`, numbers,
ranges and lists; with the common additions of steps (`*/15`) and of names (`mon`, `jan`).
"""

from __future__ import annotations

import re
import shlex
from collections.abc import Sequence
from dataclasses import dataclass

from lattice_census.errors import UsageError

MONTHS = ("jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec")
DAYS = ("sun", "mon", "tue", "wed", "thu", "fri", "sat")

_FIELDS: tuple[tuple[str, int, int, tuple[str, ...]], ...] = (
    ("minute", 0, 59, ()),
    ("hour", 0, 23, ()),
    ("day of the month", 1, 31, ()),
    ("month", 1, 12, MONTHS),
    ("day of the week", 0, 7, DAYS),
)
_LONGEST_MONTHS = (31, 29, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31)


@dataclass(frozen=True, slots=True)
class Cron:
    """Five fields, each as the sorted numbers it stands for, or None for `*`. Sunday is 0."""

    minutes: tuple[int, ...] | None
    hours: tuple[int, ...] | None
    days_of_month: tuple[int, ...] | None
    months: tuple[int, ...] | None
    days_of_week: tuple[int, ...] | None

    text: str
    """As given, with single blanks."""


def parse_cron(text: str) -> Cron:
    """The fields of a crontab's time; UsageError that names the field and what it takes."""
    words = text.split()
    if len(words) != 5:
        raise UsageError(
            f"--cron {text!r}: give five fields (minute, hour, day of the month, month, day of the week), like "
            "'0 2 * * *' for two o'clock every night."
        )
    found = [_field(word, *which) for word, which in zip(words, _FIELDS, strict=True)]
    minutes, hours, days, months, week = found
    if week is not None:
        week = tuple(sorted({day % 7 for day in week}))
    if days is not None and week is None and min(days) > max(_LONGEST_MONTHS[m - 1] for m in months or range(1, 13)):
        raise UsageError(f"--cron {text!r}: no such day ever comes.")
    return Cron(minutes, hours, days, months, week, " ".join(words))


def _field(word: str, name: str, low: int, high: int, names: tuple[str, ...]) -> tuple[int, ...] | None:
    if word == "*":
        return None
    out: set[int] = set()
    for part in word.split(","):
        match = re.fullmatch(r"(\*|\w+)(?:-(\w+))?(?:/(\d{1,2}))?", part)
        if match is None or (match[1] == "*" and match[2]):
            raise _wrong(part, name, low, high, names)
        first = low if match[1] == "*" else _number(match[1], part, name, low, high, names)
        if match[2]:
            last = _number(match[2], part, name, low, high, names)
        else:
            last = high if match[1] == "*" or match[3] else first
        step = int(match[3] or 1)
        if last < first or step < 1:
            raise _wrong(part, name, low, high, names)
        out.update(range(first, last + 1, step))
    return tuple(sorted(out))


def _number(word: str, part: str, name: str, low: int, high: int, names: tuple[str, ...]) -> int:
    if word.lower() in names:
        return names.index(word.lower()) + low
    if not re.fullmatch(r"[0-9]{1,2}", word) or not low <= int(word) <= high:
        raise _wrong(part, name, low, high, names)
    return int(word)


def _wrong(part: str, name: str, low: int, high: int, names: tuple[str, ...]) -> UsageError:
    also = f" or {names[0]} to {names[-1]}" if names else ""
    return UsageError(
        f"--cron: {part!r} is no {name}; it takes {low} to {high}{also}, ranges, lists, * and steps (*/5)."
    )


def crontab_line(cron: Cron, words: Sequence[str]) -> str:
    """One line for `crontab -e`: the time and the command, in which cron takes a bare % for the end of the line."""
    return f"{cron.text} {shlex.join(words)}".replace("%", "\\%")


def systemd_units(cron: Cron, zone: str | None, words: Sequence[str], name: str) -> str:
    """A service and its timer, as one text with the names of the two files in comments."""
    command = " ".join(_systemd_word(word) for word in words)
    unit = f"lattice-census-{name}"
    return "\n".join(
        (
            f"# ~/.config/systemd/user/{unit}.service",
            "[Unit]",
            f"Description=Lattice Census, {name}",
            "",
            "[Service]",
            "Type=oneshot",
            f"ExecStart={command}",
            "",
            f"# ~/.config/systemd/user/{unit}.timer",
            "[Unit]",
            f"Description=When Lattice Census, {name}, runs",
            "",
            "[Timer]",
            f"OnCalendar={calendar(cron)}{f' {zone}' if zone else ''}",
            "Persistent=true",
            "",
            "[Install]",
            "WantedBy=timers.target",
            "",
            f"# Then: systemctl --user daemon-reload && systemctl --user enable --now {unit}.timer",
            "# and, to have it run while you are logged out: loginctl enable-linger",
        )
    )


def calendar(cron: Cron) -> str:
    """The time as systemd.time(7) has it. UsageError for the one thing that it cannot say."""
    if cron.days_of_month is not None and cron.days_of_week is not None:
        # crontab: either day will do; systemd: both must hold.
        raise UsageError(
            f"--cron {cron.text!r}: a day of the month or of the week, whichever comes, cannot be said to systemd. "
            "Give one of the two, or print a crontab line."
        )
    week = "" if cron.days_of_week is None else ",".join(DAYS[d].capitalize() for d in cron.days_of_week) + " "
    month, day = _listed(cron.months), _listed(cron.days_of_month)
    return f"{week}*-{month}-{day} {_listed(cron.hours)}:{_listed(cron.minutes)}:00"


def _listed(numbers: tuple[int, ...] | None) -> str:
    return "*" if numbers is None else ",".join(f"{n:02}" for n in numbers)


def _systemd_word(word: str) -> str:
    word = word.replace("\\", "\\\\").replace('"', '\\"').replace("%", "%%").replace("$", "$$")
    return f'"{word}"' if re.search(r"[\s\"'\\;]", word) or not word else word
