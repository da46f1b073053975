"""What judging keeps: baselines, folds, judgements, alerts, notices; rules and the diary."""

from datetime import date, datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import (
    JSON,
    BigInteger,
    Float,
    ForeignKey,
    ForeignKeyConstraint,
    Index,
    LargeBinary,
    String,
)
from sqlalchemy.orm import Mapped, mapped_column, relationship

from service.store.columns import Figures
from service.store.tables import Base, Parcel, RowId


class BaselineRow(Base):
    """The baselines of a season axis for one season, fitted from the seasons before it.

    `history` says what they were fitted from; the newest row of a season is in use. `tuned`
    is what replaying those seasons says of each rule.
    """

    __tablename__ = "baseline"
    __table_args__ = (Index("ix_baseline_season", "axis", "season"),)

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    axis: Mapped[str] = mapped_column(String(5))
    season: Mapped[int]
    history: Mapped[str] = mapped_column(String(64))
    version: Mapped[str] = mapped_column(String(64))
    measures: Mapped[list[str]]
    arrays: Mapped[bytes] = mapped_column(LargeBinary)
    tuned: Mapped[dict[str, Any] | None] = mapped_column(JSON(none_as_null=True))
    fitted_at: Mapped[datetime]


class SeasonFold(Base):
    """How far the looks of a season on an axis are judged.

    `wanted` above `done` is the promise of judging, from `wanted_from` on; null is the start
    of the season.
    """

    __tablename__ = "season_fold"

    axis: Mapped[str] = mapped_column(String(5), primary_key=True)
    season: Mapped[int] = mapped_column(primary_key=True, autoincrement=False)
    wanted: Mapped[int]
    done: Mapped[int]
    wanted_from: Mapped[datetime | None]


class FoldState(Base):
    """What the fold of a season remembers after a pass: judging may go on from there.

    All looks up to `seen_until` are in it, and none behind. The pass began at `pass_at` and is
    the season's so many-th; `basis` is a hash of what else it rests on.
    """

    __tablename__ = "fold_state"
    __table_args__ = (
        ForeignKeyConstraint(
            ["axis", "season"], ["season_fold.axis", "season_fold.season"], ondelete="CASCADE"
        ),
    )

    axis: Mapped[str] = mapped_column(String(5), primary_key=True)
    season: Mapped[int] = mapped_column(primary_key=True, autoincrement=False)
    seen_until: Mapped[datetime] = mapped_column(primary_key=True)
    pass_at: Mapped[datetime]
    number: Mapped[int]
    basis: Mapped[str] = mapped_column(String(64))
    state: Mapped[bytes] = mapped_column(LargeBinary)


class Judgement(Base):
    """What is thought of one look of a parcel.

    `figures` are, for each of the baseline's `measures`, those that `store.judgements` names.
    """

    __tablename__ = "judgement"
    __table_args__ = (
        Index("ix_judgement_time", "acquired_at"),
        {"sqlite_with_rowid": False},
    )

    parcel_id: Mapped[int] = mapped_column(BigInteger, primary_key=True, autoincrement=False)
    acquired_at: Mapped[datetime] = mapped_column(primary_key=True)
    baseline_id: Mapped[int] = mapped_column(ForeignKey("baseline.id"))
    crop: Mapped[str | None] = mapped_column(String(100))
    score: Mapped[float | None] = mapped_column(Float(53))
    p: Mapped[float | None] = mapped_column(Float(53))
    unjudged: Mapped[str | None] = mapped_column(String(100))
    figures: Mapped[NDArray[np.float32]] = mapped_column(Figures)
    recorded_at: Mapped[datetime]


class AlertRow(Base):
    """An alert as it stands. `details` holds what judging says of it."""

    __tablename__ = "alert"
    __table_args__ = (
        Index("ix_alert_parcel", "parcel_id"),
        Index("ix_alert_opened", "opened_at", "id"),
        Index("ix_alert_fold", "axis", "season"),
    )

    id: Mapped[str] = mapped_column(String(40), primary_key=True)
    parcel_id: Mapped[int] = mapped_column(ForeignKey("parcel.id"))
    axis: Mapped[str] = mapped_column(String(5))
    season: Mapped[int]
    rule: Mapped[str] = mapped_column(String(100))
    state: Mapped[str] = mapped_column(String(20))
    severity: Mapped[str] = mapped_column(String(10))
    measure: Mapped[str] = mapped_column(String(100))
    cause: Mapped[str] = mapped_column(String(40))
    verdict: Mapped[str | None] = mapped_column(String(20))
    first_departure_at: Mapped[datetime]
    opened_at: Mapped[datetime]
    closed_at: Mapped[datetime | None]
    last_observed_at: Mapped[datetime]
    recorded_at: Mapped[datetime]
    revision: Mapped[int]
    details: Mapped[dict[str, Any]]

    parcel: Mapped[Parcel] = relationship(lazy="joined")


class AlertChange(Base):
    """Something that happened to an alert: by judging, or by a person (`who`).

    `look_at` is the acquisition of the newest look that it rests on.
    """

    __tablename__ = "alert_change"

    alert_id: Mapped[str] = mapped_column(ForeignKey("alert.id"), primary_key=True)
    number: Mapped[int] = mapped_column(primary_key=True, autoincrement=False)
    kind: Mapped[str] = mapped_column(String(20))
    look_at: Mapped[datetime]
    recorded_at: Mapped[datetime]
    who: Mapped[str | None] = mapped_column(String(100))
    verdict: Mapped[str | None] = mapped_column(String(20))
    note: Mapped[str | None] = mapped_column(String(2000))
    what: Mapped[dict[str, Any]] = mapped_column(JSON)


class NoticeRow(Base):
    """A regional notice as it stands: a shift that the crops of an axis share."""

    __tablename__ = "notice"
    __table_args__ = (
        Index("ix_notice_opened", "opened_at", "id"),
        Index("ix_notice_fold", "axis", "season"),
    )

    id: Mapped[str] = mapped_column(String(40), primary_key=True)
    axis: Mapped[str] = mapped_column(String(5))
    season: Mapped[int]
    kind: Mapped[str] = mapped_column(String(40))
    state: Mapped[str] = mapped_column(String(20))
    measure: Mapped[str] = mapped_column(String(100))
    shift: Mapped[float] = mapped_column(Float(53))
    crops: Mapped[list[str]]
    opened_at: Mapped[datetime]
    closed_at: Mapped[datetime | None]
    recorded_at: Mapped[datetime]
    revision: Mapped[int]


class ExplainedRow(Base):
    """An alert that was not opened because something explains the departure."""

    __tablename__ = "explained"
    __table_args__ = (Index("ix_explained_fold", "axis", "season"),)

    alert_id: Mapped[str] = mapped_column(String(40), primary_key=True)
    parcel_id: Mapped[int] = mapped_column(ForeignKey("parcel.id"), index=True)
    axis: Mapped[str] = mapped_column(String(5))
    season: Mapped[int]
    rule: Mapped[str] = mapped_column(String(100))
    departed_at: Mapped[datetime]
    cause: Mapped[str] = mapped_column(String(40))
    because: Mapped[str] = mapped_column(String(200))
    recorded_at: Mapped[datetime]


class DiaryRow(Base):
    """Something that a person knows to have happened on a parcel, both days included."""

    __tablename__ = "diary"

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    public_id: Mapped[str] = mapped_column(String(40), unique=True)
    parcel_id: Mapped[int] = mapped_column(ForeignKey("parcel.id"), index=True)
    kind: Mapped[str] = mapped_column(String(20))
    first_on: Mapped[date]
    last_on: Mapped[date]
    note: Mapped[str | None] = mapped_column(String(2000))
    who: Mapped[str] = mapped_column(String(100))
    recorded_at: Mapped[datetime]


class RuleRow(Base):
    """A rule as an operator put it; a built-in one that nobody changed has no row."""

    __tablename__ = "rule"

    id: Mapped[str] = mapped_column(String(100), primary_key=True)
    definition: Mapped[dict[str, Any]]
    revision: Mapped[int]
    who: Mapped[str] = mapped_column(String(100))
    changed_at: Mapped[datetime]
