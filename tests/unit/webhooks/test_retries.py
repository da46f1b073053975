"""When a delivery is tried again."""

from datetime import UTC, datetime, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.webhooks.retries import JITTER, LAST_ATTEMPT_AFTER, WAITS, next_wait, retry_after

NOW = datetime(1994, 11, 6, 8, 48, 37, tzinfo=UTC)
NEVER = timedelta(0)
CHANCES = st.floats(0, 1, exclude_max=True)
ASKED = st.none() | st.timedeltas(min_value=NEVER, max_value=timedelta(days=4_000))


def attempts(asked: list[timedelta | None], chances: list[float]) -> list[timedelta]:
    """Return when the attempts of a delivery that always fails are made, after the first."""
    times = [NEVER]
    while True:
        at = (len(times) - 1) % len(asked)
        chance = chances[(len(times) - 1) % len(chances)]
        wait = next_wait(len(times), elapsed=times[-1], asked=asked[at], chance=chance)
        if wait is None:
            return times
        times.append(times[-1] + wait)


@pytest.mark.parametrize("chance", [0.0, 0.5, 0.999])
def test_the_attempts_spread_over_about_a_day(chance: float) -> None:
    times = attempts([None], [chance])
    assert len(times) == len(WAITS) + 1
    assert timedelta(hours=20) < times[-1] < timedelta(hours=28)


def test_a_receiver_that_fails_for_two_hours_is_tried_again_before_five() -> None:
    assert any(timedelta(hours=2) < at < timedelta(hours=5) for at in attempts([None], [0.0]))


@given(st.lists(ASKED, min_size=1), st.lists(CHANCES, min_size=1))
def test_every_delivery_ends_within_two_days_and_few_attempts(
    asked: list[timedelta | None], chances: list[float]
) -> None:
    times = attempts(asked, chances)
    assert len(times) <= len(WAITS) + 1
    assert times[-1] <= LAST_ATTEMPT_AFTER
    assert times == sorted(set(times))


@given(number=st.integers(1, len(WAITS)), asked=ASKED, chance=CHANCES)
def test_a_wait_is_never_shorter_than_planned_or_asked_and_little_longer(
    number: int, asked: timedelta | None, chance: float
) -> None:
    wait = next_wait(number, elapsed=NEVER, asked=asked, chance=chance)
    least = max(WAITS[number - 1], asked or NEVER)
    assert wait is not None
    assert min(least, LAST_ATTEMPT_AFTER) <= wait <= least * (1 + JITTER)


def test_jitter_parts_receivers_that_failed_together() -> None:
    waits = {next_wait(5, elapsed=NEVER, asked=None, chance=at / 10) for at in range(10)}
    assert len(waits) == 10


def test_waits_grow() -> None:
    assert list(WAITS) == sorted(set(WAITS))


def test_there_is_no_wait_before_the_first_attempt() -> None:
    with pytest.raises(ValueError, match="first attempt"):
        next_wait(0, elapsed=NEVER, asked=None, chance=0.0)


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        # RFC 9110, sections 10.2.3 and 5.6.7: seconds, and the three forms of a date.
        ("120", 120),
        ("0", 0),
        (" 7 ", 7),
        ("007", 7),
        ("Sun, 06 Nov 1994 08:49:37 GMT", 60),
        ("Sunday, 06-Nov-94 08:49:37 GMT", 60),
        ("Sun Nov  6 08:49:37 1994", 60),
        ("Fri, 31 Dec 1993 23:59:59 GMT", 0),
        ("9" * 5_000, LAST_ATTEMPT_AFTER.total_seconds()),
    ],
)
def test_retry_after_is_read_in_each_of_its_forms(text: str, seconds: float) -> None:
    assert retry_after(text, now=NOW) == timedelta(seconds=seconds)


@pytest.mark.parametrize(
    "text", [None, "", "soon", "-1", "1.5", "1e3", "١٢", "Sun, 99 Nov 1994 08:49:37 GMT", "120 s"]
)
def test_what_is_no_retry_after_is_as_none(text: str | None) -> None:
    assert retry_after(text, now=NOW) is None


@given(st.text() | st.from_regex(r"[A-Z][a-z]{2}, \d+ Nov \d+ \d+:\d+:\d+ [-+A-Z0-9]*"))
def test_no_header_breaks_the_reader(text: str) -> None:
    asked = retry_after(text, now=NOW)
    assert asked is None or asked >= NEVER
