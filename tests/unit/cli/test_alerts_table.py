"""The analyst's list of alerts fits a terminal of 80 columns with whole ids and causes."""

from io import StringIO

from rich.console import Console

from service.cli.alerts import _table_of


def test_the_list_of_alerts_keeps_ids_and_causes_whole_on_a_narrow_terminal() -> None:
    alert = {
        "id": "alr_0123456789abcdef01234567",
        "parcel": "a [red] field",
        "crop": "permanent grassland",
        "opened_at": "2024-07-12T10:06:20Z",
        "severity": "medium",
        "cause": {"kind": "moisture_stress"},
        "index": "ndmi",
        "observed": -0.12,
        "expected": 0.34,
        "state": "acknowledged",
    }
    console = Console(width=80, file=StringIO())
    console.print(_table_of([alert]))
    assert isinstance(console.file, StringIO)
    shown = console.file.getvalue()
    words = " ".join(shown.split())
    for whole in ("alr_0123456789abcdef01234567", "moisture_stress", "acknowledged", "2024-07-12"):
        assert whole in words
    assert "a [red] field" in words
    assert "ndmi -0.12, expected 0.34" in words
