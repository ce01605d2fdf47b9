"""Figures of a night that are too odd to publish. A gate stops the night, warns, or is off, as `[gates]` says.

Gates with two limits warn at the nearer one and stop at the farther. What an operator accepts by name is published all
the same, and the record says so. The defaults are this project's own, not a standard.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from datetime import date, timedelta
from statistics import median
from typing import Literal

from isthmus.errors import GateStopped
from isthmus.settings import Gate, Gates

__all__ = ["FIRST_PARTIES", "GATES", "WEEKS", "Gatekeeper", "Reference"]

State = Literal["ok", "warn", "stop", "accepted", "off", "nothing to compare with"]
GATES = ("missing_days", "refused", "nulls", "volume", "redelivery", "schema_drift", "component", "overlap")
FIRST_PARTIES = 100
WEEKS = 4  # same weekdays that a day's volume is held against
FEWEST = 2  # fewer say nothing
NULL_KEYS = ("sender is null", "receiver is null", "sender is empty", "receiver is empty")


@dataclass(frozen=True)
class Reference:
    """What an earlier night of the series tells: its day, its columns' types, its figures, its first 100 parties."""

    as_of: date
    columns: Mapping[str, str]
    component_share: float | None
    first_parties: frozenset[str]
    volume: dict[date, int] = field(default_factory=dict)


@dataclass
class Gatekeeper:
    """Holds a night against the gates, in two rounds: after reading and after scoring.

    Each round raises GateStopped, naming every gate of the round that stops the night, with figure, limit and what to
    look at. `accepted`: gates whose stop is published knowingly. `record` hears gate, figure, limit and state of each.
    """

    gates: Gates
    warn: Callable[[str], None]
    accepted: frozenset[str] = frozenset()
    record: Callable[[str, float | None, float, str], None] = lambda gate, figure, limit, state: None

    def after_reading(
        self,
        *,
        rows: int,
        refused: Mapping[str, int],
        missing_days: tuple[date, ...],
        volume: Mapping[date, int],
        volume_before: Mapping[date, int],
        last_day: date,
        drift: Mapping[str, tuple[str, bool]],
        before: Reference | None,
    ) -> None:
        """rows: of the window, whatever became of them; refused: reason -> rows; volume: day -> rows, of this window
        and of earlier nights'; volume_before: the same days as they were counted before; drift: the log's column ->
        (what changed, whether that is harmless).
        """
        gates, stops = self.gates, list[str]()
        total = sum(refused.values())
        reasons = ", ".join(f"{number} {reason}" for reason, number in refused.items())
        share = total / rows if rows else 0.0
        self._judge(
            stops, "missing_days", gates.missing_days, float(len(missing_days)), 0.0,
            broken=bool(missing_days), text=_missing(missing_days), look="whether the days have arrived",
        )  # fmt: skip
        self._judge(
            stops, "refused", gates.refused, share, gates.refused_limit, broken=share > gates.refused_limit,
            text=f"{total} of the window's {rows} rows were refused, a share of {share:.2%} where gates.refused_limit "
            f"allows {gates.refused_limit:.2%} ({reasons})",
            look="the reasons, and the table `refused` of an earlier night; log.columns may be wrong",
        )  # fmt: skip
        nulls = sum(refused.get(reason, 0) for reason in NULL_KEYS)
        share = nulls / rows if rows else 0.0
        self._judge(
            stops, "nulls", gates.nulls, share, gates.nulls_limit, broken=share > gates.nulls_limit,
            text=f"{nulls} of the window's {rows} rows have no sender or no receiver, a share of {share:.3%} where "
            f"gates.nulls_limit allows {gates.nulls_limit:.3%}",
            look="the job that writes the log: a join that finds no key gives nulls",
        )  # fmt: skip
        self._volume(stops, volume, last_day)
        self._redelivery(stops, volume, volume_before)
        self._columns(stops, drift, before)
        self._close(stops)

    def after_scoring(self, *, component_share: float, first_parties: frozenset[str], before: Reference | None) -> None:
        """component_share: of all parties, those in the largest component; first_parties: the first 100 by rank."""
        gates, stops = self.gates, list[str]()
        known = None if before is None else before.component_share
        moved = None if known is None else abs(component_share - known)
        self._judge(
            stops, "component", gates.component, moved, gates.component_change,
            broken=moved is not None and moved > gates.component_change,
            text=f"the largest component holds {component_share:.1%} of the parties, "
            f"{0.0 if known is None else known:.1%} on the night before; gates.component_change allows "
            f"{gates.component_change:.1%}",
            look="whether a source of the log is missing, or another one joined",
        )  # fmt: skip
        kept = None
        if before is not None and before.first_parties:
            kept = len(first_parties & before.first_parties) / len(before.first_parties)
        self._judge(
            stops, "overlap", gates.overlap, kept, gates.overlap_limit,
            broken=kept is not None and kept < gates.overlap_limit,
            text=f"{0.0 if kept is None else kept:.0%} of the first 100 parties of the night before are among the "
            f"first 100 now; gates.overlap_limit asks for {gates.overlap_limit:.0%}",
            look="whether keys are written otherwise than before, or the settings changed",
        )  # fmt: skip
        self._close(stops)

    def _volume(self, stops: list[str], volume: Mapping[date, int], last_day: date) -> None:
        """The last day only: the others were judged on their own nights."""
        alike = [volume[day] for week in range(1, WEEKS + 1) if (day := last_day - timedelta(weeks=week)) in volume]
        usual = median(alike) if len(alike) >= FEWEST else 0.0
        times = volume.get(last_day, 0) / usual if usual else None
        gate, away = self.gates.volume, 1.0
        if times is not None:
            away = max(times, 1 / times) if times else float("inf")
        if gate == "stop" and away < self.gates.volume_stop:
            gate = "warn"
        self._judge(
            stops, "volume", gate, times, self.gates.volume_stop if gate == "stop" else self.gates.volume_warn,
            broken=away >= self.gates.volume_warn,
            text=f"{last_day} has {volume.get(last_day, 0)} rows, {0.0 if times is None else times:.2f} times the "
            f"median of {len(alike)} same weekdays before; gates.volume_warn is a factor of "
            f"{self.gates.volume_warn:g} either way, gates.volume_stop {self.gates.volume_stop:g}",
            look="whether the last day has arrived whole, or twice; a public holiday is a reason to accept",
        )  # fmt: skip

    def _redelivery(self, stops: list[str], volume: Mapping[date, int], before: Mapping[date, int]) -> None:
        """Days that were counted before: late rows change them a little, half a file or a second copy much."""
        known = {day: rows for day, rows in before.items() if rows and day in volume}
        moved = {day: max(volume[day] / rows, rows / max(volume[day], 0.5)) for day, rows in known.items()}
        worst = max(moved, key=lambda day: moved[day], default=None)
        self._judge(
            stops, "redelivery", self.gates.redelivery, moved.get(worst) if worst else None,
            self.gates.redelivery_limit, broken=worst is not None and moved[worst] >= self.gates.redelivery_limit,
            text="" if worst is None else f"{worst} has {volume[worst]} rows, and had {known[worst]} when it was "
            f"counted before; gates.redelivery_limit is a factor of {self.gates.redelivery_limit:g} either way",
            look="whether the day was delivered again in part, or a second time",
        )  # fmt: skip

    def _columns(self, stops: list[str], drift: Mapping[str, tuple[str, bool]], before: Reference | None) -> None:
        gate = self.gates.schema_drift
        if gate == "stop" and all(harmless for _, harmless in drift.values()):
            gate = "warn"
        told = ", ".join(f"column {name!r} {what}" for name, (what, _) in drift.items())
        known = before is not None and bool(before.columns)
        self._judge(
            stops, "schema_drift", gate, float(len(drift)) if known else None, 0.0, broken=bool(drift),
            text=f"the log has changed since the night of {before.as_of if before else 'before'}: {told}",
            look="what changed in the log; a unit that changed makes amounts wrong by a factor",
        )  # fmt: skip

    def _judge(
        self,
        stops: list[str],
        name: str,
        gate: Gate,
        figure: float | None,
        limit: float,
        *,
        broken: bool,
        text: str,
        look: str,
    ) -> None:
        state: State = "ok"
        if gate == "off":
            state = "off"
        elif figure is None:
            state = "nothing to compare with"
        elif broken:
            state = "warn" if gate == "warn" else "accepted" if name in self.accepted else "stop"
        self.record(name, figure, limit, state)
        if state == "stop":
            stops.append(
                f"{name}: {text}. Look at {look}; to publish this night knowingly: --accept {name}; for all nights: "
                f'[gates] {name} = "warn"'
            )
        elif state in ("warn", "accepted"):
            self.warn(f"{name}: {text}" + (" (accepted)" if state == "accepted" else ""))

    @staticmethod
    def _close(stops: list[str]) -> None:
        if stops:
            raise GateStopped(
                "\n".join(("a gate stops the night, nothing is published:", *(f"  {text}" for text in stops)))
            )


def _missing(days: tuple[date, ...]) -> str:
    shown = ", ".join(str(day) for day in days[:5]) + (f" and {len(days) - 5} more" if len(days) > 5 else "")
    return f"{len(days)} day{'s' if len(days) > 1 else ''} of the window without a usable row: {shown}"
