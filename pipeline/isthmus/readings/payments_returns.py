"""What identifies a payment, and how returns and reversals are set against the payment they take back.

References in their order: UETR, which is unique; then TxId, which a bank chose, and EndToEndId, which the payer chose
and may use again. Two banks or payers may choose the same, so that both count only together with the two accounts.
"""

from __future__ import annotations

from decimal import Decimal
from fractions import Fraction

import polars as pl

from isthmus.readings.reading import AMOUNT, FILTERED

__all__ = ["REFERENCES", "netted", "own_identity", "references"]

REFERENCES = ("uetr", "tx_id", "end_to_end_id")
AT_ONCE = 200  # returns that are set beside all payments of their id, which may be many

IN_FULL = "returned in full"
IN_WINDOW = "return of a payment in the window"
TOO_MUCH = "return of more than its payment"
OUTSIDE = "return of a payment outside the window"


def references(contacts: pl.DataFrame, keys: pl.Series, known: list[str], placeholders: list[str]) -> pl.DataFrame:
    """64-bit hashes (UInt64, null: none) of the ids of `known` (columns of the log, `original_...` among them), named
    like them, and a second hash of each, `..._2`. keys: the parties' names by code."""
    party = keys.hash(0)
    pair = party.gather(contacts["sender"]) + party.gather(contacts["receiver"])
    found: dict[str, pl.Series] = {}
    for name in known:
        of = name.removeprefix("original_")
        # of payments, few name an original
        places = contacts[name].is_not_null().arg_true() if name != of else None
        text = contacts[name] if places is None else contacts[name].gather(places)
        both = pair if places is None else pair.gather(places)
        text = text.to_frame().select(_cleaned(name, placeholders))[name]
        for turn, ending in enumerate(("", "_2")):
            value = text.hash(2 * REFERENCES.index(of) + turn + 1)
            if of != "uetr":
                value = value ^ both
            value = value.set(text.is_null(), None)
            if places is not None:
                value = pl.Series([None], dtype=pl.UInt64).new_from_index(0, len(contacts)).scatter(places, value)
            found[name + ending] = value
    return pl.DataFrame(found, schema=dict.fromkeys(found, pl.UInt64))


def _cleaned(column: str, placeholders: list[str]) -> pl.Expr:
    """An id without blanks around it; null where there is none. A UETR is a UUID, so its case does not matter."""
    text = pl.col(column).cast(pl.String).str.strip_chars()
    if column.endswith("uetr"):
        text = text.str.to_lowercase()
    words = "|".join(pl.escape_regex(word.strip()) for word in ["", *placeholders])
    return pl.when(~text.str.contains(f"^(?i:{words})$")).then(text).alias(column)


def own_identity(rows: pl.DataFrame, known: list[str]) -> list[pl.Series]:
    """`a` and `b` of each row: what a second delivery of it shares, null where it has no id.

    `rows`: the columns of `references`, and back (Boolean: it is a return), sender, receiver, amount, day. A return
    may carry the ids of its original, as reversals in a statement do, and one payment may be returned in parts: so
    returns are the same only when the accounts, the amount and the day are the same, too.
    """
    result = []
    for turn, ending in enumerate(("", "_2")):
        identity = pl.Series([None], dtype=pl.UInt64).new_from_index(0, len(rows))
        if "uetr" in known:
            identity = rows[f"uetr{ending}"]
        if "tx_id" in known:  # its hash knows the two accounts, but not which of them paid
            directed = pl.struct(f"tx_id{ending}", "sender", "receiver").hash(turn + 21)
            directed = pl.when(pl.col(f"tx_id{ending}").is_not_null()).then(directed).alias("tx_id")
            identity = identity.zip_with(identity.is_not_null(), rows.select(directed)["tx_id"])
        weak = rows["back"]
        if "end_to_end_id" in known:
            weak |= identity.is_null() & rows["end_to_end_id"].is_not_null()
        places = weak.arg_true()
        if known and len(places):
            some = rows[places].select(
                "back", "sender", "receiver", "amount", "day", *(f"{name}{ending}" for name in known)
            )
            any_id = pl.any_horizontal(pl.col(f"{name}{ending}").is_not_null() for name in known)
            told = some.select(pl.when(any_id).then(pl.struct(pl.all()).hash(turn + 11)).alias("told"))["told"]
            identity = identity.scatter(places, told)
        result.append(identity.alias("ab"[turn]))
    return result


def netted(rows: pl.LazyFrame, gone: pl.DataFrame, known: list[str], places: int) -> pl.DataFrame:
    """What `settle` answers for returns and their originals.

    `rows`: part, at, time, amount, back, the columns of `known` (of a return: its original's), and, where the log has
    several currencies, paid and currency. `gone`: part and at of duplicates. places: minor unit of `amount`.
    """
    several = "paid" in rows.collect_schema().names()
    wanted = ["part", "at", "time", "amount", *(["paid", "currency"] if several else [])]
    here = ["part", "at"]
    returns = rows.filter("back").select(*wanted, *known).collect().join(gone, on=here, how="anti")
    if returns.is_empty():
        return _answer([])
    found, left = [], returns
    for name in known:
        asked = left[name].drop_nulls().unique()
        originals = rows.filter(~pl.col("back") & pl.col(name).is_in(asked.implode())).select(*wanted, name).collect()
        originals = originals.join(gone, on=here, how="anti")
        named = originals.rename({column: f"{column}_original" for column in wanted})
        slices = [left.clear(), *left.filter(pl.col(name).is_not_null()).iter_slices(AT_ONCE)]
        match = pl.concat([_matched(some, named, name) for some in slices])
        found.append(match.select(*wanted, *(f"{column}_original" for column in wanted)))
        left = left.join(match, on=here, how="anti")
    outside = left.select(*here, outcome=pl.lit(FILTERED), reason=pl.lit(OUTSIDE), amount="amount")
    return _answer([outside, *_set_against(pl.concat(found), several, places)])


def _matched(returns: pl.DataFrame, originals: pl.DataFrame, name: str) -> pl.DataFrame:
    """Each return with the one payment, among those of its id, that it most likely takes back: made before it (by
    EndToEndId surely); of its amount, else of no less in its currency; and the latest of those."""
    before = pl.col("time_original") <= pl.col("time")
    amount = "paid" if "paid" in returns.columns else "amount"
    same = pl.col("currency") == pl.col("currency_original") if amount == "paid" else pl.lit(True)
    equal = same & (pl.col(f"{amount}_original") == pl.col(amount))
    enough = same & (pl.col(f"{amount}_original") >= pl.col(amount))
    pairs = returns.join(originals, on=name).filter(before | pl.lit(name != "end_to_end_id"))
    pairs = pairs.sort(before, equal, enough, "time_original", "part_original", "at_original")
    return pairs.unique(["part", "at"], keep="last", maintain_order=True)


def _set_against(pairs: pl.DataFrame, several: bool, places: int) -> list[pl.DataFrame]:
    """The returns of `pairs`, all filtered, and their originals with what is left of them.

    In the currency of the payment where all its returns have that currency, so that a rate that moved in between
    leaves nothing over; else in the reporting currency, each at its own day's rate.
    """
    original = ["part_original", "at_original"]
    alike = (pl.col("currency") == pl.col("currency_original")).all().over(original) if several else pl.lit(False)
    pairs = pairs.with_columns(alike=alike)
    if several:
        pairs = pairs.with_columns(
            back=pl.when("alike").then("paid").otherwise("amount"),
            whole=pl.when("alike").then("paid_original").otherwise("amount_original"),
        )
    else:
        pairs = pairs.with_columns(back="amount", whole="amount_original")
    pairs = pairs.sort("time", "part", "at").with_columns(so_far=pl.col("back").cum_sum().over(original))
    reason = pl.when(pl.col("so_far") > pl.col("whole")).then(pl.lit(TOO_MUCH)).otherwise(pl.lit(IN_WINDOW))
    returns = pairs.select("part", "at", outcome=pl.lit(FILTERED), reason=reason, amount="amount")
    totals = pairs.group_by(original).agg(
        pl.col("amount_original", "whole", "alike").first(), left=pl.col("whole").first() - pl.col("back").sum()
    )
    full = pl.col("left") <= 0
    originals = totals.with_columns(_part_of(totals, places)).select(
        part="part_original",
        at="at_original",
        outcome=pl.when(full).then(pl.lit(FILTERED)).otherwise(pl.lit("")),
        reason=pl.when(full).then(pl.lit(IN_FULL)).otherwise(pl.lit("")),
        amount=pl.when(full).then("amount_original").otherwise("now"),
    )
    return [returns, originals]


def _part_of(totals: pl.DataFrame, places: int) -> pl.Series:
    """`now`: what is left in the reporting currency, rounded half-even to its minor unit: at the payment's own rate."""
    now = totals["left"]
    foreign = totals["alike"] & ((totals["whole"] != totals["amount_original"]) | (now != now.round(places)))
    converted = (foreign & (now > 0)).arg_true()
    if not len(converted):
        return now.alias("now")
    some = totals[converted].select("amount_original", "left", "whole")
    # round() of a fraction is exact, and half to even
    minor = [
        round(Fraction(amount) * Fraction(left) / Fraction(whole) * 10**places) for amount, left, whole in some.rows()
    ]
    return now.scatter(converted, pl.Series([Decimal(number).scaleb(-places) for number in minor], dtype=AMOUNT)).alias(
        "now"
    )


def _answer(frames: list[pl.DataFrame]) -> pl.DataFrame:
    schema = {"part": pl.UInt32(), "at": pl.UInt32(), "outcome": pl.String(), "reason": pl.String(), "amount": AMOUNT}
    return pl.concat([pl.DataFrame(schema=schema), *(frame.cast(schema) for frame in frames)])  # type: ignore[arg-type]
