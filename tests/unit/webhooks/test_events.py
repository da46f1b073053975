"""Event bodies, read back by the reference library of CloudEvents."""

import json
from datetime import UTC, datetime, timedelta, timezone
from typing import Any

import pytest
from cloudevents.core.bindings.http import HTTPMessage, from_structured
from cloudevents.core.formats.json import JSONFormat
from hypothesis import given
from hypothesis import strategies as st

from service.webhooks.events import CONTENT_TYPE, MAX_BODY_BYTES, OMITTED, EventName, event_body

OCCURRED_AT = datetime(2024, 6, 3, 12, 10, 31, 250_000, tzinfo=timezone(timedelta(hours=2)))
JSON_VALUES = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(), inner, max_size=4),
    max_leaves=12,
)


def body_of(data: dict[str, Any], **changes: Any) -> bytes:
    parts: dict[str, Any] = {
        "prefix": "org.example.fields",
        "source": "https://fields.example/",
        "event_id": "evt_1",
        "occurred_at": OCCURRED_AT,
        "subject": "alert-7",
    }
    return event_body(
        changes.pop("name", EventName.ALERT_OPENED), **{**parts, **changes}, data=data
    )


@pytest.mark.parametrize("name", EventName)
def test_the_reference_library_reads_every_event(name: EventName) -> None:
    body = body_of({"parcel": "north-1", "score": 4.5, "unknown": None}, name=name)
    message = HTTPMessage(headers={"content-type": CONTENT_TYPE}, body=body)
    event = from_structured(message, JSONFormat())
    assert event.get_specversion() == "1.0"
    assert event.get_type() == f"org.example.fields.{name}"
    assert event.get_source() == "https://fields.example/"
    assert event.get_id() == "evt_1"
    assert event.get_subject() == "alert-7"
    assert event.get_time() == OCCURRED_AT
    assert event.get_datacontenttype() == "application/json"
    assert event.get_data() == {"parcel": "north-1", "score": 4.5, "unknown": None}


def test_the_content_type_is_that_of_the_reference_library() -> None:
    assert JSONFormat().get_content_type() == CONTENT_TYPE


def test_times_are_written_in_utc() -> None:
    assert json.loads(body_of({}))["time"] == "2024-06-03T10:10:31.250000Z"
    whole = datetime(2024, 6, 3, 10, 0, tzinfo=UTC)
    assert json.loads(body_of({}, occurred_at=whole))["time"] == "2024-06-03T10:00:00Z"


@given(data=st.dictionaries(st.text(), JSON_VALUES, max_size=6))
def test_data_come_back_as_they_were(data: dict[str, Any]) -> None:
    assert json.loads(body_of(data))["data"] == data


@given(
    sizes=st.dictionaries(st.sampled_from("abcdef"), st.integers(0, 15_000)),
    letter=st.sampled_from("xé🌾"),
)
def test_the_body_stays_under_its_limit_and_says_what_was_left_out(
    sizes: dict[str, int], letter: str
) -> None:
    data = {"link": "/v1/alerts/7"} | {name: letter * size for name, size in sizes.items()}
    body = body_of(data, droppable=list("abcdef"))
    kept = json.loads(body)["data"]
    gone = kept.pop(OMITTED, [])
    assert len(body) < MAX_BODY_BYTES
    assert gone == sorted(gone)
    assert kept == {name: value for name, value in data.items() if name not in gone}
    # Nothing goes without need: the whole was too long.
    assert not gone or len(body_of_any_size(data)) >= MAX_BODY_BYTES


def body_of_any_size(data: dict[str, Any]) -> bytes:
    head = json.loads(body_of({}))
    return json.dumps({**head, "data": data}, ensure_ascii=False, separators=(",", ":")).encode()


def test_what_may_not_be_left_out_and_is_too_long_is_our_fault_and_not_sent() -> None:
    with pytest.raises(ValueError, match="too long"):
        body_of({"a": "x" * MAX_BODY_BYTES})


@pytest.mark.parametrize("figure", [float("nan"), float("inf")])
def test_a_figure_that_is_no_json_is_not_sent(figure: float) -> None:
    with pytest.raises(ValueError, match="JSON"):
        body_of({"score": figure})


@pytest.mark.parametrize(
    "prefix", ["", "org", "org.", ".org.example", "Org.example", "org example"]
)
def test_a_prefix_that_is_no_name_written_backwards_is_refused(prefix: str) -> None:
    with pytest.raises(ValueError, match="backwards"):
        body_of({}, prefix=prefix)


@pytest.mark.parametrize("attribute", ["source", "event_id", "subject"])
def test_an_empty_attribute_is_refused(attribute: str) -> None:
    with pytest.raises(ValueError, match="must not be empty"):
        body_of({}, **{attribute: ""})


def test_a_time_without_offset_is_refused() -> None:
    with pytest.raises(ValueError, match="offset"):
        body_of({}, occurred_at=OCCURRED_AT.replace(tzinfo=None))


def test_half_a_character_in_a_name_does_not_hold_up_an_event() -> None:
    body = body_of({"parcel": "north\ud800"})
    assert json.loads(body)["data"] == {"parcel": "north?"}
