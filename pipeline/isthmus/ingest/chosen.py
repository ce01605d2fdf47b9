"""Which of the window's ties count, as `[ties]` defines them."""

from __future__ import annotations

import polars as pl

from isthmus.settings import Ties

__all__ = ["choose"]


def choose(ties: pl.DataFrame, rules: Ties) -> tuple[pl.DataFrame, dict[str, int]]:
    """The ties that count, and for each rule's name how many contacts it took. A tie falls to the first rule.

    `ties`: one row per ordered pair, with `contacts` and `days`; see Window.
    """
    few, seldom = pl.col("contacts") < rules.least_contacts, pl.col("days") < rules.least_days
    left_out: dict[str, int] = {}
    for when, least, name in (
        (few, rules.least_contacts, f"tie of fewer than {rules.least_contacts} contacts"),
        (seldom, rules.least_days, f"tie on fewer than {rules.least_days} days"),
    ):
        if least > 1:
            left_out[name] = int(ties.filter(when)["contacts"].sum())
            ties = ties.filter(~when)
    if rules.mutual:
        answered = ties.select(sender="receiver", receiver="sender")
        both = ties.join(answered, on=["sender", "receiver"], how="semi", maintain_order="left")
        left_out["tie one way only"] = int(ties["contacts"].sum()) - int(both["contacts"].sum())
        ties = both
    return ties, left_out
