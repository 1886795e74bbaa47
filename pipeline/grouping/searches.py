"""The three searches behind the grades, in one shape: where candidates are looked for, how pairs are verified and
shown."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from ..errors import UsageError
from ..fingerprint.distributions import NEIGHBOURS, distributions
from ..model.batch import CrystalBatch, Ints
from ..tolerances import Tolerances
from .candidates import Search, start_search
from .pair_store import Limit
from .preparation import prepare
from .scaled import lengths_per_site, pair_lengths, renamings, unit_scales, verify_renamed, verify_rescaled
from .verification import Verified, verify
from .window import isotypic_window, near_window, rescaled_window
from .witness import Witnesses, witnesses


@dataclass(frozen=True, slots=True)
class Searcher:
    """One search over the nodes of a composition."""

    search: Search
    """Of the nodes, or of their versions under renaming."""

    owner: Ints
    """(v,): the node that each crystal of `search` is a version of; ascending."""

    verify: Callable[[Ints], Verified]
    """Verify pairs (p, 2) of nodes."""

    witness: Callable[[Verified], Witnesses]
    """Witnesses of matches between nodes."""

    limits: tuple[tuple[str, Limit], ...]
    """The grades this search gives, with their limits, in angstrom (isotypic: units of (V/site)^(1/3))."""


def shown_as(by: Searcher, shown: Ints, nodes: int) -> Searcher:
    """A search over n nodes of which only `shown` (ascending) have a crystal, from the search over these alone."""
    row = np.full(nodes, -1, np.int64)
    row[shown] = np.arange(len(shown))
    return replace(
        by,
        owner=shown[by.owner],
        verify=lambda pairs: replace(by.verify(row[pairs]), pairs=pairs),
        witness=lambda found: by.witness(replace(found, pairs=row[found.pairs])),
    )


def searcher(
    batch: CrystalBatch, tolerances: Tolerances, kind: str, mirror_images: str, neighbours: int = NEIGHBOURS
) -> Searcher:
    """Set up a search over n nodes. kind: near, rescaled, isotypic. neighbours: k of the distance distributions."""
    separate = mirror_images == "separate"
    nodes = np.arange(len(batch), dtype=np.int64)
    near = Limit(1, tolerances.near_shift, tolerances.near_strain, separate)
    if kind == "near":
        search = start_search(batch, near_window(tolerances), None, distributions(batch, neighbours))
        return Searcher(
            search,
            nodes,
            lambda pairs: verify(search.prepared, pairs, search.window, mirror_images),
            lambda found: witnesses(search.prepared, found, search.window),
            (("same", Limit(0, tolerances.same_shift, tolerances.same_strain, separate)), ("near", near)),
        )
    if kind == "rescaled":
        smallest = float(lengths_per_site(batch).min()) ** 3
        search = start_search(
            batch, rescaled_window(tolerances, smallest), unit_scales(batch), distributions(batch, neighbours)
        )
        given_window = near_window(tolerances)
        as_given = prepare(batch, given_window, None, search.rows)
        return Searcher(
            search,
            nodes,
            lambda pairs: verify_rescaled(search, as_given, given_window, pairs, tolerances, mirror_images),
            lambda found: witnesses(
                search.prepared,
                # a match recorded as `near` was measured in another metric: the limit only bounds the way back to it
                replace(found, largest_shift=1.02 * found.largest_shift / pair_lengths(batch, found.pairs)),
                search.window,
            ),
            (("rescaled", near),),
        )
    if kind == "isotypic":
        versions, owner = renamings(batch)
        search = start_search(
            versions, isotypic_window(tolerances), unit_scales(versions), distributions(versions, neighbours)
        )

        def witness(found: Verified) -> Witnesses:
            _, second = verify_renamed(search, owner, found.pairs, mirror_images)
            first = np.searchsorted(owner, found.pairs[:, 0])
            return witnesses(search.prepared, replace(found, pairs=np.stack([first, second], axis=1)), search.window)

        return Searcher(
            search,
            owner,
            lambda pairs: verify_renamed(search, owner, pairs, mirror_images)[0],
            witness,
            (("isotypic", Limit(1, search.window.shift, search.window.strain, separate)),),
        )
    raise UsageError(f"search is near, rescaled or isotypic, not {kind!r}")
