"""Figures of a night that are too odd to publish. A gate stops the night, warns, or is off, as `[gates]` says."""

from __future__ import annotations

from collections.abc import Callable
from datetime import date

from isthmus.errors import GateStopped
from isthmus.settings import Gate, Gates

__all__ = ["pass_gates"]


def pass_gates(
    gates: Gates, *, rows_read: int, rows_refused: int, missing_days: tuple[date, ...], warn: Callable[[str], None]
) -> None:
    """Hold the reading against the gates. Raises GateStopped, naming every gate that stops the night."""
    stops: list[str] = []

    def judge(gate: Gate, name: str, text: str) -> None:
        if gate == "stop":
            stops.append(f'{text}; look at the log, or set [gates] {name} = "warn" to publish all the same')
        elif gate == "warn":
            warn(text)

    if missing_days:
        judge(gates.missing_days, "missing_days", _missing(missing_days))
    share = rows_refused / rows_read
    if share > gates.refused_limit:
        judge(
            gates.refused,
            "refused",
            f"{rows_refused} of {rows_read} rows were refused, a share of {share:.2%} where "
            f"gates.refused_limit allows {gates.refused_limit:.2%}",
        )
    if stops:
        raise GateStopped(
            "\n".join(("a gate stops the night, nothing is published:", *(f"  {text}" for text in stops)))
        )


def _missing(days: tuple[date, ...]) -> str:
    shown = ", ".join(str(day) for day in days[:5]) + (f" and {len(days) - 5} more" if len(days) > 5 else "")
    return f"{len(days)} day{'s' if len(days) > 1 else ''} of the window without a usable row: {shown}"
