"""Addresses as keys: RFC 5321 and 5322, domains by IDNA.

Both parts are lower-cased: RFC 5321 lets a host tell Alice from alice, and hardly any does. Domains are written as DNS
has them (A-labels). Display names, comments, groups' names and routes are not part of a key. Nearly all values are
plain and settled on whole columns; the others go through the standard library's parser and email-validator.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Collection
from email.utils import getaddresses

import polars as pl
from email_validator import EmailNotValidError, validate_email

__all__ = ["LINE", "addresses", "domain_key", "items_of", "local_part", "mailbox", "within"]

LINE = 998  # RFC 5322, 2.1.1: no line is longer, so no address is
_COMMENTS = 16  # nested deeper, a text is an attack on the parser

_ATOM = r"[A-Za-z0-9!#$%&'*+/=?^_`{|}~-]+"
# What needs no library: a dot-atom, and letters, digits and single hyphens in labels, the last one begun by a letter.
_PLAIN = rf"^{_ATOM}(?:\.{_ATOM})*@(?:[A-Za-z0-9][A-Za-z0-9-]*\.)*[A-Za-z][A-Za-z0-9-]*$"
_DOUBTFUL = r"@.*(?:--|-\.|-$)|[^@.]{64}|^.{254}"
# An address in angle brackets behind a display name that cannot be mistaken for an address list.
_ANGLED = r'^(?:[^<>"@;:()]*|[^<>",;:()]*|\s*"(?:[^"\\]|\\.)*"\s*)<\s*([^<>"()\s]+)\s*>\s*$'
_COMMENT = r"\((?:[^()\\]|\\.|\([^()]*\))*\)"
_NAMED_BEHIND = r'^([^<>"()\s,;:]+)\s*\([^()\\]*\)$'
_EMPTY_GROUP = rf"^[^@<>]*:(?:\s|;|{_COMMENT})*$"

# One mailbox of a header's address list: what stands between commas, and commas inside of quotes, comments and angle
# brackets do not count. A quote or bracket that is never closed stands for itself.
_ITEM = rf'(?:"(?:[^"\\]|\\.)*"|{_COMMENT}|<[^<>]*>|[^,;"(<]|["(<])+'


def items_of(header: pl.Expr) -> pl.Expr:
    """The mailboxes of header text such as `"Doe, Jane" <jane@site.example>, Team: al@site.example;`, as a list."""
    blank = pl.element().str.contains(rf"^(?:\s|{_COMMENT})*$")
    return header.str.extract_all(_ITEM).list.eval(pl.element().filter(~blank))


def addresses(raw: pl.Series) -> tuple[pl.Series, pl.Series]:
    """Keys (null: none), and where there is nothing that could be one: blank text, or a group without members."""
    text = raw.str.strip_chars()
    nothing = (text == "") | text.str.contains(_EMPTY_GROUP)
    bare = pl.select(pl.coalesce(text.str.extract(_ANGLED), text.str.extract(_NAMED_BEHIND), text)).to_series()
    plain = _plain(bare)
    keys = bare.str.to_lowercase().set(~plain, None)
    odd = (~plain & ~nothing).arg_true()
    if len(odd):
        specs = pl.Series([_spec(value) for value in text.gather(odd)], dtype=pl.String)
        easy = _plain(specs).fill_null(False)
        settled = specs.str.to_lowercase().set(~easy, None)
        hard = (~easy & specs.is_not_null()).arg_true()
        if len(hard):
            settled = settled.scatter(
                hard, pl.Series([_validated(value) for value in specs.gather(hard)], dtype=pl.String)
            )
        keys = keys.scatter(odd, settled)
    return keys, nothing


def _plain(text: pl.Series) -> pl.Series:
    return text.str.contains(_PLAIN) & ~text.str.contains(_DOUBTFUL)


def _spec(text: str) -> str | None:
    """The one addr-spec in the text, without comments and folding blanks."""
    if len(text) > LINE or text.count("(") > _COMMENTS:
        return None
    found = getaddresses([text])
    return found[0][1] or None if len(found) == 1 else None


def _validated(address: str) -> str | None:
    key = _normal(address)
    # a key that would change once more, or not be one, would be two parties
    return key if key is not None and _normal(key) == key else None


def _normal(address: str) -> str | None:
    try:
        told = validate_email(
            address,
            allow_quoted_local=True,
            allow_domain_literal=True,
            check_deliverability=False,
            globally_deliverable=False,
            test_environment=True,
        )
    except (EmailNotValidError, UnicodeError):
        return None
    local = told.normalized.rpartition("@")[0]
    return f"{unicodedata.normalize('NFC', local.lower())}@{(told.ascii_domain or told.domain).lower()}"


def domain_key(domain: str) -> str | None:
    """A domain as it stands in keys; null when it is none."""
    if re.search(r"[^\w.-]", domain):
        return None
    key = addresses(pl.Series([f"x@{domain}"], dtype=pl.String))[0][0]
    return key and str(key[2:])


def local_part(keys: pl.Expr) -> pl.Expr:
    """What stands before the last @."""
    return keys.str.replace(r"@[^@]*$", "")


def within(keys: pl.Expr, domains: Collection[str]) -> pl.Expr:
    """Whether the address belongs to one of the domains ("*": all of them)."""
    if "*" in domains:
        return pl.lit(True)
    return keys.str.extract(r"@([^@]*)$").is_in(list(domains)).fill_null(False)


def mailbox(keys: pl.Expr, plus_tags: Collection[str], dots: Collection[str]) -> pl.Expr:
    """The address of the mailbox that mail to these ends in: without tags and dots, where the domain ignores them."""
    unquoted = ~keys.str.starts_with('"')
    cut = keys.str.replace(r"^([^+@]+?)\.*\+.*@", "${1}@")
    keys = pl.when(unquoted & within(keys, plus_tags)).then(cut).otherwise(keys) if plus_tags else keys
    undotted = local_part(keys).str.replace_all(".", "", literal=True).str.normalize("NFC")  # a mark meets its letter
    joined = pl.concat_str(undotted, keys.str.extract(r"(@[^@]*)$"))
    return pl.when(unquoted & within(keys, dots)).then(joined).otherwise(keys) if dots else keys
