"""Who writes at the Thornwick Almanac, which does not exist, and how their addresses are written."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import polars as pl
from numpy.typing import NDArray

__all__ = ["BRIDGES", "CIRCLE", "FORMS", "GUESTS", "OWN", "PLUS", "SPECIAL", "Book", "Ints"]

Ints = NDArray[np.int64]

OWN = "thornwick.example"
OTHER = "lanternworks.example"
# Departments, one site each. RFC 2606 reserves .example.
SITES = ("quay", "mill", "abbey", "tower", "orchard", "bindery", "press", "annexe")
PLUS = [OWN, *(f"{site}.{OWN}" for site in SITES)]
GIVEN = (
    "Aldous",
    "Brisa",
    "Corvin",
    "Delphi",
    "Esme",
    "Fenno",
    "Greta",
    "Hollis",
    "Idris",
    "Junia",
    "Kester",
    "Linnea",
)
FAMILY = (
    "Quenby",
    "Rooksworth",
    "Saltmere",
    "Tamsel",
    "Underhay",
    "Vosper",
    "Wexcombe",
    "Yarling",
    "Zennor",
    "Ottoway",
)
# Almost nothing passes between departments but through these, who write little.
BRIDGES = ("tide.tables", "moon.phases", "errata.slips", "map.room", "saints.days", "seed.prices")

CIRCLE = 8  # colleagues whom one writes to
GUESTS = 120
BRIDGED = 9  # three people in each of three departments

# What is no person of the Almanac's: name -> address as it is a key.
SPECIAL = {
    "orders": f"orders@{OWN}",
    "gazette": f"gazette@{OTHER}",
    "weekly": f"weekly@lists.{OWN}",
    "offers": f"offers@{OTHER}",
    "no-reply": f"no-reply@{OTHER}",
    "daemon": f"mailer-daemon@mill.{OWN}",
    "build": f"build@mill.{OWN}",
    "duty": f"duty@quay.{OWN}",
    "moved": f"old.almanac@{OWN}",
}
DIRT = {
    "null": None,
    "empty": " ",
    "broken 0": "Corvin at the mill",
    "broken 1": f"@{OWN}",
    "broken 2": f"corvin@@mill.{OWN}",
    "broken 3": f"corvin@mill..{OWN}",
}
FORMS = 6  # ways in which an address is written


@dataclass(frozen=True)
class Book:
    """`keys`: addresses as keys, people first, then bridges, partners, guests, SPECIAL. `written`: FORMS texts each,
    and DIRT's after them. `near` (people x CIRCLE) and `bridged` (bridges x BRIDGED) point at people."""

    keys: pl.Series
    written: pl.Series
    near: Ints
    bridged: Ints
    people: int
    partners: int

    @classmethod
    def draw(cls, people: int, seed: int) -> Book:
        rng = np.random.default_rng([seed, 0])
        site = np.sort(np.arange(people) % len(SITES))
        start, size = np.searchsorted(site, np.arange(len(SITES))), np.bincount(site)
        near = np.empty((people, CIRCLE), np.int64)
        for at in range(len(SITES)):
            steps = 1 + rng.permutation(size[at] - 1)[:CIRCLE]
            own = np.arange(size[at])
            near[start[at] + own] = start[at] + (own[:, None] + steps) % size[at]
        # no two bridges join the same three departments
        homes = [[(bridge + step) % len(SITES) for step in (0, 1, 3)] for bridge in range(len(BRIDGES))]
        bridged = np.array([[start[home] + 5 + rng.permutation(size[home] - 5)[:3] for home in row] for row in homes])
        partners = max(10, people // 10)
        keys, names = _people(people, [f"{SITES[at]}.{OWN}" for at in site])
        outside = [OTHER if at % 10 else "bücherhof.example" for at in range(partners)]
        theirs, their_names = _people(partners, outside)
        keys += [f"{name}@{OWN}" for name in BRIDGES] + theirs
        names += [("Desk", name.replace(".", " ").title()) for name in BRIDGES] + their_names
        keys += [f"guest{at}@visitors.example" for at in range(GUESTS)] + list(SPECIAL.values())
        names += [("Guest", str(at)) for at in range(GUESTS)] + [("Almanac", name) for name in SPECIAL]
        written: list[str | None] = [text for key, name in zip(keys, names, strict=True) for text in _forms(key, *name)]
        written += [text for text in DIRT.values() for _ in range(FORMS)]
        # IDNA by Python's own codec, so that the truth does not rest on the library that the reading uses
        ascii_keys = [f"{key.partition('@')[0]}@{key.partition('@')[2].encode('idna').decode()}" for key in keys]
        texts = pl.Series("written", written, pl.String)
        return cls(pl.Series("key", ascii_keys), texts, near, bridged.reshape(len(BRIDGES), BRIDGED), people, partners)

    @property
    def bridge(self) -> Ints:
        return self.people + np.arange(len(BRIDGES))

    @property
    def partner(self) -> Ints:
        return self.people + len(BRIDGES) + np.arange(self.partners)

    @property
    def guest(self) -> Ints:
        return self.people + len(BRIDGES) + self.partners + np.arange(GUESTS)

    def place(self, name: str) -> int:
        """Where one of SPECIAL or DIRT stands."""
        if name in SPECIAL:
            return len(self.keys) - len(SPECIAL) + list(SPECIAL).index(name)
        return len(self.keys) + list(DIRT).index(name)


def _people(count: int, domains: list[str]) -> tuple[list[str], list[tuple[str, str]]]:
    names = [(GIVEN[at % len(GIVEN)], FAMILY[at // len(GIVEN) % len(FAMILY)]) for at in range(count)]
    keys = [f"{g}.{f}.{at}@{domain}".lower() for at, ((g, f), domain) in enumerate(zip(names, domains, strict=True))]
    return keys, names


def _forms(key: str, given: str, family: str) -> list[str]:
    local, _, domain = key.partition("@")
    tagged = f"{local}+{family.lower().replace(' ', '-')}@{domain}" if domain in PLUS else key
    return [
        key,
        f"{local.upper()}@{domain}",
        f'"{family}, {given}" <{key}>',
        f"{given} {family} <{local.title()}@{domain.upper()}>",
        tagged,
        f" {key} ({given}, {family})",
    ]
