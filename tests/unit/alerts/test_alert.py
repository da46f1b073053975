"""The identity of an alert, and how it is kept."""

import hashlib
import io
import json

import numpy as np

from service.alerts.alert import CAUTION, Alert, alert_id
from service.alerts.watch import Watch
from tests.scored_looks import is_same, on, watched


def test_an_alert_is_known_by_parcel_rule_and_opening_pass() -> None:
    # Outside check: SHA-256 by the standard library, over the three in lines.
    told = b"A\ndefault\n2024-05-06T10:30:00+00:00"
    expected = f"alr_{hashlib.sha256(told).hexdigest()[:24]}"
    assert alert_id(parcel="A", rule="default", opening=on(5)) == expected
    watch, _ = watched([4.0, 4.0])
    assert watch.open["A"].id == expected


def test_another_parcel_rule_or_pass_makes_another_alert() -> None:
    ids = {
        alert_id(parcel=parcel, rule=rule, opening=on(day))
        for parcel in "AB"
        for rule in ("default", "wet")
        for day in (0, 5)
    }
    assert len(ids) == 8


def test_an_alert_is_kept_in_json_and_read_again() -> None:
    watch, changes = watched([0.0, 4.0, 4.0, 1.0, 1.0])
    for alert in (changes[0].alert, watch.closed["A"]):
        text = json.dumps(alert.as_dict(), allow_nan=False)
        assert Alert.from_dict(json.loads(text)) == alert


def test_the_memory_is_kept_in_arrays_and_read_again() -> None:
    for scores in ([], [4.0], [4.0, 4.0], [4.0, 4.0, 1.0, 1.0, 2.0]):
        watch, _ = watched(scores)
        file = io.BytesIO()
        np.savez(file, **watch.to_arrays())
        file.seek(0)
        with np.load(file, allow_pickle=False) as kept:
            read = Watch.from_arrays(dict(kept))
        assert is_same(read.to_arrays(), watch.to_arrays())
        assert (read.open, read.closed) == (watch.open, watch.closed)


def test_the_caution_sends_people_to_the_field() -> None:
    assert "Check on the ground before acting" in CAUTION
