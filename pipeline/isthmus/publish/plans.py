"""The plan of a night, kept so that a re-run repeats the plan and not the probe that it rests on."""

from __future__ import annotations

import json
from dataclasses import asdict, replace
from pathlib import Path

from isthmus.betweenness import Estimate, Plan, make_plan
from isthmus.graph import Graph
from isthmus.settings import Run, Score
from isthmus.store import put

__all__ = ["checkpoint_key", "plan_once", "remember"]


def plan_once(path: Path, input_id: str, graph: Graph, score: Score, run: Run) -> Plan:
    """The plan kept in `path` if it was made for this input_id and fits the memory, else a new one, which is then kept.

    Raises what `make_plan` raises, and StoreError when the plan cannot be kept.
    """
    # every worker has the graph for itself
    memory = run.memory_bytes // max(run.workers, 1)
    try:
        kept = json.loads(path.read_text())
        plan = Plan(**kept["plan"])
        if kept["input_id"] == input_id and plan.predicted_bytes <= memory:
            return plan
    except (OSError, ValueError, KeyError, TypeError):
        pass  # none kept, or of another version: make one
    plan = make_plan(graph, score, run.threads, memory)
    _keep(path, input_id, plan)
    return plan


def remember(path: Path, input_id: str, plan: Plan, estimate: Estimate) -> None:
    """Where the clock stopped the sampling, so that a re-run stops there too. Raises StoreError."""
    if estimate.engine == "numba" and estimate.stopped_because == "minutes":
        _keep(path, input_id, replace(plan, reached=estimate.samples))


def checkpoint_key(input_id: str, plan: Plan) -> str:
    """Names what a checkpoint is of: the same input, measured by the same plan."""
    return json.dumps([input_id, asdict(replace(plan, reached=0))], sort_keys=True)


def _keep(path: Path, input_id: str, plan: Plan) -> None:
    put(path, lambda target: target.write_text(json.dumps({"input_id": input_id, "plan": asdict(plan)})))
