"""Nights that come again: crontab times, what is printed for cron and systemd, and a real Prefect server."""

from __future__ import annotations

import json
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from lattice_census.errors import UsageError
from lattice_census.flows.crontab import calendar, crontab_line, parse_cron, systemd_units
from lattice_census.flows.night import Night

from .tables_of_structures import crystals, rows_of, write_csv
from .test_commands import census
from .test_curating_commands import census as here

MAIN = "from lattice_census.flows.cli import main; main()"


@pytest.mark.parametrize(
    ("text", "said"),
    {
        "0 2 * * *": "*-*-* 02:00:00",
        "*/20 * * * *": "*-*-* *:00,20,40:00",
        "5-10/2 0 1 JAN,mar *": "*-01,03-01 00:05,07,09:00",
        "30 23 * * mon-fri": "Mon,Tue,Wed,Thu,Fri *-*-* 23:30:00",
        "0 4 * * 0": "Sun *-*-* 04:00:00",
        "0 4 * * 7": "Sun *-*-* 04:00:00",
        "0 4 29 2 *": "*-02-29 04:00:00",
        "50/5 1 * * *": "*-*-* 01:50,55:00",
    }.items(),
)
def test_times(text: str, said: str):
    """Values by crontab(5) and systemd.time(7)."""
    assert calendar(parse_cron(text)) == said


@pytest.mark.parametrize(
    "text",
    ["", "0 2 * *", "0 2 * * * *", "60 2 * * *", "0 24 * * *", "0 2 0 * *", "0 2 * 13 *", "0 2 * * 8", "x 2 * * *",
     "5-1 * * * *", "*/0 * * * *", "*-3 * * * *", "1,,2 * * * *", "-1 * * * *", "0 2 31 4 *", "0 2 30 feb *",
     "0 2 * * mon-xyz", "@daily", "٣ 2 * * *", "0 2 * * *\0", "1/2/3 * * * *", "0 2 ? * *"],
)  # fmt: skip
def test_times_that_are_none(text: str):
    with pytest.raises(UsageError, match="--cron"):
        parse_cron(text)


def test_systemd_cannot_say_either_day():
    with pytest.raises(UsageError, match="whichever comes"):
        calendar(parse_cron("0 2 1 * 1"))


def test_lines_are_escaped():
    night = Night(("/a b/100%",), "/it's.duckdb", assignments=("theory_preference=a,b",), wait=60)
    line = crontab_line(parse_cron("0  2 * * *"), ["lattice-census", *night.words()])
    head = "0 2 * * * lattice-census run '/a b/100\\%' --store"
    assert line.startswith(head) and line.endswith(" --wait 60 --set theory_preference=a,b")
    assert (
        subprocess.run(
            ["sh", "-c", "printf '%s\\n' " + line.split(" ", 6)[6].replace("\\%", "%")], capture_output=True, text=True
        ).stdout.splitlines()
        == night.words()
    )
    units = systemd_units(parse_cron("0 2 * * *"), "Europe/Berlin", ["x", *night.words(), "$HOME", 'a"\\'], "n")
    assert 'ExecStart=x run "/a b/100%%" --store "/it\'s.duckdb"' in units and ' $$HOME "a\\"\\\\"' in units
    assert "OnCalendar=*-*-* 02:00:00 Europe/Berlin" in units


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Three crystals, one of them twice."""
    listed = crystals(3)
    write_csv(tmp_path / "t.csv", rows_of([*listed, listed[0]]))
    return tmp_path


def test_what_is_refused_before_anything_is_served(folder: Path):
    (folder / "text.duckdb").write_text("no store")
    (folder / "there-{time}").mkdir()
    for arguments, code, told in (
        (["none.csv"], 2, "There is no file or folder"),
        (["t.csv", "--cron", "0 2 * *"], 2, "five fields"),
        (["t.csv", "--timezone", "Nowhere/Town"], 2, "no such time zone"),
        (["t.csv", "--timezone", "../../etc/passwd"], 2, "no such time zone"),
        (["t.csv", "--name", "a/b"], 2, "--name"),
        (["t.csv", "--print", "cron"], 2, "choose from crontab, systemd"),
        (["t.csv", "--export", "clean"], 2, "{time}"),
        (["t.csv", "--set", "nothing=1"], 2, "no such setting"),
        (["t.csv", "--settings", "none.toml"], 2, "cannot be read"),
        (["t.csv", "t.csv", "--source", "x"], 2, "give one PATH"),
        (["t.csv", "--fail-on", "known"], 2, "choose from rejects, findings"),
        (["t.csv", "--store", "text.duckdb"], 3, "cannot be opened"),
        (["t.csv", "--store", "none/x.duckdb"], 2, "there is no folder"),
    ):
        said = here("schedule", *arguments, cwd=folder)
        assert said.returncode == code and told in said.stderr, (arguments, said.stderr)
        assert "Traceback" not in said.stderr and not said.stdout
    none = {"PREFECT_HOME": str(folder / "prefect"), "PREFECT_API_URL": ""}
    done = census("schedule", "t.csv", cwd=folder, **none)
    assert done.returncode == 2, done.stderr
    assert "prefect server start\n  prefect config set PREFECT_API_URL=" in done.stderr
    closed = {**none, "PREFECT_API_URL": "http://127.0.0.1:9/api"}
    done = census("schedule", "t.csv", cwd=folder, **closed)
    assert done.returncode == 4 and "No Prefect server answers" in done.stderr, done.stderr


def test_the_printed_command_does_a_night(folder: Path):
    done = census("schedule", "t.csv", "--print", "crontab", "--export", "c/{time}", "--workers", "1", cwd=folder)
    assert done.returncode == 0 and done.stderr == "", done.stderr
    line = done.stdout
    assert line.startswith("0 2 * * * ") and str(folder / "t.csv") in line and "--direct --quiet" in line
    command = line.split(" ", 5)[5]
    told = subprocess.run(["sh", "-c", command], cwd="/", capture_output=True, text=True)
    assert told.returncode == 0 and "1 record set aside" in told.stdout, told.stderr
    (made,) = (folder / "c").iterdir()
    assert made.name.endswith("Z") and (made / "set_aside.csv").exists()
    again = subprocess.run(["sh", "-c", command], cwd="/", capture_output=True, text=True)
    assert again.returncode == 0 and "Nothing new" in again.stdout, again.stderr


@pytest.fixture
def server(tmp_path: Path) -> Iterator[dict[str, str]]:
    """A Prefect server of its own on a free port; the environment that names it."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    home = {
        "PREFECT_HOME": str(tmp_path / "prefect"),
        "PREFECT_API_URL": f"http://127.0.0.1:{port}/api",
        "PREFECT_SERVER_ANALYTICS_ENABLED": "false",
        "PREFECT_SERVER_LOGGING_LEVEL": "ERROR",
    }
    environment = {**os.environ, **home}
    process = subprocess.Popen(
        [sys.executable, "-m", "prefect", "server", "start", "--host", "127.0.0.1", "--port", str(port), "--no-ui"],
        env=environment, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, start_new_session=True,
    )  # fmt: skip
    try:
        assert _within(180, lambda: _answers(port)), "the server did not start"
        yield home
    finally:
        os.killpg(process.pid, signal.SIGTERM)
        try:
            process.wait(20)
        except subprocess.TimeoutExpired:
            os.killpg(process.pid, signal.SIGKILL)
            process.wait()


def _answers(port: int) -> bool:
    import httpx

    try:
        return httpx.get(f"http://127.0.0.1:{port}/api/health", timeout=2).status_code == 200
    except httpx.HTTPError:
        return False


def _within(seconds: float, holds: object) -> bool:
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if holds():  # type: ignore[operator]
            return True
        time.sleep(0.3)
    return False


ASK = """
import json, sys
from prefect.client.orchestration import get_client
with get_client(sync_client=True) as client:
    d = client.read_deployment_by_name("run/night")
    for _ in range(int(sys.argv[1])):
        client.create_flow_run_from_deployment(d.id)
    runs = [r for r in client.read_flow_runs() if not r.auto_scheduled]
    print(json.dumps({
        "cron": [s.schedule.cron for s in d.schedules], "zone": [s.schedule.timezone for s in d.schedules],
        "paused": d.paused, "limit": d.global_concurrency_limit.limit, "store": d.parameters["night"]["store"],
        "runs": sorted([str(r.start_time), str(r.end_time), r.state_type, r.state.message or ""] for r in runs),
    }))
"""


@pytest.mark.slow
def test_a_real_server_keeps_the_time_and_runs_nights(folder: Path, server: dict[str, str]):
    environment = {**os.environ, **server}

    def asked(new_runs: int = 0) -> dict:  # type: ignore[type-arg]
        done = subprocess.run([sys.executable, "-c", ASK, str(new_runs)], capture_output=True, text=True,
                              env=environment, check=True)  # fmt: skip
        return json.loads(done.stdout)

    log = (folder / "log").open("w")
    words = ["schedule", "t.csv", "--cron", "15 3 * * *", "--timezone", "Europe/Berlin", "--name", "night",
             "--workers", "1", "--store", "s.duckdb", "--set", 'source_preference=["t.csv"]']  # fmt: skip
    serving = subprocess.Popen([sys.executable, "-c", MAIN, *words], cwd=folder, env=environment, stderr=log,
                               stdout=log, start_new_session=True)  # fmt: skip
    try:
        assert _within(120, lambda: "Serving run/night" in (folder / "log").read_text()), (folder / "log").read_text()
        facts = asked(new_runs=2)
        assert facts["cron"] == ["15 3 * * *"] and facts["zone"] == ["Europe/Berlin"] and facts["limit"] == 1
        assert facts["store"] == str(folder / "s.duckdb") and not facts["paused"]
        assert _within(300, lambda: [r[2] for r in asked()["runs"]] == ["COMPLETED"] * 2), asked()
        first, second = asked()["runs"]
        assert first[1] <= second[0], "two nights of one store at a time"
        assert "1 record set aside" in first[3] and "Nothing new" in second[3]
        done = census("status", "--json", "--store", "s.duckdb", cwd=folder)
        assert json.loads(done.stdout)["decisions"] == {"near": 1}

        other = census("schedule", "t.csv", "--name", "night", "--store", "o.duckdb", cwd=folder, **server)
        assert other.returncode == 2 and "Give another --name" in other.stderr, other.stderr
        serving.send_signal(signal.SIGINT)
        assert serving.wait(60) == 0, (folder / "log").read_text()
        assert "Ended; the schedule of night is paused." in (folder / "log").read_text()
        assert "Traceback" not in (folder / "log").read_text()
        assert asked()["paused"]
    finally:
        if serving.poll() is None:
            os.killpg(serving.pid, signal.SIGKILL)
            serving.wait()
        log.close()
