"""When to try a delivery again: waits that grow over about a day, with jitter."""

import email.utils
import re
from datetime import UTC, datetime, timedelta
from typing import Final

# Ten attempts in all. The first wait catches a restart, the last ones a night without
# anybody on duty; 21.6 hours, up to 25.9 with jitter.
WAITS: Final = (
    timedelta(seconds=5),
    timedelta(minutes=1),
    timedelta(minutes=5),
    timedelta(minutes=30),
    timedelta(hours=1),
    timedelta(hours=2),
    timedelta(hours=4),
    timedelta(hours=6),
    timedelta(hours=8),
)
JITTER: Final = 0.2
# However long a receiver asks to wait, its event is not kept for longer than this.
LAST_ATTEMPT_AFTER: Final = timedelta(hours=48)

_DELTA_SECONDS: Final = re.compile(r"[0-9]+")
_MOST_DIGITS: Final = 9


def next_wait(
    attempts: int, *, elapsed: timedelta, asked: timedelta | None, chance: float
) -> timedelta | None:
    """Return how long to wait for the next attempt, None when there is none left.

    Parameters
    ----------
    attempts
        How many were made, at least one.
    elapsed
        Time since the first.
    asked
        What the receiver's ``Retry-After`` said, if anything: not tried earlier, unless it
        lies beyond the last attempt, 48 hours after the first.
    chance
        A random number in [0, 1): receivers that failed together are not all tried again
        at the same moment. It lengthens waits by up to a fifth, and never shortens them.
    """
    if attempts < 1:
        raise ValueError("There is no wait before the first attempt.")
    left = LAST_ATTEMPT_AFTER - elapsed
    if attempts > len(WAITS) or left <= timedelta(0):
        return None
    wait = max(WAITS[attempts - 1], asked or timedelta(0))
    return min(wait * (1.0 + JITTER * chance), left)


def retry_after(value: str | None, *, now: datetime) -> timedelta | None:
    """Read a ``Retry-After`` header: seconds, or one of the three HTTP dates of RFC 9110.

    Returns None for anything else, and no time for a date that is past.
    """
    text = (value or "").strip(" \t")
    if _DELTA_SECONDS.fullmatch(text):
        digits = text.lstrip("0")
        too_long = len(digits) > _MOST_DIGITS
        return LAST_ATTEMPT_AFTER if too_long else timedelta(seconds=int(digits or "0"))
    try:
        at = email.utils.parsedate_to_datetime(text)
    except (ValueError, OverflowError):
        return None
    # An HTTP date is in GMT, also in the form that does not say so.
    aware = at if at.tzinfo else at.replace(tzinfo=UTC)
    return max(aware - now, timedelta(0))
