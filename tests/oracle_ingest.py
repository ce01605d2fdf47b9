"""What reading a window means, row by row in plain Python. Imports nothing from the package."""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass
from datetime import date, datetime, timedelta
from decimal import Decimal

EPOCH = datetime(1970, 1, 1)
# the blanks of Unicode, which the log's writers may leave around a key
BLANKS = "\t\n\x0b\x0c\r \x85\xa0\u1680\u2000\u2001\u2002\u2003\u2004\u2005\u2006\u2007"
BLANKS += "\u2008\u2009\u200a\u2028\u2029\u202f\u205f\u3000"

Key = str | int | None


@dataclass(frozen=True)
class Row:
    """`time`: microseconds since 1970, UTC."""

    sender: Key
    receiver: Key
    time: int | None
    amount: float | None = None
    id: Key = None


@dataclass(frozen=True)
class File:
    """Row groups of rows. `day`: the date of its partition folder."""

    name: str
    groups: list[list[Row]]
    day: date | None = None


@dataclass(frozen=True)
class Tie:
    contacts: int
    amount: Decimal
    days: int
    first: int
    last: int


@dataclass
class Result:
    ties: dict[tuple[str, str], Tie]
    refused: list[tuple[str, int, str]]
    outcomes: Counter[str]
    missing: list[date]


def micro(moment: datetime) -> int:
    return (moment - EPOCH) // timedelta(microseconds=1)


def clean(key: Key) -> str | None:
    return None if key is None else str(key).strip(BLANKS)


def reason(row: Row, amounts: bool) -> str | None:
    """The first thing that is wrong with a row."""
    for side, key in (("sender", row.sender), ("receiver", row.receiver)):
        if key is None:
            return f"{side} is null"
    for side, key in (("sender", row.sender), ("receiver", row.receiver)):
        if clean(key) == "":
            return f"{side} is empty"
    if row.time is None:
        return "time is null"
    if not micro(datetime(1970, 1, 1)) <= row.time < micro(datetime(2200, 1, 1)):
        return "time is outside 1970..2199"
    if amounts:
        if row.amount is None:
            return "amount is null"
        if not math.isfinite(row.amount):
            return "amount is not finite"
        if row.amount < 0:
            return "amount is negative"
        if row.amount > 1e18:
            return "amount is above 1e+18"
    return None


def read(files: list[File], first: date, last: date, *, amounts: bool, ids: bool) -> Result:
    low = micro(datetime(first.year, first.month, first.day))
    high = micro(datetime(last.year, last.month, last.day)) + 86_400 * 10**6
    found: dict[tuple[str, str], list[Row]] = {}
    refused, outcomes, seen, days = [], Counter(), set(), set()
    for file in sorted(files, key=lambda file: file.name):
        if file.day and not first - timedelta(days=1) <= file.day <= last + timedelta(days=1):
            continue
        number = -1
        for group in file.groups:
            times = [row.time for row in group if row.time is not None]
            if times and (min(times) >= high or max(times) < low):  # its footer rules it out
                number += len(group)
                continue
            for row in group:
                number += 1
                why = reason(row, amounts)
                plausible = row.time is not None and 0 <= row.time < micro(datetime(2200, 1, 1))
                if plausible and not low <= row.time < high:
                    outcomes["filtered"] += 1
                elif why:
                    outcomes["refused"] += 1
                    refused.append((file.name, number, why))
                elif clean(row.sender) == clean(row.receiver):
                    outcomes["filtered"] += 1
                elif ids and row.id is not None and row.id in seen:
                    outcomes["duplicate"] += 1
                else:
                    outcomes["used"] += 1
                    seen.add(row.id)
                    days.add(row.time // (86_400 * 10**6))
                    found.setdefault((clean(row.sender), clean(row.receiver)), []).append(row)
    ties = {
        pair: Tie(
            len(rows),
            sum((Decimal(repr(row.amount)) for row in rows), Decimal(0)) if amounts else Decimal(0),
            len({row.time // (86_400 * 10**6) for row in rows}),
            min(row.time for row in rows),
            max(row.time for row in rows),
        )
        for pair, rows in found.items()
    }
    window = [first + timedelta(days=step) for step in range((last - first).days + 1)]
    return Result(ties, refused, outcomes, [d for d in window if (d - EPOCH.date()).days not in days])
