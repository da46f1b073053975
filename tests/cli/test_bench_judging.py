"""`furrowlight bench judging` measures, and says what it measured."""

import json
import subprocess
import sys
from pathlib import Path


def test_the_costs_of_judging_are_told_as_ratios(tmp_path: Path) -> None:
    told, stores = tmp_path / "told.json", tmp_path / "stores"
    size = ["--parcels", "100", "--seasons", "2", "--passes", "6"]
    command = ["bench", "judging", *size, "--cache", str(stores), "--json", str(told)]
    done = subprocess.run(
        [sys.executable, "-m", "service.cli", *command], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    assert "judging a scene / measuring it" in done.stdout
    figures = json.loads(told.read_text("utf-8"))
    assert figures["parcels"] == 100
    served = figures["served"]
    assert figures["judging_to_measuring"] == served["judging"] / served["measuring"] > 0
    assert 0 < figures["rebuild_to_ingest"] < 10
    assert figures["import_rows_per_second"] > 0
    assert {judged["seasons"] for judged in figures["judged"]} == {1, 2}
    # Filled stores are there for the next time.
    assert sorted(kept.name for kept in stores.iterdir()) == [
        "judged-100-2-6",
        "judged-25-1-6",
        "judged-25-2-6",
    ]
    again = subprocess.run(
        [sys.executable, "-m", "service.cli", *command], capture_output=True, text=True, check=False
    )
    assert again.returncode == 3
    assert "name a new one" in again.stderr
