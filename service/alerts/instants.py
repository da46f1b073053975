"""Instants as whole microseconds since 1970, which arrays hold and JSON keeps exactly."""

from datetime import UTC, datetime, timedelta
from typing import Final

_EPOCH: Final = datetime(1970, 1, 1, tzinfo=UTC)
_MICROSECOND: Final = timedelta(microseconds=1)
DAY: Final = timedelta(days=1) // _MICROSECOND
"""Microseconds of a day."""


def microseconds(instant: datetime) -> int:
    """Return the microseconds since 1970 of an aware instant."""
    return (instant - _EPOCH) // _MICROSECOND


def instant(microseconds_since_1970: int) -> datetime:
    """Return the instant, in UTC."""
    return _EPOCH + microseconds_since_1970 * _MICROSECOND
