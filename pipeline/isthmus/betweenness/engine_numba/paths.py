"""Sampled paths: fixed blocks of random pairs, one shortest path drawn for each, hits counted per party.

Block b always holds the same pairs: its generator is seeded from (seed, b). Hits are integers, so partial
results add up to the same bits whichever thread, process or machine made them, in whichever order; `Tally`
still takes them in block order so that a run can stop, and resume, after any block.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from isthmus.betweenness.engine_numba.intervals import Bounds, path_bounds
from isthmus.betweenness.engine_numba.prepare import Prepared

# Pairs per block. A stop, an interrupt and the first look all wait for one, which on a graph of a million parties with
# long routes takes a minute; shorter blocks would spend their time on clearing memory.
BLOCK = 1 << 12


@dataclass(frozen=True)
class Partial:
    """One block's result.

    parties: int32[k] that were hit, ascending; counts: int64[k], how often; searched: pairs not skipped.
    """

    block: int
    samples: int
    searched: int
    parties: NDArray[np.int32]
    counts: NDArray[np.int64]


@dataclass
class Tally:
    """Hits so far: blocks 0..blocks-1, `taken` samples. hits: int64[n]."""

    hits: NDArray[np.int64]
    blocks: int = 0
    taken: int = 0
    searched: int = 0

    @classmethod
    def empty(cls, n: int) -> "Tally":
        return cls(np.zeros(n, np.int64))

    def add(self, partial: Partial) -> None:
        """Take the next block. Raises ValueError for any other."""
        if partial.block != self.blocks:
            raise ValueError(f"block {partial.block} came when block {self.blocks} was due")
        self.hits[partial.parties] += partial.counts
        self.blocks += 1
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


def run_block(prepared: Prepared, seed: int, block: int, samples: int = BLOCK) -> Partial:
    """Draw one block; depends on nothing but the graph, the seed, the block's number and its size."""
    from isthmus.betweenness.engine_numba.kernels_paths import sample_paths

    scratch = _Scratch(prepared.old.size)
    state = np.random.SeedSequence(seed, spawn_key=(block,)).generate_state(4, np.uint64)
    searched = 0
    if prepared.n > 2:
        # The generator's arithmetic wraps by design; noticed only with the compiler off.
        with np.errstate(over="ignore"):
            searched = sample_paths(
                samples, prepared.n, prepared.max_hops, prepared.anchor, prepared.component, prepared.ends,
                prepared.out_rows, prepared.out_adj, prepared.in_rows, prepared.in_adj, prepared.home,
                prepared.entry, state, scratch.mark, scratch.parent, scratch.sigma, scratch.queue_s,
                scratch.queue_t, scratch.level_s, scratch.level_t, scratch.shrunk_s, scratch.shrunk_t,
                scratch.cross, scratch.weight, scratch.hits,
            )  # fmt: skip
    hit = np.flatnonzero(scratch.hits)
    order = np.argsort(prepared.old[hit])
    return Partial(block, samples, searched, prepared.old[hit][order], scratch.hits[hit][order])


def plan_blocks(start: int, samples: int = 0, size: int = BLOCK) -> Iterator[tuple[int, int]]:
    """(block, samples in it) from block `start` until `samples` in all are taken (0: without end)."""
    block = start
    while samples == 0 or block * size < samples:
        yield block, size if samples == 0 else min(size, samples - block * size)
        block += 1


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
