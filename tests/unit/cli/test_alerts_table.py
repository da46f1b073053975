"""The analyst's list of alerts fits a terminal of 80 columns with whole ids and causes."""

from io import StringIO

from rich.console import Console

from service.cli.alerts import _change, _table_of


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


def test_a_change_says_what_changed_and_a_retraction_says_why() -> None:
    change = {
        "recorded_at": "2024-07-12T10:06:20Z",
        "kind": "changed",
        "who": None,
        "verdict": None,
        "note": None,
        "what": {"severity": ["low", "high"], "cause": ["undetermined", "removal"]},
    }
    assert _change(change) == (
        "  2024-07-12T10:06:20Z changed (severity from low to high; cause from undetermined to "
        "removal)"
    )
    gone = {"state": ["open", "retracted"], "reason": "Judged anew, it does not open."}
    assert "state from open to retracted; Judged anew, it" in _change({**change, "what": gone})
    closed = {**change, "kind": "close", "who": "Ada", "verdict": "expected", "note": "Cut."}
    told = _change({**closed, "what": {}})
    assert told.endswith("close by Ada, verdict expected: Cut.")
