"""Which texts the library would read as they stand: its published numbering plans as patterns over whole columns.

`phonenumbers` takes some 20 us a number. Most numbers of a log need none of its care: they carry a known calling code
and a length that its plan has, and no trunk prefix hides in front. The patterns here are made from the library's own
metadata and follow its rules; whatever they do not cover goes through the library itself (calls_numbers.py), and the
tests hold both against each other for every country.
"""

from __future__ import annotations

from collections.abc import Iterable
from functools import lru_cache

import polars as pl
from phonenumbers import COUNTRY_CODE_TO_REGION_CODE, SUPPORTED_REGIONS, PhoneMetadata, PhoneNumberDesc

__all__ = ["evident", "is_country", "known_whole", "whole"]

MOST_DIGITS = 15  # ITU-T E.164, 6.1: calling code and national number together


def is_country(name: str) -> bool:
    return name in SUPPORTED_REGIONS


def evident(text: pl.Expr) -> pl.Expr:
    """Whether `text` is E.164 already, so that the library would give it back unchanged."""
    known, prefixed = _international()
    return text.str.contains(known) & ~text.str.contains(prefixed)


def whole(text: pl.Expr, country: str) -> pl.Expr:
    """Digits dialled in `country` as E.164, where that is evident; else null.

    The national number with or without its trunk prefix, or the calling code and the national number, with or without
    the prefix for calls abroad.
    """
    plan = _plan(country)
    own = _plan(_main(plan))
    code = str(plan.country_code)
    valid = f"^(?:{_general(plan).national_number_pattern})$"
    digits = text.str.contains(r"^[0-9]{4,20}$")
    out, trunk = _before(text, plan.international_prefix), _before(text, plan.national_prefix_for_parsing)
    abroad = pl.lit("+") + _after(text, out)
    home = digits & out.is_null() & ~text.str.starts_with(code)
    rest = _after(text, trunk)
    if plan.national_prefix_transform_rule:  # more than a prefix may change
        trunked = pl.lit(False)
    else:
        trunked = home & ~text.str.contains(valid) & _fits(rest, plan, own)
    coded = _after(text, pl.lit(code))
    bare = _before(coded, plan.national_prefix_for_parsing).is_null()
    bare = bare & _before(coded, own.national_prefix_for_parsing).is_null()
    better = text.str.len_bytes() > max(_general(plan).possible_length)
    better = better | (~text.str.contains(valid) & coded.str.contains(valid))
    return (
        pl.when(digits & out.is_not_null() & evident(abroad))
        .then(abroad)
        .when(home & trunk.is_null() & _fits(text, plan, own))
        .then(pl.lit("+" + code) + text)
        .when(trunk.is_not_null() & trunked)
        .then(pl.lit("+" + code) + rest)
        .when(digits & out.is_null() & text.str.starts_with(code) & bare & better & _fits(coded, plan, own))
        .then(pl.lit("+") + text)
        .otherwise(None)
    )


def known_whole(text: pl.Expr, country: str) -> pl.Expr:
    """Whether digits as short as a short code are a whole number of a country that dials without a trunk prefix."""
    plan = _plan(country)
    if plan.national_prefix:
        return pl.lit(False)
    return text.str.contains(f"^(?:{_general(plan).national_number_pattern})$")


def _plan(country: str | int) -> PhoneMetadata:
    """Of a country, or of a calling code that is no country's (800 and the like)."""
    if isinstance(country, int):
        plan = PhoneMetadata.metadata_for_nongeo_region(country)
    else:
        plan = PhoneMetadata.metadata_for_region(country)
    assert plan is not None
    return plan


def _main(plan: PhoneMetadata) -> str:
    """The country whose plan speaks for a calling code that several share."""
    return str(COUNTRY_CODE_TO_REGION_CODE[plan.country_code or 0][0])


def _general(plan: PhoneMetadata) -> PhoneNumberDesc:
    assert plan.general_desc is not None
    return plan.general_desc


def _before(text: pl.Expr, pattern: str | None) -> pl.Expr:
    """What of `text` a prefix takes; null: it has no such prefix."""
    if not pattern:
        return pl.lit(None, pl.String)
    if (ways := pattern.split("|")) and all(way.isdigit() for way in ways):  # most are, and need no regular expression
        return pl.coalesce(pl.when(text.str.starts_with(way)).then(pl.lit(way)) for way in ways)
    return text.str.extract(f"^(?:{pattern})", 0)


def _after(text: pl.Expr, prefix: pl.Expr) -> pl.Expr:
    return text.str.slice(prefix.str.len_bytes().fill_null(0))


def _fits(national: pl.Expr, *plans: PhoneMetadata) -> pl.Expr:
    lengths = set.intersection(*(set(_general(plan).possible_length) for plan in plans))
    return national.str.len_bytes().is_in(sorted(_in_all(lengths, plans[0].country_code or 0)))


def _in_all(lengths: Iterable[int], code: int) -> list[int]:
    return [length for length in lengths if length + len(str(code)) <= MOST_DIGITS]


@lru_cache(1)
def _international() -> tuple[str, str]:
    """Of all calling codes: the lengths that national numbers have, and what stands before them in national use."""
    known, prefixed = [], []
    for code, countries in sorted(COUNTRY_CODE_TO_REGION_CODE.items()):
        plan = _plan(code if countries[0] == "001" else countries[0])
        lengths = _in_all(_general(plan).possible_length, code)
        known.append(f"{code}(?:{'|'.join(f'[0-9]{{{length}}}' for length in lengths)})")
        if plan.national_prefix_for_parsing:
            prefixed.append(f"{code}(?:{plan.national_prefix_for_parsing})")
    return rf"^\+(?:{'|'.join(known)})$", rf"^\+(?:{'|'.join(prefixed)})"
