"""Sampled paths: random pairs, one shortest path drawn for each, hits counted per party.

Pair i is always the same pair, with the same path: its random numbers come from the seed and i. Hits are integers, so
blocks of any size add up to the same bits whichever thread, process or machine made them, in whichever order; `Tally`
still takes them in order so that a run can stop, and resume, after any block.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from isthmus.betweenness.engine_numba.exact import GO_ON
from isthmus.betweenness.engine_numba.intervals import Bounds, path_bounds
from isthmus.betweenness.engine_numba.prepare import Prepared
from isthmus.betweenness.engine_numba.subgraphs import Bytes

# Pairs per block, as many as meet about so many vertices: a good half second. The looks are whole blocks apart, so the
# size is settled by counting, not by a clock, and is the same on any machine.
FEWEST, MOST, WORK = 1 << 6, 1 << 12, 1 << 23


@dataclass(frozen=True)
class Partial:
    """One block's result: `samples` pairs from number `start` on.

    parties: int32[k] that were hit, ascending; counts: int64[k], how often; searched: pairs not skipped; visited:
    vertices that their searches met.
    """

    start: int
    samples: int
    searched: int
    visited: int
    parties: NDArray[np.int32]
    counts: NDArray[np.int64]


@dataclass
class Tally:
    """Hits of the first `taken` pairs. hits: int64[n]."""

    hits: NDArray[np.int64]
    taken: int = 0
    searched: int = 0

    @classmethod
    def empty(cls, n: int) -> "Tally":
        return cls(np.zeros(n, np.int64))

    def add(self, partial: Partial) -> None:
        """Take the next block. Raises ValueError for any other."""
        if partial.start != self.taken:
            raise ValueError(f"the block from pair {partial.start} came when pair {self.taken} was due")
        self.hits[partial.parties] += partial.counts
        self.taken += partial.samples
        self.searched += partial.searched


class _Scratch:
    """The working memory of one block."""

    def __init__(self, searched: int) -> None:
        size = searched
        self.mark = np.zeros(size, np.int32)
        self.parent = np.zeros(size, np.uint32)
        self.sigma = np.zeros(size, np.float64)
        self.queue_s, self.queue_t, self.cross = np.zeros((3, size), np.uint32)
        self.level_s, self.level_t = np.zeros((2, size + 1), np.uint32)
        self.shrunk_s, self.shrunk_t = np.zeros((2, size + 1), np.bool_)
        self.weight = np.zeros(size, np.float64)
        self.hits = np.zeros(size, np.int64)


def bytes_per_thread(searched: int) -> int:
    """Working memory of one thread in bytes, beside the prepared graph."""
    return 54 * searched


def run_block(prepared: Prepared, seed: int, start: int, samples: int, stop: Bytes = GO_ON) -> Partial:
    """Draw pairs [start, start + samples); depends on nothing but its arguments."""
    from isthmus.betweenness.engine_numba.kernels_paths import sample_paths

    scratch = _Scratch(prepared.old.size)
    key = np.random.SeedSequence(seed).generate_state(1, np.uint64)[0]
    searched = visited = 0
    if prepared.n > 2:
        # The generator's arithmetic wraps by design; noticed only with the compiler off.
        with np.errstate(over="ignore"):
            searched, visited = sample_paths(
                start, samples, key, prepared.n, prepared.max_hops, prepared.anchor, prepared.component, prepared.ends,
                prepared.out_rows, prepared.out_adj, prepared.in_rows, prepared.in_adj, prepared.home,
                prepared.entry, scratch.mark, scratch.parent, scratch.sigma, scratch.queue_s,
                scratch.queue_t, scratch.level_s, scratch.level_t, scratch.shrunk_s, scratch.shrunk_t,
                scratch.cross, scratch.weight, scratch.hits, stop,
            )  # fmt: skip
    hit = np.flatnonzero(scratch.hits)
    order = np.argsort(prepared.old[hit])
    return Partial(start, samples, searched, visited, prepared.old[hit][order], scratch.hits[hit][order])


def block_size(visited: int, samples: int) -> int:
    """Pairs per block, a power of two, when `samples` pairs met `visited` vertices."""
    return min(max(FEWEST, 1 << (WORK * samples // max(visited, 1)).bit_length() - 1), MOST)


def plan_blocks(size: int, samples: int = 0, start: int = 0) -> Iterator[tuple[int, int]]:
    """(first pair, pairs) of each block from `start` on, until `samples` in all are taken (0: without end)."""
    while samples == 0 or start < samples:
        yield start, min(size, samples - start) if samples else size
        start += size


@dataclass
class PathEvidence:
    """A tally seen as statistics to stop on. delta = 1 - confidence."""

    prepared: Prepared
    tally: Tally
    delta: float

    @property
    def taken(self) -> int:
        return self.tally.taken

    def bounds(self, share: float) -> Bounds:
        known = self.prepared
        return path_bounds(self.tally.hits, self.taken, known.exact, known.ceiling, known.settled, share * self.delta)
