"""Column types: instants that are always UTC, figures packed into one value."""

from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import ARRAY, REAL, BigInteger, DateTime, Dialect, LargeBinary
from sqlalchemy.types import TypeDecorator, TypeEngine

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_MICROSECOND = timedelta(microseconds=1)


class UtcDateTime(TypeDecorator[datetime]):
    """An aware instant: ``timestamptz`` on PostgreSQL, whole microseconds since 1970 on SQLite.

    SQLite's own date-times drop the offset silently and take 26 bytes as text; a naive value
    is refused on either database.
    """

    impl = DateTime(timezone=True)
    cache_ok = True

    def load_dialect_impl(self, dialect: Dialect) -> TypeEngine[Any]:
        """Choose the stored type by database."""
        if dialect.name == "sqlite":
            return dialect.type_descriptor(BigInteger())
        return dialect.type_descriptor(DateTime(timezone=True))

    def process_bind_param(self, value: datetime | None, dialect: Dialect) -> Any:
        """Refuse a naive value and convert to UTC."""
        if value is None:
            return None
        if value.tzinfo is None:
            raise ValueError("an instant without offset cannot be stored")
        return microseconds(value) if dialect.name == "sqlite" else value.astimezone(UTC)

    def process_result_value(self, value: Any, dialect: Dialect) -> datetime | None:
        """Give back an aware instant in UTC."""
        if value is None:
            return None
        if dialect.name == "sqlite":
            return instant_of(value)
        instant: datetime = value
        return instant.astimezone(UTC)


def microseconds(instant: datetime) -> int:
    """Return whole microseconds since 1970, exactly."""
    return (instant - _EPOCH) // _MICROSECOND


def instant_of(since_1970: int) -> datetime:
    """Return the instant that many microseconds after 1970."""
    return _EPOCH + since_1970 * _MICROSECOND


class Figures(TypeDecorator[NDArray[np.float32]]):
    """All figures of one observation: a float32 vector, NaN where unknown.

    Little-endian bytes on SQLite, ``real[]`` on PostgreSQL, where SQL can index it.
    """

    impl = LargeBinary
    cache_ok = True

    def load_dialect_impl(self, dialect: Dialect) -> TypeEngine[Any]:
        """Choose the stored type by database."""
        if dialect.name == "sqlite":
            return dialect.type_descriptor(LargeBinary())
        return dialect.type_descriptor(ARRAY(REAL))

    def process_bind_param(self, value: NDArray[np.float32] | None, dialect: Dialect) -> Any:
        """Pack the vector."""
        if value is None:
            return None
        return value.astype("<f4").tobytes() if dialect.name == "sqlite" else value.tolist()

    def process_result_value(self, value: Any, dialect: Dialect) -> NDArray[np.float32] | None:
        """Unpack the vector."""
        if value is None:
            return None
        if dialect.name == "sqlite":
            return np.frombuffer(value, dtype="<f4")
        return np.asarray(value, dtype=np.float32)


class Figure(TypeDecorator[float]):
    """One float32, given back in its shortest decimals, as series give figures.

    SQLite keeps it as a float64, whose own decimals would be those of the conversion.
    """

    impl = REAL
    cache_ok = True

    def process_result_value(self, value: float | None, _dialect: Dialect) -> float | None:
        """Round what SQLite gives back."""
        return None if value is None else float(str(np.float32(value)))
