"""Telephone numbers as they are written -> E.164, or what is wrong with them.

A number in national form means nothing without its country, so raw text may carry one in front: `GB:07700 900123`.
A short code keeps it in its key, `GB:112`, because the same digits serve somebody else elsewhere.
"""

from __future__ import annotations

import polars as pl
from phonenumbers import (
    NumberParseException,
    PhoneNumberFormat,
    ValidationResult,
    format_number,
    is_possible_number_with_reason,
    parse,
)

from isthmus.readings.calls_plans import evident, is_country, known_whole, whole

__all__ = ["countries", "read_numbers", "with_country"]

NOWHERE = "ZZ"  # ISO 3166-1 leaves it to users, who commonly mean "unknown" by it

WITHHELD = ("", "anonymous", "private", "restricted", "unavailable", "unknown", "withheld")  # RFC 3323 and practice
FAULTS = {
    ValidationResult.TOO_LONG: "is too long",
    ValidationResult.TOO_SHORT: "is too short",
    ValidationResult.IS_POSSIBLE_LOCAL_ONLY: "lacks its area code",
}


def countries(told: pl.Series, default_country: str) -> pl.Series:
    """What to put before texts written in these countries; null: nothing, `default_country` is theirs. A country that
    is told, but not by two letters, is nobody's."""
    # distinct values first: few countries, many rows
    names = told.unique().drop_nulls()
    name = names.str.strip_chars().str.to_uppercase().alias("name")
    known = pl.when(pl.col("name").str.contains("^[A-Z]{2}$")).then("name").otherwise(pl.lit(NOWHERE))
    needless = pl.col("name").is_in(["", default_country])
    before = name.to_frame().select(pl.when(~needless).then(known + ":")).to_series()
    return told.replace_strict(names, before, default=None, return_dtype=pl.String)


def with_country(text: pl.Expr, before: pl.Expr) -> pl.Expr:
    """`text` with what `countries` says before it, where it could matter."""
    return pl.when(before.is_null() | text.str.starts_with("+")).then(text).otherwise(before + text)


def read_numbers(raw: pl.Series, default_country: str, short_digits: int) -> pl.DataFrame:
    """`raw`: distinct texts. Returned in that order: `key` (null: unusable), `fault` (null: none), `short`."""
    given = pl.DataFrame({"given": raw.cast(pl.String)}).with_row_index("place")
    given = given.with_columns(done=evident(pl.col("given")))
    done = given.filter("done").select("place", key="given", fault=pl.lit(None, pl.String), short=pl.lit(False))
    parts = [done]
    for (country,), group in _parted(given.filter(~pl.col("done")), default_country).group_by("country"):
        parts.append(_of_country(group, str(country), short_digits).select(done.columns))
    return pl.concat(parts).sort("place").drop("place")


def _parted(frame: pl.DataFrame, default_country: str) -> pl.DataFrame:
    """`place`, `country` (empty: none), `text` (what is left to be understood), `given` (for the library)."""
    given, text = pl.col("given"), pl.col("text")
    carried = given.str.extract(r"^\s*([A-Z]{2}):", 1)
    frame = frame.with_columns(
        country=carried.fill_null(default_country),
        given=pl.when(carried.is_null())
        .then(given)
        .otherwise(given.str.replace(r"^\s*[A-Z]{2}:", ""))
        .str.strip_chars(),
    )
    special = frame.filter(given.str.contains(r"(?i)^(?:sips?|tel):"))
    if special.height:
        frame = frame.join(_addresses(special), on="place", how="left", maintain_order="left")
        frame = frame.with_columns(given=pl.coalesce("inner", "given")).drop("inner")
    # punctuation that the library passes over, wherever it stands between digits
    frame = frame.with_columns(
        text=pl.when(given.str.contains(r"^\+?[0-9][0-9 .-]*$"))
        .then(given.str.replace_all(r"[ .-]", ""))
        .otherwise(given)
    )
    return frame.select("place", "country", text, "given")


def _addresses(found: pl.DataFrame) -> pl.DataFrame:
    """What SIP and tel addresses say of a number (`inner`): RFC 3261, 19.1.6, puts a tel address's text (RFC 3966)
    before the @, and marks it by user=phone; many networks omit the mark where a + begins it."""
    given = pl.col("given")
    user = given.str.extract(r"(?i)^sips?:([^@]*)@", 1).str.replace(r":.*$", "").str.replace_all("(?i)%2b", "+")
    number = given.str.contains(r"(?i);user=phone") | user.str.contains(r"^\+[0-9]")
    plain = given.str.replace(r"(?i)^tel:", "")
    tel = plain.str.contains(r"^\+?[0-9.-]+$")
    anonymous = user.str.to_lowercase().is_in(WITHHELD)
    inner = (
        pl.when(given.str.contains(r"(?i)^tel:"))
        .then(pl.when(tel).then(plain).otherwise("tel:" + plain))
        .when(anonymous)
        .then(user)
        .when(number & user.str.contains(";"))
        .then("tel:" + user)
        .when(number)
        .then(user)
        .otherwise(pl.lit("sip:"))  # an address, but of no number
    )
    return found.select("place", inner=inner)


def _of_country(group: pl.DataFrame, country: str, short_digits: int) -> pl.DataFrame:
    """Texts that are not evident by themselves, all of one country (empty: none is known)."""
    text, known = pl.col("text"), is_country(country)
    short, read = pl.lit(False), pl.lit(None, pl.String)
    if known:
        short = text.str.contains(rf"^[0-9]{{3,{short_digits}}}$") & ~known_whole(text, country)
        read = whole(text, country)
    group = group.with_columns(
        short=short,
        key=pl.when(short).then(f"{country}:" + text).when(evident(text)).then(text).otherwise(read),
        fault=pl.when(text.str.to_lowercase().is_in(WITHHELD)).then(pl.lit("is withheld")),
    )
    open_ = group.filter(pl.col("key").is_null() & pl.col("fault").is_null())
    if not open_.height:
        return group
    answers = _asked(open_.select("place", "given"), country if known else None)
    group = group.join(answers, on="place", how="left", maintain_order="left")
    return group.with_columns(key=pl.coalesce("key", "answer"), fault=pl.coalesce("fault", "why")).drop("answer", "why")


def _asked(texts: pl.DataFrame, country: str | None) -> pl.DataFrame:
    """The library's `answer` (null: none), and `why` there is none."""
    answers = [_ask(text, country) for text in texts["given"]]
    frame = pl.DataFrame(
        {"place": texts["place"], "answer": [key for key, _ in answers], "why": [why for _, why in answers]},
        schema_overrides={"answer": pl.String, "why": pl.String},
    )
    # A trunk prefix written twice leaves one behind, and would be another number when read again.
    doubtful = frame.filter(pl.col("answer").is_not_null() & ~evident(pl.col("answer")))
    moving = {key for key in doubtful["answer"] if _ask(key, None)[0] != key}
    unstable = pl.col("answer").is_in(sorted(moving))
    return frame.with_columns(
        answer=pl.when(~unstable).then("answer"), why=pl.when(unstable).then(pl.lit("is ambiguous")).otherwise("why")
    )


def _ask(text: str, country: str | None) -> tuple[str | None, str | None]:
    try:
        number = parse(text, country)
    except NumberParseException as error:
        return None, _fault(error, text, country)
    verdict = is_possible_number_with_reason(number)
    if verdict != ValidationResult.IS_POSSIBLE:
        return None, FAULTS.get(verdict, "has an impossible length")
    key = format_number(number, PhoneNumberFormat.E164)
    return (key, None) if len(key) <= 16 else (None, "is too long")


def _fault(error: NumberParseException, text: str, country: str | None) -> str:
    if error.error_type == NumberParseException.TOO_LONG:
        return "is too long"
    if error.error_type in (NumberParseException.TOO_SHORT_NSN, NumberParseException.TOO_SHORT_AFTER_IDD):
        return "is too short"
    if error.error_type == NumberParseException.INVALID_COUNTRY_CODE:
        return "has no known country" if country is None and not text.startswith("+") else "has an unknown calling code"
    return "is not a telephone number"
