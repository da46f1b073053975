"""The benchmarks as anyone runs them."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from benchmarks.histories.making import make
from benchmarks.rivals import with_threshold
from benchmarks.scoring import Truth, pooled
from service.cli.bench.validation import numbers_in
from service.errors import RejectedInput

SECONDS = 600
# Whatever deployment the operator's settings name: a benchmark has its own.
ELSEWHERE = {"FURROWLIGHT_DATABASE_URL": "postgresql+psycopg://127.0.0.1:1/none"}


def bench(*arguments: str) -> subprocess.CompletedProcess[str]:
    """Run a benchmark in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "service.cli", "bench", *arguments],
        stdin=subprocess.DEVNULL,
        capture_output=True,
        env={**os.environ, **ELSEWHERE},
        text=True,
        timeout=SECONDS,
        check=False,
    )


def test_the_list_names_each_benchmark_and_what_it_measures() -> None:
    done = bench("list")
    assert done.returncode == 0
    named = dict(line.split("\t") for line in done.stdout.splitlines())
    assert "validation" in named
    assert all(says.endswith(".") for says in named.values())


def test_a_small_validation_sends_a_region_through_the_service_and_scores_it(
    tmp_path: Path,
) -> None:
    report = tmp_path / "figures.json"
    done = bench("validation", "--seeds", "101", "--scenario", "parcels-40", "--json", str(report))
    assert done.returncode == 0, done.stderr
    assert "parcels-40: 40 parcels, seeds 101" in done.stdout
    (told,) = json.loads(report.read_text("utf-8"))["scenarios"]
    history = make(101, parcels=40)
    assert told["parcel_weeks"] == Truth.of(history).parcel_weeks
    fixed = pooled(with_threshold([history]))
    rate = told["methods"]["fixed_threshold"]["false alarms / 1,000 weeks"]
    assert rate == pytest.approx(fixed.false_alarm_rate)
    service = told["methods"]["service"]
    assert 0 <= service["false alarms / 1,000 weeks"] < rate
    assert 0 < service["p ≤ 1 % by seed"] < 0.05
    assert service["regional notices"] is not None


def test_a_file_of_figures_is_never_overwritten(tmp_path: Path) -> None:
    report = tmp_path / "figures.json"
    report.write_text("mine", "utf-8")
    done = bench("validation", "--json", str(report))
    assert done.returncode == 3
    assert "exists" in done.stderr
    assert report.read_text("utf-8") == "mine"


def test_seeds_are_numbers_and_spans() -> None:
    assert numbers_in("1-3,8") == [1, 2, 3, 8]


@pytest.mark.parametrize("text", ["", "a", "3-", "-3", "5-3", "1;2"])
def test_other_seeds_are_refused(text: str) -> None:
    with pytest.raises(RejectedInput, match=r"[Ss]eeds"):
        numbers_in(text)
