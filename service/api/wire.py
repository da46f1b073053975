"""Wire types that several resources share."""

import re
from collections.abc import Iterable
from datetime import UTC, date, datetime, timedelta
from typing import Annotated, Any, Final

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, PlainSerializer

from service.store.names import MAX_NAME, MAX_REF, MAX_TEXT, checked_ref, checked_text
from service.store.parcels import Box

_DAY: Final = re.compile(r"\d{4}-\d\d-\d\d", re.ASCII)
_RFC3339: Final = re.compile(
    r"(\d{4}-\d\d-\d\d)[Tt ]((?:[01]\d|2[0-3]):\d\d):(\d\d)(\.\d+)?([Zz]|[+-]\d\d:\d\d)", re.ASCII
)
_FIRST_YEAR: Final = 1000
_LAST_YEAR: Final = 9998
"""A year away from what instants can hold, so that sums with them never leave it."""


class Sent(BaseModel):
    """A body as sent: members that it does not know are refused."""

    model_config = ConfigDict(extra="forbid", frozen=True)


def instant_from(text: object) -> datetime:
    """Return the instant that an RFC 3339 date-time names, in UTC.

    A leap second counts as the first moment of the next minute. It is one only where there can
    be one: in UTC the last second of a month (RFC 3339, section 5.7).
    """
    match = _RFC3339.fullmatch(text) if isinstance(text, str) else None
    if match is None:
        raise ValueError(
            "send an RFC 3339 date-time with its offset, such as 2024-06-03T10:36:29Z (in a URL "
            "a + is written %2B)"
        )
    day, minute, second, fraction, offset = match.groups()
    is_leap = second == "60"
    written = f"{day}T{minute}:{'59' if is_leap else second}{fraction or ''}"
    try:
        parsed = datetime.fromisoformat(written + ("+00:00" if offset in "Zz" else offset))
    except ValueError:
        raise ValueError("there is no such date or time of day; check it") from None
    if not _FIRST_YEAR <= parsed.year <= _LAST_YEAR:
        raise ValueError(f"send a year from {_FIRST_YEAR} to {_LAST_YEAR}")
    instant = parsed.astimezone(UTC)
    if not is_leap:
        return instant
    after = instant.replace(microsecond=0) + timedelta(seconds=1)
    if (after.day, after.hour, after.minute) != (1, 0, 0):
        raise ValueError("a 60th second is there at the end of a month in UTC only; check it")
    return after


def _instant_or_date(text: object) -> datetime:
    if isinstance(text, str) and _DAY.fullmatch(text):
        return instant_from(f"{text}T00:00:00Z")
    return instant_from(text)


def _written(instant: datetime) -> str:
    return instant.astimezone(UTC).isoformat().replace("+00:00", "Z")


def written(instant: datetime) -> str:
    """Return an instant as the contract writes it: RFC 3339, in UTC, with a Z."""
    return _written(instant)


Instant = Annotated[datetime, BeforeValidator(instant_from)]
"""An instant in a body: the offset is mandatory."""


def _day_from(text: object) -> date:
    if not isinstance(text, str) or not _DAY.fullmatch(text):
        raise ValueError("send a date as YYYY-MM-DD")
    try:
        return date.fromisoformat(text)
    except ValueError:
        raise ValueError("there is no such day; check it") from None


Day = Annotated[date, BeforeValidator(_day_from)]
"""A date in a body."""

QueryInstant = Annotated[datetime, BeforeValidator(_instant_or_date)]
"""An instant in a query: a bare date means 00:00 UTC."""

InstantOut = Annotated[datetime, PlainSerializer(_written, return_type=str)]
"""An instant as answered."""


Ref = Annotated[str, Field(min_length=1, max_length=MAX_REF), AfterValidator(checked_ref)]
"""A client's own reference."""

Text = Annotated[str, Field(min_length=1, max_length=MAX_TEXT), AfterValidator(checked_text)]
"""A short line of text, such as a crop or a label."""

LongText = Annotated[str, Field(min_length=1, max_length=MAX_NAME), AfterValidator(checked_text)]
"""A line of text, such as a name."""


def _box(text: object) -> Box:
    try:
        west, south, east, north = (float(part) for part in str(text).split(","))
    except ValueError:
        raise ValueError("send west,south,east,north in degrees") from None
    if not (-180 <= west <= 180 and -180 <= east <= 180 and -90 <= south <= north <= 90):
        raise ValueError(
            "send west,south,east,north within -180 to 180 and -90 to 90, south first; west may "
            "be larger than east across the antimeridian"
        )
    return west, south, east, north


QueryBox = Annotated[Any, BeforeValidator(_box)]
"""A bounding box in a query: west,south,east,north in degrees."""


def plural_error(count: int) -> str:
    """Return the detail of a problem with several errors."""
    return f"{count} things are wrong; see `errors`. Nothing was kept."


def joined(names: Iterable[str]) -> str:
    """Return names as a list in a sentence."""
    return ", ".join(names)
