"""The schedules in configs/ are what they say: read by systemd itself, by a shell, and as Python."""

from __future__ import annotations

import ast
import importlib.util
import os
import re
import shutil
import subprocess
import sys
import types
from datetime import UTC, datetime
from pathlib import Path

import pytest

CONFIGS = Path(__file__).parent.parent / "configs"
SERVICE, TIMER = CONFIGS / "isthmus@.service", CONFIGS / "isthmus@.timer"
CRONTAB, DAG = CONFIGS / "isthmus.crontab", CONFIGS / "airflow_dag.py"


def keys(path: Path) -> dict[str, str]:
    lines = [line for line in path.read_text().splitlines() if "=" in line and not line.startswith("#")]
    return dict(line.split("=", 1) for line in lines)


# --- systemd -------------------------------------------------------------------------------------------------------


@pytest.mark.skipif(not shutil.which("systemd-analyze"), reason="no systemd here")
@pytest.mark.parametrize("wrong", [False, True])
def test_systemd_reads_service_and_timer(tmp_path: Path, wrong: bool) -> None:
    text = SERVICE.read_text().replace("ExecStart=/opt/isthmus/bin/isthmus", "ExecStart=/bin/true")
    assert "ExecStart=/bin/true score" in text
    if wrong:  # so that a check that cannot fail would be seen
        text = text.replace("RestartSec=15min", "RestartSec=soon")
    (tmp_path / SERVICE.name).write_text(text)
    shutil.copy(TIMER, tmp_path)
    names = [str(tmp_path / SERVICE.name), str(tmp_path / TIMER.name)]
    ran = subprocess.run(["systemd-analyze", "--man=no", "verify", *names], capture_output=True, text=True)
    if wrong:
        assert "soon" in ran.stderr
    else:
        assert (ran.returncode, ran.stderr) == (0, "")


def test_the_service_tries_75_again_and_nothing_else() -> None:
    told = keys(SERVICE)
    assert told["RestartForceExitStatus"] == told["SuccessExitStatus"] == "75"
    assert "Restart" not in told
    assert told["KillSignal"] == "SIGTERM"
    assert told["ExecStart"].endswith("isthmus score /etc/isthmus/%i.toml")
    assert keys(TIMER)["OnCalendar"] == "*-*-* 02:00:00 UTC"


# --- cron ----------------------------------------------------------------------------------------------------------


def cron_lines() -> list[str]:
    lines = CRONTAB.read_text().splitlines()
    return [line for line in lines if line and not re.match(r"#|[A-Z_]+=", line)]


def test_crontab_line_has_five_fields_and_a_command_that_a_shell_reads() -> None:
    (line,) = cron_lines()
    *times, command = line.split(maxsplit=5)
    for field, most in zip(times, (59, 23, 31, 12, 7), strict=True):
        assert field == "*" or 0 <= int(field) <= most
    assert "%" not in command  # cron makes a line break of it
    assert subprocess.run(["sh", "-n", "-c", command], check=False).returncode == 0
    assert CRONTAB.read_bytes().endswith(b"\n")  # cron drops a last line without one


@pytest.mark.parametrize(
    ("codes", "runs", "mail"), [([0], 1, ""), ([75, 75, 0], 3, ""), ([65], 1, "exit 65"), ([75] * 20, 8, "exit 75")]
)
def test_cron_tries_75_again_and_nothing_else(tmp_path: Path, codes: list[int], runs: int, mail: str) -> None:
    """The command as it stands, with another isthmus, other folders, and no time to sleep."""
    (tmp_path / "codes").write_text("".join(f"{code}\n" for code in codes))
    program = tmp_path / "isthmus"
    program.write_text('#!/bin/sh\ncd "$(dirname "$0")"\necho "$@" >>calls\nexit $(sed -n "$(wc -l <calls)p" codes)\n')
    (tmp_path / "sleep").write_text("#!/bin/sh\n")
    for script in (program, tmp_path / "sleep"):
        script.chmod(0o755)
    command = cron_lines()[0].split(maxsplit=5)[5]
    command = command.replace("/opt/isthmus/bin/isthmus", str(program)).replace("/var/log/isthmus", str(tmp_path))
    environment = os.environ | {"PATH": f"{tmp_path}:{os.environ['PATH']}"}
    ran = subprocess.run(["sh", "-c", command], env=environment, capture_output=True, text=True, check=False)
    calls = (tmp_path / "calls").read_text().splitlines()
    assert calls == ["score /etc/isthmus/payments.toml"] * runs
    assert mail in ran.stdout
    assert bool(ran.stdout) == bool(mail)
    assert ran.stderr == ""


# --- Airflow -------------------------------------------------------------------------------------------------------


def test_dag_is_python_and_imports_only_what_is_there() -> None:
    tree = ast.parse(DAG.read_text(), feature_version=(3, 9))
    named = {node.module for node in ast.walk(tree) if isinstance(node, ast.ImportFrom)}
    named |= {alias.name for node in ast.walk(tree) if isinstance(node, ast.Import) for alias in node.names}
    assert named == {"__future__", "subprocess", "datetime", "airflow.exceptions", "airflow.sdk"}


class Again(Exception):
    """Stands for what makes a task be tried again."""


class Final(Exception):
    """Stands for what fails a task at once."""


@pytest.mark.parametrize(("code", "ends"), [(0, None), (75, Again), (65, Final), (70, Final), (78, Final)])
def test_dag_tries_75_again_and_nothing_else(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, code: int, ends: type[Exception] | None
) -> None:
    """The file is run with stand-ins for the few names it takes from the orchestrator."""
    tasks: list = []
    sdk, exceptions = types.ModuleType("airflow.sdk"), types.ModuleType("airflow.exceptions")
    sdk.dag = lambda **_: lambda function: function
    sdk.task = lambda **_: lambda function: lambda: tasks.append(function)
    exceptions.AirflowException, exceptions.AirflowFailException = Again, Final
    for name, module in (("airflow", types.ModuleType("airflow")), ("airflow.sdk", sdk)):
        monkeypatch.setitem(sys.modules, name, module)
    monkeypatch.setitem(sys.modules, "airflow.exceptions", exceptions)
    program = tmp_path / "isthmus"
    program.write_text(f'#!/bin/sh\necho "$@" >>"{tmp_path}/calls"\nexit {code}\n')
    program.chmod(0o755)
    names: dict = {"__name__": "dag"}
    exec(compile(DAG.read_text(), str(DAG), "exec"), names)
    names["ISTHMUS"] = str(program)
    (score,) = tasks
    if ends:
        with pytest.raises(ends, match=f"exit {code}"):
            score(datetime(2026, 12, 1, 2, tzinfo=UTC))
    else:
        score(datetime(2026, 12, 1, 2, tzinfo=UTC))
        score()
    calls = (tmp_path / "calls").read_text().splitlines()
    assert calls[0] == "score /etc/isthmus/payments.toml --as-of 2026-11-30"
    assert calls[1:] == ([] if ends else ["score /etc/isthmus/payments.toml"])


@pytest.mark.skipif(not importlib.util.find_spec("airflow"), reason="no Airflow here")
def test_airflow_reads_the_dag() -> None:
    ran = subprocess.run([sys.executable, str(DAG)], capture_output=True, text=True, check=False)
    assert ran.returncode == 0, ran.stderr
