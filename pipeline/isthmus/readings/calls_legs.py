"""Records of one call, written at both its ends or delivered again: which ones to count no more.

With a call reference, records that share it and both parties are one call, whatever else they say. Without one,
records of the same parties are one call when they start and last alike, to within a slack: the far end's clock and the
time that signalling takes put a second or two between them. Then a call has at most one record of each side, so that
two short texts in one second stay two. All is decided over the whole window in the order of time, so that it does not
depend on how the log was cut into files and parts.
"""

from __future__ import annotations

from collections.abc import Iterator
from datetime import timedelta
from decimal import Decimal

import polars as pl

from isthmus.readings.reading import DUPLICATE

__all__ = ["ORIGINATING", "TERMINATING", "other_records"]

ORIGINATING, TERMINATING = 1, 2
OTHER, AGAIN = "other record of the same call", "record delivered again"
ANSWER = {"part": pl.UInt32, "at": pl.UInt32, "outcome": pl.String, "reason": pl.String}


def other_records(rows: pl.LazyFrame, slack: int) -> pl.DataFrame:
    """`rows`: as `Reading.settle` has them, with `side` and `loose`. `slack`: seconds, for records without reference.

    Returned: what `Reading.settle` answers. The first record of a call stays, and its duration counts.
    """
    found = pl.concat([_by_reference(rows.filter(pl.col("loose") == 0)), _by_likeness(rows, slack)])
    return found.select("part", "at", pl.lit(DUPLICATE).alias("outcome"), "reason", "amount")


def _by_reference(rows: pl.LazyFrame) -> pl.DataFrame:
    # first by one half of the identity: sorting plain numbers is the cheapest way to find those that repeat
    half = rows.select("a").collect()["a"].drop_nulls().sort()
    suspects = half.filter(half == half.shift(1)).unique()
    alike = rows.filter(pl.col("a").is_in(suspects.implode())).select("part", "at", "time", "amount", "a", "b", "side")
    found = alike.collect().sort("time", "part", "at")
    again = ~pl.struct("a", "b", "side").is_first_distinct() & (pl.col("side") > 0)
    later = found.with_columns(reason=pl.when(again).then(pl.lit(AGAIN)).otherwise(pl.lit(OTHER)))
    return later.filter(~pl.struct("a", "b").is_first_distinct()).select("part", "at", "reason", "amount")


def _by_likeness(rows: pl.LazyFrame, slack: int) -> pl.DataFrame:
    """Records of the same parties that follow each other closely form a chain; calls are told apart in each chain."""
    alone = rows.filter(pl.col("loose") == 1).select("part", "at", "time", "amount", "a", "b", "side").collect()
    alone = alone.sort("a", "b", "time")
    same = (pl.col("a") == pl.col("a").shift(1)) & (pl.col("b") == pl.col("b").shift(1))
    close = (pl.col("time") - pl.col("time").shift(1)) <= timedelta(seconds=slack)
    alone = alone.with_columns(linked=(same & close).fill_null(False))
    chains = alone.filter(pl.col("linked") | pl.col("linked").shift(-1, fill_value=False))
    chains = chains.with_columns(chain=(~pl.col("linked")).cum_sum()).sort("chain", "time", "part", "at")
    pairs = chains.filter(pl.len().over("chain") == 2)
    longer = chains.filter(pl.len().over("chain") > 2)
    marked = [
        _pairs(pairs, slack),
        pl.DataFrame(list(_chains(longer, slack)), schema=["part", "at", "reason"], orient="row"),
    ]
    found = pl.concat([frame.cast({"part": pl.UInt32, "at": pl.UInt32, "reason": pl.String}) for frame in marked])
    return found.join(chains.select("part", "at", "amount"), on=["part", "at"], how="left")


def _pairs(pairs: pl.DataFrame, slack: int) -> pl.DataFrame:
    """Chains of two, which nearly all are: what `_chains` does, on whole columns."""
    first, second = pairs.gather_every(2), pairs.gather_every(2, offset=1)
    both = second.select("part", "at", "side", "amount", "time").hstack(
        first.select(side_1="side", amount_1="amount", time_1="time")
    )
    alike = (pl.col("amount") - pl.col("amount_1")).abs() <= slack
    told = (pl.col("side") > 0) & (pl.col("side") == pl.col("side_1"))
    equal = (pl.col("amount") == pl.col("amount_1")) & (pl.col("time") == pl.col("time_1"))
    reason = pl.when(told & equal).then(pl.lit(AGAIN)).when(~told & alike).then(pl.lit(OTHER))
    return both.select("part", "at", reason=reason).drop_nulls("reason")


def _chains(chains: pl.DataFrame, slack: int) -> Iterator[tuple[int, int, str]]:
    """Each record goes to the first call of its chain that it fits and that has none of its side yet."""
    limit, last = timedelta(seconds=slack), None
    calls: list[tuple[object, Decimal, set[int]]] = []
    seen: set[tuple[object, Decimal, int]] = set()
    for chain, part, at, time, amount, side in chains.select(
        "chain", "part", "at", "time", "amount", "side"
    ).iter_rows():
        if chain != last:
            last, calls, seen = chain, [], set()
        if side and (time, amount, side) in seen:
            yield part, at, AGAIN
            continue
        seen.add((time, amount, side))
        for start, length, sides in calls:
            if time - start <= limit and abs(amount - length) <= slack and not (side and side in sides):
                sides.add(side)
                yield part, at, OTHER
                break
        else:
            calls.append((time, amount, {side}))
