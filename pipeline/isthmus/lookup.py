"""Whose pseudonym one is, for who holds the secret. Keys come and go through memory only."""

from __future__ import annotations

import re
from datetime import date

import polars as pl

from isthmus.cluster import open_door
from isthmus.errors import DataRefused, SettingsError
from isthmus.ingest import parties_of, survey
from isthmus.privacy import DIGITS, Pseudonyms, open_pseudonyms
from isthmus.readings import Reading, open_reading
from isthmus.settings import Settings

__all__ = ["key_within", "parties_behind", "pseudonyms_of"]


def parties_behind(reading: Reading, text: str) -> list[str]:
    """The parties that a text may be in published tables: whom the user's tables ever made of it (the persons who had
    an address, the owners of an account), and its own key; none when it is no key of this kind of log."""
    if text in reading.names:
        return [text]
    key: str | None = reading.keys(pl.Series([text], dtype=pl.String))["key"].item()
    return [] if key is None else list(dict.fromkeys([*reading.stands_for(key), key]))


def pseudonyms_of(settings: Settings, text: str) -> list[str]:
    """The pseudonyms of the parties behind a text. Raises SettingsError, DataRefused when it is no key of this kind."""
    pseudonyms = _switched_on(settings)
    if not (parties := parties_behind(open_reading(settings.log), text)):
        raise DataRefused("what came on stdin is not the key of a party, as this kind of log has them; look for typos")
    made: list[str] = pseudonyms.of(pl.Series(parties)).to_list()
    return made


def key_within(settings: Settings, pseudonym: str, first_day: date, last_day: date) -> str:
    """The key that has the pseudonym, among the parties of some days of the log.

    Raises SettingsError, StoreError, DataRefused when there is none.
    """
    pseudonyms, reading = _switched_on(settings), open_reading(settings.log)
    if not re.fullmatch(f"[0-9a-f]{{{DIGITS}}}", pseudonym):
        raise DataRefused(f"what came on stdin is not a pseudonym: those are {DIGITS} digits and letters a to f")
    with open_door(threads=settings.run.threads) as door:
        found = survey(settings.log, first_day, last_day, door)
    for parties in parties_of(found, settings.log, reading):
        at = pseudonyms.of(parties).index_of(pseudonym)
        if at is not None:
            return str(parties[at])
    raise DataRefused(
        f"no party of the log in {first_day}..{last_day} has this pseudonym; check --as-of, the purpose, and by "
        "`key_id` in runs whether the secret is the same"
    )


def _switched_on(settings: Settings) -> Pseudonyms:
    if (pseudonyms := open_pseudonyms(settings.privacy, settings.log.kind)) is None:
        raise SettingsError("privacy.pseudonyms = false: keys are published as they are, there is nothing to look up")
    return pseudonyms
