"""isthmus on Apache Airflow: one night of one series per day. Put this file into the DAGs folder and change the paths.

The exit codes are handled as the README's operations section says: 75 means "not now" and is tried again, everything
else but 0 needs a person and fails at once.
"""

from __future__ import annotations

import subprocess
from datetime import datetime, timedelta, timezone

from airflow.exceptions import AirflowException, AirflowFailException
from airflow.sdk import dag, task

ISTHMUS = "/opt/isthmus/bin/isthmus"
SERIES = "payments"
CONFIG = f"/etc/isthmus/{SERIES}.toml"
NOT_NOW = 75


@dag(
    dag_id=f"isthmus_{SERIES}",
    schedule="0 2 * * *",
    start_date=datetime(2026, 1, 1, tzinfo=timezone.utc),  # noqa: UP017, for the Python that Airflow may run on
    catchup=False,  # nights that were missed are run on purpose, not by the dozen
    max_active_runs=1,  # the nights of one series do not overlap
    tags=["isthmus"],
)
def nights() -> None:
    @task(retries=8, retry_delay=timedelta(minutes=15), execution_timeout=timedelta(hours=6))
    def score(data_interval_end: datetime | None = None) -> None:
        command = [ISTHMUS, "score", CONFIG]
        if data_interval_end:  # the day before the run's own, also when it is late or repeated; by hand: yesterday
            as_of = (data_interval_end.astimezone(timezone.utc) - timedelta(days=1)).date()  # noqa: UP017
            command += ["--as-of", as_of.isoformat()]
        # stderr names parties, and many read a task's log: the messages are in the file that [signals] log names
        with subprocess.Popen(command, stderr=subprocess.DEVNULL) as run:
            try:
                code = run.wait()
            except BaseException:  # the task is being stopped, and so is the run
                run.terminate()
                raise
        if code == NOT_NOW:
            raise AirflowException(f"{SERIES}: not now (exit {code}), to be tried again")
        if code != 0:
            raise AirflowFailException(f"{SERIES}: exit {code}; see the run's own log")

    score()


nights()
