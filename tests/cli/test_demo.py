"""The demo as a newcomer runs it: four events told, nothing left running, what it exits with."""

import json
import os
import re
import signal
import socket
import subprocess
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import fasteners
import pytest
import typer

from service.cli.demo import Outcome, check

GENERATOR = Path(__file__).parents[2] / "sample_tiles" / "season.py"
DEMO_SECONDS = 240
# Whatever deployment the operator's settings name: the demo has its own.
ELSEWHERE = {"FURROWLIGHT_DATABASE_URL": "postgresql+psycopg://127.0.0.1:1/none"}


def demo(*arguments: str) -> subprocess.CompletedProcess[str]:
    """Run the demo in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "service.cli", "demo", *arguments],
        stdin=subprocess.DEVNULL,
        capture_output=True,
        env={**os.environ, **ELSEWHERE},
        text=True,
        timeout=DEMO_SECONDS,
        check=False,
    )


def is_served(data: Path) -> bool:
    """Return whether a process still holds the data folder."""
    lock = fasteners.InterProcessLock(data / "worker.lock")
    if not lock.acquire(blocking=False):
        return True
    lock.release()
    return False


@pytest.fixture(scope="module")
def truth(tmp_path_factory: pytest.TempPathFactory) -> Mapping[str, Any]:
    """What was put into the scenario of the default seed, by its generator alone."""
    folder = tmp_path_factory.mktemp("sample")
    subprocess.run(
        [sys.executable, str(GENERATOR), str(folder)], check=True, capture_output=True, timeout=60
    )
    return dict(json.loads((folder / "truth.json").read_text("utf-8")))


def test_the_demo_names_what_befell_whom_and_nobody_else_and_leaves_nothing_running(
    tmp_path: Path, truth: Mapping[str, Any]
) -> None:
    data = tmp_path / "data"
    done = demo("--data", str(data))
    assert (done.returncode, done.stderr) == (0, "")
    causes = dict(
        re.findall(r"^  > alert\.opened +(QM-\d\d) \([a-z ]+\): (\w+),", done.stdout, re.M)
    )
    assert causes == {event["parcel"]: event["cause"] for event in truth["events"]}

    scenes = re.findall(r"^(quillmere_\d+) +(\d+) +(\d+) *(.*)$", done.stdout, re.M)
    unseen = {scene["ref"]: len(scene["unseen"]) for scene in truth["scenes"]}
    assert {ref: int(count) for ref, _, count, _ in scenes} == unseen
    assert all(bool(why) == (count != "0") for _, _, count, why in scenes)

    blocks = {block[:5]: block for block in done.stdout.split("\n\n") if block.startswith("QM-")}
    for event in truth["events"]:
        block = blocks[event["parcel"]]
        assert event["crop"] in block
        assert re.search(r"(?m)^  measure +N\w+ -?\d\.\d\d observed, -?\d\.\d\d expected", block)
        assert f"  cause      {event['cause']}: " in block
        assert f"  truth      right: {event['event']} from {event['started_on']}" in block
    assert "Check on the ground before acting" in done.stdout
    assert "demo --keep" in done.stdout
    assert not is_served(data)


@pytest.mark.parametrize("ending", [signal.SIGINT, signal.SIGTERM])
def test_an_interrupted_demo_exits_with_130_and_its_service_has_ended(
    tmp_path: Path, ending: signal.Signals
) -> None:
    data = tmp_path / "data"
    running = subprocess.Popen(
        [sys.executable, "-m", "service.cli", "demo", "--data", str(data)],
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    with running:
        assert running.stdout is not None
        (port,) = next(
            filter(None, (re.findall(r"answers at .*:(\d+)", line) for line in running.stdout))
        )
        running.send_signal(ending)
        running.communicate(timeout=DEMO_SECONDS)
    assert running.returncode == 130
    assert not is_served(data)
    with pytest.raises(ConnectionRefusedError):
        socket.create_connection(("127.0.0.1", int(port)), timeout=5)


def test_a_data_folder_that_holds_something_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "mine").write_text("kept")
    done = demo("--data", str(tmp_path))
    assert done.returncode == 3
    assert done.stderr == "furrowlight: The data folder holds something; name a new one.\n"
    assert [path.name for path in tmp_path.iterdir()] == ["mine"]


def test_a_demo_whose_service_can_t_start_exits_with_4_and_shows_why(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("no folder")
    done = demo("--data", str(tmp_path / "file" / "data"))
    assert done.returncode == 4
    assert "The data folder can't be made" in done.stderr
    assert done.stderr.splitlines()[-1].startswith("furrowlight: The service did not start")
    assert "measured" not in done.stdout


def test_an_outcome_with_a_fault_exits_with_70_and_says_it(
    capsys: pytest.CaptureFixture[str],
) -> None:
    check(Outcome(befallen=[], alerts=[], faults=[]))
    with pytest.raises(typer.Exit) as ended:
        check(Outcome(befallen=[], alerts=[], faults=["QM-01: flooded, but no alert arrived."]))
    assert ended.value.exit_code == 70
    assert "QM-01: flooded, but no alert arrived." in capsys.readouterr().err
