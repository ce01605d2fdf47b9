"""`[privacy]`: whether parties' keys are published as they are, and where the secret is found."""

from __future__ import annotations

import re

from pydantic import model_validator

from isthmus.settings.section import Section, file_key, key

__all__ = ["Privacy"]


class Privacy(Section):
    """What stands in the place of people's keys. The secret itself is never a setting."""

    pseudonyms: bool = key(False, "write pseudonyms (HMAC-SHA-256, 32 hex digits) everywhere in the place of keys")
    purpose: str = key(
        "", "what the nights are for, in words; part of each pseudonym, so that those of two purposes are unrelated"
    )
    secret_env: str = key("", "name of the environment variable that holds the secret, 16 random bytes or more")
    secret_file: str = file_key("", "or a file that holds it; blanks and line ends around it do not count")

    @model_validator(mode="after")
    def _one_secret(self) -> Privacy:
        # what stands in secret_env may be the secret itself, by mistake: no message repeats it
        if self.secret_env and not re.fullmatch(r"[A-Za-z_][A-Za-z0-9_]*", self.secret_env):
            raise ValueError("privacy.secret_env is no name of an environment variable; give the name, not the secret")
        if self.pseudonyms and bool(self.secret_env) == bool(self.secret_file):
            raise ValueError("privacy.pseudonyms needs one of privacy.secret_env and privacy.secret_file; give one")
        if self.pseudonyms and not self.purpose.strip():
            raise ValueError("privacy.pseudonyms needs privacy.purpose; say in words what the nights are for")
        return self

    @property
    def meaning(self) -> dict[str, object]:
        """What of it changes results, as far as it is known without the secret; nothing while pseudonyms are off."""
        return {"privacy": {"purpose": self.purpose}} if self.pseudonyms else {}
