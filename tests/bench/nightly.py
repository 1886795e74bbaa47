"""Nights with 1 % new records, which show old and new crystals, on a grouped store."""

from __future__ import annotations

from .collection import Kind, truth, write_table
from .figures import Figure, Options, Report
from .known_answer import check_answer
from .night import Night, collection, nights, run_night
from .timing import Seconds


def run(options: Options) -> Report:
    """The time of a later night over the time of the first, start-up of both apart.

    The new records of each night are those that follow in the same collection, in a file of their own; what the store
    holds in the end is compared with the known answer. The last night has nothing new.
    """
    count = options.count(20_000)
    new = max(1, count // 100)
    repeat = options.times(3 if count <= 20_000 else 1)
    first = nights(options.scratch, Kind(), count, options.workers, repeat)
    nights.cache_clear()  # the store goes on from here
    folder = collection(options.scratch, Kind(), count, options.workers)
    later: list[Night] = []
    added = []
    try:
        for start in range(count, count + repeat * new, new):
            added.append(write_table(folder / f"night-{start:09}.csv", Kind(), start, start + new))
            # With workers that are there beforehand: starting them is start-up, and says nothing of what is new.
            later.append(run_night(folder, first[-1].store, options.workers, ready_workers=True))
            read = later[-1].counts["ingest"].get("new", 0)
            assert read == new, f"the night read {read} new records, not {new}"
        idle = run_night(folder, first[-1].store, options.workers)
    finally:
        for path in added:
            path.unlink()
    assert idle.counts["ingest"].get("nothing_new"), "the night with nothing new found something to read"
    whole = count + repeat * new
    check_answer(idle.store, whole, len(set(truth(Kind(), 0, whole).tolist())))
    full, part = (Seconds(tuple(n.work_s for n in done)) for done in (first, later))
    least, greatest = min(part.taken) / max(full.taken), max(part.taken) / min(full.taken)
    busy = [Seconds(tuple(n.processor_work_s for n in done)).median for done in (first, later)]
    compositions = later[-1].counts["group"]["compositions"]
    return Report(
        "nightly",
        {"records": count, "new a night": new, "workers": options.workers, "compositions of the last": compositions},
        (
            full.figure("first night, start-up apart"),
            part.figure("1 % new, start-up apart"),
            Seconds(tuple(n.start_up_s for n in later)).figure("start-up"),
            Figure("nothing new, start-up apart", idle.work_s, "s"),
            Figure("1 % new / first night", 100 * part.median / full.median, "%", 100 * least, 100 * greatest, 3.0),
            Figure("processor time, 1 % new / first night", 100 * busy[1] / busy[0], "%"),
        ),
        {"stages_first_s": first[-1].stages, "stages_last_s": later[-1].stages},
    )
