"""Ten times the records with the same share of copies: how many times the time and the memory."""

from __future__ import annotations

from .collection import Kind, truth
from .figures import Figure, Options, Report
from .known_answer import check_answer
from .night import nights
from .timing import Seconds


def run(options: Options) -> Report:
    """Nights on N and 10 N records (`--records` is 10 N), start-up apart; both are compared with the known answer."""
    large = options.count(20_000)
    small = large // 10
    repeat = options.times(3 if large <= 20_000 else 1)
    few, many = (nights(options.scratch, Kind(), n, options.workers, repeat) for n in (small, large))
    for count, done in ((small, few), (large, many)):
        check_answer(done[-1].store, count, len(set(truth(Kind(), 0, count).tolist())))
    figures = [
        Seconds(tuple(n.work_s for n in few)).figure(f"night, {small} records, start-up apart"),
        Seconds(tuple(n.work_s for n in many)).figure(f"night, {large} records, start-up apart"),
        _times("time, 10 x the records", [n.work_s for n in few], [n.work_s for n in many], 11.0),
        _times(
            "processor time, 10 x the records", [n.processor_work_s for n in few], [n.processor_work_s for n in many]
        ),
    ]
    for name in ("read", "classify", "compare and group"):
        a, b = ([n.stages[name] for n in done] for done in (few, many))
        figures.append(_times(f"stage: {name}, 10 x the records", a, b))
    return Report("grow", {"records": f"{small} and {large}", "workers": options.workers}, tuple(figures))


def _times(what: str, few: list[float], many: list[float], reach: float | None = None) -> Figure:
    """Median over median."""
    value = Seconds(tuple(many)).median / Seconds(tuple(few)).median
    return Figure(what, value, "x", min(many) / max(few), max(many) / min(few), reach)
