"""OpenLineage events: one START, then exactly one of COMPLETE, ABORT and FAIL.

The standard calls ABORT a run that was stopped abnormally and FAIL one that has failed. So ABORT is an end that came
from outside while nothing was wrong with the work: a signal to stop, another run's lease, a deadline. A gate's stop is
a FAIL: the run came to its own end and could not give what it is for. Events are complete in themselves: inputs and
outputs stand in the first and in the last, because some readers look at one of them only.
"""

from __future__ import annotations

import importlib.metadata
import logging
import os
import warnings
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

with warnings.catch_warnings():
    warnings.simplefilter("ignore", DeprecationWarning)  # the library imports its own older half
    from openlineage.client import OpenLineageClient
    from openlineage.client.event_v2 import InputDataset, Job, OutputDataset, RunEvent, RunState, set_producer
    from openlineage.client.event_v2 import Run as LineageRun
    from openlineage.client.facet_v2 import (
        datasource_dataset,
        error_message_run,
        job_type_job,
        nominal_time_run,
        output_statistics_output_dataset,
        processing_engine_run,
        schema_dataset,
        tags_run,
    )
    from openlineage.client.uuid import generate_new_uuid

from isthmus.errors import SettingsError
from isthmus.settings import Log, Settings, mapped
from isthmus.signals.run import Run
from isthmus.tables import PARTITION, TABLES, Table

__all__ = ["signal"]

# The client's own log may quote what it finds in the environment.
logging.getLogger("openlineage").addHandler(logging.NullHandler())
logging.getLogger("openlineage").propagate = False

# A night does not wait long for whoever listens.
SECONDS, RETRIES = 5.0, 1


def signal(settings: Settings) -> _Lineage:
    """Raises SettingsError when the client cannot work with what the environment says; its own words may quote that."""
    try:
        return _Lineage(settings.signals.openlineage)
    except Exception as error:
        raise SettingsError(
            f"signals.openlineage cannot be set up ({type(error).__name__}); check the address and the environment's "
            "variables that begin with OPENLINEAGE_"
        ) from None


class _Lineage:
    """Credentials come from the environment alone: OPENLINEAGE_API_KEY, or what else the client knows."""

    def __init__(self, target: str) -> None:
        self._target, self._client = target, OpenLineageClient(config={"transport": _transport(target)})
        self._id = str(generate_new_uuid())
        self._version = importlib.metadata.version("isthmus")
        set_producer(f"pkg:pypi/isthmus@{self._version}")

    def hear(self, event: str, run: Run, figures: dict[str, Any]) -> None:
        if event not in ("run_started", run.state):
            return
        if "://" not in self._target:
            Path(self._target).parent.mkdir(parents=True, exist_ok=True)
        self._client.emit(
            RunEvent(
                eventType=_type(run),
                eventTime=(run.ended_at or run.started_at).isoformat(),
                run=LineageRun(self._id, self._run_facets(run)),
                job=_job(run.settings.series),
                inputs=[_input(run.settings.log)],
                outputs=[_output(table, run) for table in TABLES.values()],
            )
        )
        if run.ended_at:
            self._client.close(SECONDS)

    def _run_facets(self, run: Run) -> dict[str, Any]:
        day = datetime(run.as_of.year, run.as_of.month, run.as_of.day, tzinfo=UTC)
        tags = [tags_run.TagsRunFacetFields(key, value, "INTEGRATION") for key, value in run.key.items()]
        facets: dict[str, Any] = {
            "nominalTime": nominal_time_run.NominalTimeRunFacet(day.isoformat(), (day + timedelta(days=1)).isoformat()),
            "processing_engine": processing_engine_run.ProcessingEngineRunFacet(
                self._version, "isthmus", importlib.metadata.version("openlineage-python")
            ),
            "tags": tags_run.TagsRunFacet(tags),
        }
        if run.message:
            facets["errorMessage"] = error_message_run.ErrorMessageRunFacet(run.message, "PYTHON")
        return facets


def _transport(target: str) -> dict[str, Any]:
    if "://" not in target:
        return {"type": "file", "log_file_path": target, "append": True}
    told = urlsplit(target)
    path = {"endpoint": told.path.lstrip("/")} if told.path.strip("/") else {}
    key = os.environ.get("OPENLINEAGE_API_KEY")
    auth = {"auth": {"type": "api_key", "apiKey": key}} if key else {}
    return {
        "type": "http",
        "url": f"{told.scheme}://{told.netloc}",
        "timeout": SECONDS,
        "retry": {"total": RETRIES, "connect": RETRIES, "read": RETRIES},
        **path,
        **auth,
    }


def _type(run: Run) -> RunState:
    if run.state == "running":
        return RunState.START
    if run.state == "published":
        return RunState.COMPLETE
    return RunState.ABORT if run.from_outside else RunState.FAIL


def _job(series: str) -> Job:
    """Named after the series, in the namespace that the environment gives all its jobs."""
    kind = job_type_job.JobTypeJobFacet(processingType="BATCH", integration="ISTHMUS", jobType="JOB")
    return Job(os.environ.get("OPENLINEAGE_NAMESPACE", "isthmus"), series, {"jobType": kind})


def _place(path: str) -> tuple[str, str]:
    """Namespace and name of a dataset, as the standard names local files and object stores."""
    if "://" not in path:
        return "file", str(Path(path).absolute())
    told = urlsplit(path)
    return f"{told.scheme}://{told.netloc.rpartition('@')[2]}", told.path.lstrip("/") or "/"


def _input(log: Log) -> InputDataset:
    namespace, name = _place(log.path)
    fields = [
        schema_dataset.SchemaDatasetFacetFields(theirs, description=ours)
        for ours, theirs in mapped(log.columns).items()
    ]
    return InputDataset(
        namespace,
        name,
        facets={
            "schema": schema_dataset.SchemaDatasetFacet(fields),
            "dataSource": datasource_dataset.DatasourceDatasetFacet(namespace, _uri(namespace, name)),
        },
    )


def _output(table: Table, run: Run) -> OutputDataset:
    namespace, name = _place(f"{run.settings.run.warehouse}/{table.name}")
    columns = (*PARTITION, *table.columns)
    fields = [schema_dataset.SchemaDatasetFacetFields(c.name, str(c.type), c.meaning) for c in columns]
    rows = {"scores": run.manifest.get("parties"), "refused": run.manifest.get("rows_refused"), "runs": 1}
    statistics = output_statistics_output_dataset.OutputStatisticsOutputDatasetFacet(
        rowCount=rows.get(table.name), fileCount=1
    )
    return OutputDataset(
        namespace,
        name,
        facets={
            "schema": schema_dataset.SchemaDatasetFacet(fields),
            "dataSource": datasource_dataset.DatasourceDatasetFacet(namespace, _uri(namespace, name)),
        },
        outputFacets={"outputStatistics": statistics} if run.state == "published" else {},
    )


def _uri(namespace: str, name: str) -> str:
    return Path(name).as_uri() if namespace == "file" else f"{namespace}/{name}"
