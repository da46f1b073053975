"""The one place that asks the time."""

from datetime import UTC, datetime


def now() -> datetime:
    """Return the current instant, aware, in UTC."""
    return datetime.now(UTC)
