"""Pseudonyms in the place of party keys: the same for the same secret, purpose, kind of log and key.

The secret is looked up in each process by itself, from the reference that the settings give, and stays in memory.
Who has it can tell whose pseudonym one is, so pseudonymous data stay personal data.
"""

from __future__ import annotations

import hmac
import json
import os
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import polars as pl
from numpy.typing import NDArray

from isthmus.errors import SettingsError
from isthmus.settings import Privacy

__all__ = ["DIGITS", "Pseudonyms", "open_pseudonyms", "siphash"]

LEAST_BYTES = 16
PIECE = 2**14  # words that a processor's cache holds with all that is made of them
DIGITS = 32  # of a pseudonym, in base 16: 128 bits

Words = NDArray[np.uint64]


@dataclass(frozen=True)
class Pseudonyms:
    """`told`: purpose and kind of log, as they enter every pseudonym."""

    secret: bytes = field(repr=False)
    told: bytes

    @property
    def key_id(self) -> str:
        """16 hex digits that name the secret and do not tell it."""
        return self._derived(b"key id")[:8].hex()

    @property
    def check(self) -> str:
        """32 hex digits that differ when any pseudonym would: by secret, by purpose, by kind of log."""
        return self._derived(b"check " + self.told)[:16].hex()

    def of(self, keys: pl.Series) -> pl.Series:
        """Pseudonyms (String, 32 hex digits) of distinct keys (String, none null), in their order."""
        start = hmac.new(self.secret, self.told, "sha256")
        made = []
        for key in keys:
            each = start.copy()
            each.update(key.encode())
            made.append(each.digest()[: DIGITS // 2].hex())
        return pl.Series(keys.name, made, dtype=pl.String)

    def marked(self, marks: pl.Series) -> pl.Series:
        """Keyed hashes (UInt64) of 64-bit hashes, nulls left: equal where they were.

        The readings' own hashes have no key, so whoever guesses two phone numbers could find their calls by them.
        """
        key = np.frombuffer(self._derived(b"marks " + self.told)[:16], "<u8")
        words = marks.fill_null(0).to_numpy()
        pieces = [siphash(key, words[at : at + PIECE]) for at in range(0, len(words), PIECE)] or [words]
        return pl.Series(marks.name, np.concatenate(pieces)).set(marks.is_null(), None)

    def _derived(self, text: bytes) -> bytes:
        # `told` begins with a bracket, so no pseudonym is a value made here
        return hmac.digest(self.secret, b"isthmus " + text, "sha256")


def open_pseudonyms(privacy: Privacy, kind: str) -> Pseudonyms | None:
    """None when they are off. `kind`: of the log. Raises SettingsError when the secret is missing or too short."""
    if not privacy.pseudonyms:
        return None
    # a JSON list ends where its bracket closes, so no two purposes and kinds run into the keys alike
    return Pseudonyms(_secret(privacy), json.dumps([privacy.purpose, kind]).encode())


def _secret(privacy: Privacy) -> bytes:
    """No message quotes what was found, nor the variable's name, which may be the secret by mistake."""
    if privacy.secret_env:
        where = "the environment variable that privacy.secret_env names"
        secret = os.environb.get(privacy.secret_env.encode(), b"").strip()
    else:
        where = f"privacy.secret_file = {privacy.secret_file}"
        try:
            secret = Path(privacy.secret_file).read_bytes().strip()
        except OSError as error:
            raise SettingsError(f"{where}: cannot be read ({error.strerror}); name the file of the secret") from None
    if not secret:
        raise SettingsError(f"{where} is not set or empty, in a process on this machine; put the secret there")
    if len(secret) < LEAST_BYTES:
        raise SettingsError(f"{where} holds fewer than {LEAST_BYTES} bytes; make the secret of random ones")
    return secret


def siphash(key: Words, words: Words) -> Words:
    """SipHash-2-4 of each word as a message of 8 bytes (Aumasson and Bernstein 2012). key: shape (2,)."""
    k0, k1 = (np.uint64(half) for half in key)
    last = np.uint64(8 << 56)
    state = [
        np.full(words.shape, k ^ np.uint64(start))
        for k, start in zip(
            (k0, k1, k0, k1),
            (0x736F6D6570736575, 0x646F72616E646F6D, 0x6C7967656E657261, 0x7465646279746573),
            strict=True,
        )
    ]
    for word in (words, last):
        state[3] ^= word
        for _ in range(2):
            _round(state)
        state[0] ^= word
    state[2] ^= np.uint64(0xFF)
    for _ in range(4):
        _round(state)
    return state[0] ^ state[1] ^ state[2] ^ state[3]


def _round(v: list[Words]) -> None:
    for a, b, turn, half in ((0, 1, 13, True), (2, 3, 16, False), (0, 3, 21, False), (2, 1, 17, True)):
        v[a] += v[b]
        v[b] = _turned(v[b], turn) ^ v[a]
        if half:
            v[a] = _turned(v[a], 32)


def _turned(word: Words, by: int) -> Words:
    return (word << np.uint64(by)) | (word >> np.uint64(64 - by))
