"""Figures of a night that are too odd to publish. A gate stops the night, warns, or is off, as `[gates]` says."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from datetime import date

from isthmus.errors import GateStopped
from isthmus.settings import Gate, Gates

__all__ = ["pass_gates"]


def pass_gates(
    gates: Gates,
    *,
    rows: int,
    refused: Mapping[str, int],
    missing_days: tuple[date, ...],
    warn: Callable[[str], None],
) -> None:
    """Hold the reading against the gates. Raises GateStopped, naming every gate that stops the night.

    `rows`: those of the window, whatever became of them; `refused`: reason -> rows.
    """
    stops: list[str] = []

    def judge(gate: Gate, name: str, text: str) -> None:
        if gate == "stop":
            stops.append(f'{text}; look at the log, or set [gates] {name} = "warn" to publish all the same')
        elif gate == "warn":
            warn(text)

    if missing_days:
        judge(gates.missing_days, "missing_days", _missing(missing_days))
    share = sum(refused.values()) / rows
    if share > gates.refused_limit:
        reasons = ", ".join(f"{number} {reason}" for reason, number in refused.items())
        judge(
            gates.refused,
            "refused",
            f"{sum(refused.values())} of the window's {rows} rows were refused, a share of {share:.2%} where "
            f"gates.refused_limit allows {gates.refused_limit:.2%} ({reasons})",
        )
    if stops:
        raise GateStopped(
            "\n".join(("a gate stops the night, nothing is published:", *(f"  {text}" for text in stops)))
        )


def _missing(days: tuple[date, ...]) -> str:
    shown = ", ".join(str(day) for day in days[:5]) + (f" and {len(days) - 5} more" if len(days) > 5 else "")
    return f"{len(days)} day{'s' if len(days) > 1 else ''} of the window without a usable row: {shown}"
