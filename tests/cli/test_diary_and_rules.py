"""The diary and rules from a terminal: what is printed where, and what a script can rely on."""

import json
import os
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.conftest import fresh_settings
from tests.departing import FALL, depart, settle
from tests.serving import Service, serving


@pytest.fixture
def service(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Service]:
    """The service on SQLite, a parcel having lost its green: a client knows no database."""
    with serving(fresh_settings(request, "sqlite", tmp_path / "data")) as running:
        settle(running)
        depart(running, {"P1": FALL})
        yield running


def run(service: Service, folder: Path, *arguments: str) -> subprocess.CompletedProcess[str]:
    key_file = folder / "key"
    key_file.write_text(service.secret, "utf-8")
    return subprocess.run(
        [sys.executable, "-m", "service.cli", *arguments],
        stdin=subprocess.DEVNULL,
        capture_output=True,
        env={
            **os.environ,
            "FURROWLIGHT_URL": str(service.client.base_url),
            "FURROWLIGHT_KEY_FILE": str(key_file),
        },
        text=True,
        timeout=120,
        check=False,
    )


def test_an_entry_is_written_listed_and_struck_out(service: Service, tmp_path: Path) -> None:
    (alert,) = service.get("/v1/alerts")["alerts"]
    on = alert["first_departure_at"][:10]
    added = run(service, tmp_path, "diary", "add", "P1", "--kind", "harvest", "--on", on)
    assert (added.returncode, added.stderr) == (0, "")
    service.call("POST", "/v1/observations", json=[], headers={"Prefer": "wait=60"})
    listed = run(service, tmp_path, "diary", "list", "P1")
    assert listed.stdout.split("\t")[:4] == [added.stdout.strip(), "harvest", on, on]
    assert f"explained by diary: harvest {on}" in listed.stderr
    gone = run(service, tmp_path, "diary", "remove", "P1", added.stdout.strip())
    assert (gone.returncode, gone.stdout) == (0, "")
    assert run(service, tmp_path, "diary", "list", "P1").stdout == ""
    wrong = run(service, tmp_path, "diary", "add", "P1", "--kind", "party", "--on", on)
    assert (wrong.returncode, wrong.stdout) == (3, "")
    assert "Traceback" not in wrong.stderr


def test_rules_are_listed_and_rehearsed(service: Service, tmp_path: Path) -> None:
    (alert,) = service.get("/v1/alerts")["alerts"]
    listed = run(service, tmp_path, "rules", "list")
    assert listed.stdout.split("\t")[:3] == ["default", "on", "auto"]
    days = ("--from", "2024-01-01", "--to", "2025-01-01")
    found = run(service, tmp_path, "rules", "rehearse", "default", *days)
    assert found.returncode == 0, found.stderr
    assert found.stdout == f"barley\t{alert['opened_at'][:7]}\t1\t\n"
    assert found.stderr.startswith("1 alarms, ")
    file = tmp_path / "rule.json"
    rule = {"measures": [{"index": "ndvi", "direction": "below"}], "threshold": 90}
    file.write_text(json.dumps(rule), "utf-8")
    assert run(service, tmp_path, "rules", "rehearse", str(file), *days).stdout == ""
    file.write_text("{", "utf-8")
    broken = run(service, tmp_path, "rules", "rehearse", str(file), *days)
    assert (broken.returncode, broken.stdout) == (3, "")


def test_an_alert_shows_its_odds_and_what_was_written_down(
    service: Service, tmp_path: Path
) -> None:
    (alert,) = service.get("/v1/alerts")["alerts"]
    on = alert["first_departure_at"][:10]
    run(service, tmp_path, "diary", "add", "P1", "--kind", "irrigation", "--on", on)
    service.call("POST", "/v1/observations", json=[], headers={"Prefer": "wait=60"})
    shown = run(service, tmp_path, "alerts", "show", alert["id"])
    assert "odds" in shown.stdout
    assert f"diary: irrigation {on}" in shown.stdout
