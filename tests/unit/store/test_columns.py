"""Instants and figures come back as they went in, on each database."""

import math
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta, timezone
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as npst
from numpy.typing import NDArray
from sqlalchemy import select
from sqlalchemy.exc import StatementError
from sqlalchemy.orm import Session

from service.store.columns import UtcDateTime, instant_of, microseconds
from service.store.observations import Measured, record
from service.store.sessions import Sessions
from service.store.tables import ApiKey, Latest, Observation
from tests.unit.store.histories import BORDER, RECORDED, Pictured, add_scene, empty

# The service takes acquisitions from 1972; the columns hold much more than that.
INSTANTS = st.datetimes(
    min_value=datetime(1900, 1, 2),  # noqa: DTZ001 - the strategy adds the offset
    max_value=datetime(2199, 12, 30),  # noqa: DTZ001
    timezones=st.integers(-14 * 60, 14 * 60).map(lambda m: timezone(timedelta(minutes=m))),
)
SPECIAL = [0.0, -0.0, 1e-45, -1e-45, 1.17549435e-38, 3.4028235e38, math.inf, -math.inf, math.nan]
SPECIAL += [0.1, 0.6, 1 / 3, 16_777_216.0, -0.826087]


@given(instant=INSTANTS)
def test_microseconds_since_1970_are_exact_both_ways(instant: datetime) -> None:
    back = instant_of(microseconds(instant))
    assert back == instant
    assert back.tzinfo is UTC


@given(one=INSTANTS, other=INSTANTS)
def test_microseconds_keep_the_order_of_instants(one: datetime, other: datetime) -> None:
    assert (microseconds(one) < microseconds(other)) == (one < other)


def key(created_at: datetime, number: int) -> ApiKey:
    return ApiKey(
        public_id=f"key_{number}",
        label="test",
        digest=f"{number:064d}",
        scopes=["read"],
        holdings=None,
        created_at=created_at,
        expires_at=None,
        revoked_at=None,
    )


@pytest.fixture
def writing(sessions: Sessions) -> Iterator[Session]:
    with sessions.writing() as session:
        yield session
        session.rollback()


# Examples share the transaction; each looks only at the key that it adds.
@settings(max_examples=25, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(instant=INSTANTS)
def test_a_stored_instant_comes_back_exactly_and_in_utc(
    writing: Session, instant: datetime
) -> None:
    number = len(writing.scalars(select(ApiKey.id)).all())
    writing.add(key(instant, number))
    writing.flush()
    back = writing.scalar(select(ApiKey.created_at).where(ApiKey.public_id == f"key_{number}"))
    assert back == instant
    assert back is not None
    assert back.utcoffset() == timedelta(0)
    earlier = select(ApiKey.id).where(
        ApiKey.public_id == f"key_{number}", ApiKey.created_at < instant + timedelta.resolution
    )
    assert writing.scalar(earlier) is not None


def test_a_naive_instant_is_refused_and_none_stays_none(writing: Session) -> None:
    writing.add(key(RECORDED, 1))
    writing.flush()
    expiry = select(ApiKey.expires_at).where(ApiKey.public_id == "key_1")
    assert writing.execute(expiry).all() == [(None,)]
    naive = RECORDED.replace(tzinfo=None)
    with pytest.raises(StatementError, match="an instant without offset cannot be stored"):
        writing.scalar(select(ApiKey.id).where(ApiKey.created_at < naive))
    writing.add(key(naive, 2))
    with pytest.raises(StatementError, match="an instant without offset cannot be stored"):
        writing.flush()


def test_instants_are_kept_to_the_microsecond_by_the_type_alone(sessions: Sessions) -> None:
    instant = datetime(2024, 6, 3, 12, 0, 0, 1, tzinfo=timezone(timedelta(hours=2)))
    dialect = sessions.engine.dialect
    stored = UtcDateTime().process_bind_param(instant, dialect)
    assert UtcDateTime().process_result_value(stored, dialect) == instant


def same_bits(one: NDArray[Any], other: NDArray[Any]) -> bool:
    """Whether two vectors are equal to the last bit, but for the payload of a NaN."""
    nan = np.isnan(one)
    bits = [np.ascontiguousarray(each, dtype="<f4").view("<u4")[~nan] for each in (one, other)]
    return bool((nan == np.isnan(other)).all() and (bits[0] == bits[1]).all())


def figures() -> st.SearchStrategy[NDArray[np.float32]]:
    every = st.floats(width=32) | st.sampled_from(np.array(SPECIAL, np.float32).tolist())
    return npst.arrays(np.float32, st.tuples(st.integers(1, 3), st.integers(1, 12)), elements=every)


@settings(max_examples=25, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(sent=figures())
def test_recorded_figures_come_back_to_the_last_bit(
    writing: Session, sent: NDArray[np.float32]
) -> None:
    """Written in bulk and through the mapper alike, with what is unknown as NaN."""
    empty(writing)
    count, columns = sent.shape
    told = Pictured(minutes=0, platform="a", layout="first", shares=(1.0,) * count)
    figures = np.column_stack([np.ones(count, np.float32), sent]).astype(np.float32)
    names = [f"x{place}.sd" for place in range(columns)]
    measured = Measured(
        parcel_ids=list(range(1, count + 1))[::-1],
        boundary_ids=list(range(11, count + 11))[::-1],
        columns=["clear.valid_share", *names],
        figures=figures[::-1],
        recipe={"rule": "clear"},
        scaling={},
    )
    write = record(writing, add_scene(writing, told, 1), measured, at=RECORDED)
    rows = writing.scalars(select(Observation).order_by(Observation.parcel_id)).all()
    assert [row.parcel_id for row in rows] == list(range(1, count + 1))
    assert [row.boundary_id for row in rows] == list(range(11, count + 11))
    assert {(row.acquired_at, row.write_id) for row in rows} == {(BORDER, write.id)}
    assert all(same_bits(row.figures, figures[i]) for i, row in enumerate(rows))
    assert all(row.figures.dtype == np.float32 for row in rows)
    for row in rows:
        writing.expunge(row)
    mapped = Observation(
        bucket=1, parcel_id=9, acquired_at=BORDER, write_id=9, boundary_id=9, figures=figures[0]
    )
    writing.add(mapped)
    writing.flush()
    writing.expunge(mapped)
    back = writing.scalars(select(Observation).where(Observation.parcel_id == 9)).one()
    assert same_bits(back.figures, figures[0])


def test_a_newest_look_gives_its_figures_in_the_decimals_of_the_series(
    writing: Session,
) -> None:
    """0.1 in float32 is 0.100000001490116…: neither database may show that."""
    empty(writing)
    told = Pictured(minutes=0, platform="a", layout="first", shares=(0.9, 0.7))
    measured = Measured(
        parcel_ids=[1, 2],
        boundary_ids=[1, 2],
        columns=["clear.valid_share", "ndvi.mean"],
        figures=np.array([[0.9, 0.1], [0.7, np.nan]], dtype=np.float32),
        recipe={"rule": "clear"},
        scaling={},
    )
    record(writing, add_scene(writing, told, 1), measured, at=RECORDED)
    query = select(Latest.value, Latest.valid_share).order_by(Latest.parcel_id)
    assert [tuple(row) for row in writing.execute(query)] == [(0.1, 0.9), (None, 0.7)]
