"""Accounts as payment logs write them: IBANs (ISO 13616, judged by python-stdnum), and ids of any other kind."""

from __future__ import annotations

import re
from functools import cache
from itertools import product
from string import ascii_uppercase

import polars as pl

__all__ = ["normalised", "with_bank_code"]

WRONG_DIGIT = "is an IBAN with a wrong check digit"
WRONG_FORM = "is an IBAN of the wrong form"
NO_IBAN = "is not an IBAN"

# Two letters of the country, two check digits, 11 (Norway) to 30 places: ISO 13616.
_SHAPE = r"^[A-Z]{2}[0-9]{2}[A-Z0-9]{11,30}$"
_PLACES = {"n": "[0-9]", "a": "[A-Z]", "c": "[A-Z0-9]"}  # kinds of places in the registry's forms
_LETTERS = [str(number) for number in range(10, 36)]  # ISO 7064 reads A as 10, ..., Z as 35


def normalised(raw: pl.Series, iban_only: bool) -> pl.DataFrame:
    """`raw`: texts, none null. Returned: `key` (null: unusable) and `fault` (null: none, or nothing there at all).

    What looks like an IBAN of a country that the registry lists is written without blanks, hyphens and dots, in
    capitals, without the word IBAN that forms print before it, and must pass; all other ids stay as they are, without
    the blanks around them. National check digits inside an IBAN are not looked at: ISO 13616 does not know them.
    """
    text = raw.str.strip_chars().alias("text")
    table = pl.DataFrame({"text": text, "iban": _compact(text).str.replace("^IBAN:?", "")})
    looks = table["iban"].str.contains(_SHAPE) & table["iban"].str.slice(0, 2).is_in(list(_forms()))
    fault = pl.Series("fault", [NO_IBAN if iban_only else None], pl.String).new_from_index(0, raw.len())
    if looks.any():
        doubtful = looks & ~_passes(table["iban"], looks)
        fault = fault.zip_with(~looks, pl.Series([None], dtype=pl.String).new_from_index(0, raw.len()))
        if doubtful.any():
            places = doubtful.arg_true()
            fault = fault.scatter(places, [_fault(value) for value in table["iban"].gather(places)])
    return table.select(
        key=pl.when(fault.is_null() & (text != "")).then(pl.when(looks).then("iban").otherwise("text")),
        fault=pl.when(text != "").then(fault),
    )


def with_bank_code(keys: pl.Series, codes: list[str]) -> pl.Series:
    """Whether each key is an IBAN whose country and bank code begin like one of `codes`."""
    without_digits = keys.str.slice(0, 2) + keys.str.slice(4)
    begins = pl.Series([False]).new_from_index(0, keys.len())
    for code in codes:
        begins |= without_digits.str.starts_with(code)
    return (begins & keys.str.contains(_SHAPE)).fill_null(False)


def _compact(text: pl.Series) -> pl.Series:
    compact = text.str.replace_all(r"[\s.\-]", "").str.to_uppercase()
    foreign = text.str.contains(r"[^\x00-\x7F]").arg_true()  # hyphens and digits of other alphabets
    if not len(foreign):
        return compact
    from stdnum import iban

    return compact.scatter(foreign, [iban.compact(value) for value in compact.gather(foreign)])


def _passes(iban: pl.Series, looks: pl.Series) -> pl.Series:
    """Whether form and check digits are right; false leaves the judgement to the library."""
    forms = "|".join(f"{country}[0-9]{{2}}{form}" for country, form in _forms().items())
    turned = iban.str.slice(4) + iban.str.slice(0, 4)
    digits = turned.zip_with(looks, pl.Series([""]).new_from_index(0, iban.len()))
    digits = digits.str.replace_many(list(ascii_uppercase), _LETTERS).str.zfill(72)
    rest = pl.Series([0], dtype=pl.Int64).new_from_index(0, iban.len())
    for start in range(0, 72, 9):  # 97 x 10^9 fits into 64 bits
        rest = (rest * 10**9 + digits.str.slice(start, 9).cast(pl.Int64, strict=False)) % 97
    return ((rest == 1) & iban.str.contains(f"^(?:{forms})$")).fill_null(False)


@cache
def _forms() -> dict[str, str]:
    """Country -> regular expression of what follows the check digits, from the library's copy of the registry."""
    from stdnum import numdb

    registry = numdb.get("iban")
    found = {}
    for country in map("".join, product(ascii_uppercase, repeat=2)):
        if form := registry.info(country)[0][1].get("bban"):
            found[country] = re.sub("([0-9]+)!([nac])", lambda part: f"{_PLACES[part[2]]}{{{part[1]}}}", form)
    return found


def _fault(value: str) -> str | None:
    from stdnum import iban
    from stdnum.exceptions import ValidationError

    try:
        iban.validate(value, check_country=False)
    except ValidationError:  # the library looks at the digits first, but of a wrong form they tell nothing
        return WRONG_DIGIT if re.fullmatch(_forms()[value[:2]], value[4:]) else WRONG_FORM
    return None
