"""What is stored. Observations are never changed: a correction is a further write."""

from datetime import date, datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import (
    JSON,
    BigInteger,
    Float,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    String,
    text,
)
from sqlalchemy.orm import DeclarativeBase, Mapped, mapped_column, relationship
from sqlalchemy.types import TypeEngine

from service.store.columns import Figure, Figures, UtcDateTime


class Base(DeclarativeBase):
    """Root of the tables."""

    type_annotation_map = {  # noqa: RUF012 - SQLAlchemy's own protocol
        datetime: UtcDateTime(),
        dict[str, Any]: JSON(),
        list[str]: JSON(),
    }


# SQLite numbers rows by itself only for a column declared INTEGER PRIMARY KEY.
RowId: TypeEngine[int] = BigInteger().with_variant(Integer(), "sqlite")


class ApiKey(Base):
    """A key: its label and rights, and the SHA-256 of its secret."""

    __tablename__ = "api_key"

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    public_id: Mapped[str] = mapped_column(String(40), unique=True)
    label: Mapped[str] = mapped_column(String(100))
    digest: Mapped[str] = mapped_column(String(64), unique=True)
    scopes: Mapped[list[str]]
    holdings: Mapped[list[str] | None] = mapped_column(JSON(none_as_null=True))
    created_at: Mapped[datetime]
    expires_at: Mapped[datetime | None]
    revoked_at: Mapped[datetime | None]


class Holding(Base):
    """Who parcels belong to; `season_start` (MM-DD) null is that of the hemisphere."""

    __tablename__ = "holding"

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    ref: Mapped[str] = mapped_column(String(100), unique=True)
    season_start: Mapped[str | None] = mapped_column(String(5))


class Parcel(Base):
    """A field or plot with an identity that outlives its outline.

    `revision` grows with every change that could alter an answer about the parcel's series;
    entity tags are made of it, so that an unchanged answer reads no observation.
    """

    __tablename__ = "parcel"

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    ref: Mapped[str] = mapped_column(String(100), unique=True)
    name: Mapped[str | None] = mapped_column(String(200))
    holding_id: Mapped[int | None] = mapped_column(ForeignKey("holding.id"), index=True)
    created_at: Mapped[datetime]
    retired_at: Mapped[datetime | None]
    revision: Mapped[int] = mapped_column(BigInteger)

    holding: Mapped[Holding | None] = relationship(lazy="joined")
    tag_rows: Mapped[list["ParcelTag"]] = relationship(
        cascade="all, delete-orphan", lazy="selectin", order_by="ParcelTag.tag"
    )

    @property
    def tags(self) -> list[str]:
        """The parcel's tags, sorted."""
        return [row.tag for row in self.tag_rows]


class ParcelTag(Base):
    """A word by which parcels are found."""

    __tablename__ = "parcel_tag"

    parcel_id: Mapped[int] = mapped_column(ForeignKey("parcel.id"), primary_key=True)
    tag: Mapped[str] = mapped_column(String(100), primary_key=True, index=True)


class Boundary(Base):
    """One outline of a parcel, in two times.

    It holds for acquisitions in the half-open [valid_from, valid_to), null meaning unbounded,
    and was what the service knew in [recorded_at, closed_at).
    """

    __tablename__ = "boundary"
    __table_args__ = (Index("ix_boundary_box", "west", "east"),)

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    parcel_id: Mapped[int] = mapped_column(ForeignKey("parcel.id"), index=True)
    valid_from: Mapped[datetime | None]
    valid_to: Mapped[datetime | None]
    recorded_at: Mapped[datetime]
    closed_at: Mapped[datetime | None]
    wkb: Mapped[bytes] = mapped_column(LargeBinary)
    area_ha: Mapped[float] = mapped_column(Float(53))
    west: Mapped[float] = mapped_column(Float(53))
    south: Mapped[float] = mapped_column(Float(53))
    east: Mapped[float] = mapped_column(Float(53))
    north: Mapped[float] = mapped_column(Float(53))


class CropSeason(Base):
    """What grew on a parcel from one day to another, both included."""

    __tablename__ = "crop_season"

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    parcel_id: Mapped[int] = mapped_column(ForeignKey("parcel.id"), index=True)
    crop: Mapped[str] = mapped_column(String(100))
    from_on: Mapped[date]
    until_on: Mapped[date]
    sown_on: Mapped[date | None]
    harvested_on: Mapped[date | None]


class CropGroup(Base):
    """The group in which a crop is compared while too few parcels have it."""

    __tablename__ = "crop_group"

    crop: Mapped[str] = mapped_column(String(100), primary_key=True)
    group: Mapped[str] = mapped_column("group_name", String(100))


class UnseenSpell(Base):
    """The last spell without a look that was told of a parcel, by when it began."""

    __tablename__ = "unseen_spell"

    parcel_id: Mapped[int] = mapped_column(ForeignKey("parcel.id"), primary_key=True)
    since: Mapped[datetime]
    told_at: Mapped[datetime]


class GridRow(Base):
    """A measuring grid, and its footprint as longitudes and latitudes."""

    __tablename__ = "grid"

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    digest: Mapped[str] = mapped_column(String(64), unique=True)
    crs: Mapped[str] = mapped_column(String)
    transform: Mapped[list[Any]] = mapped_column(JSON)
    rows: Mapped[int]
    cols: Mapped[int]
    west: Mapped[float] = mapped_column(Float(53))
    south: Mapped[float] = mapped_column(Float(53))
    east: Mapped[float] = mapped_column(Float(53))
    north: Mapped[float] = mapped_column(Float(53))


class Scene(Base):
    """One acquisition over one tile.

    A row in state `queued` is the promise of its ingest. `generation` names the attempt: each
    retry, replacement or repeated measurement raises it, and a step that finds another
    generation than its own leaves the row alone. Figures imported to shape baselines alone
    are not judged.
    """

    __tablename__ = "scene"
    __table_args__ = (
        Index(
            "ux_scene_live_digest",
            "digest",
            unique=True,
            sqlite_where=text("state NOT IN ('withdrawn', 'superseded')"),
            postgresql_where=text("state NOT IN ('withdrawn', 'superseded')"),
        ),
        Index("ix_scene_acquired", "acquired_at", "id"),
        Index("ix_scene_state", "state"),
    )

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    ref: Mapped[str] = mapped_column(String(100), unique=True)
    kind: Mapped[str] = mapped_column(String(20))
    is_judged: Mapped[bool]
    sensor: Mapped[str] = mapped_column(String(100))
    platform: Mapped[str | None] = mapped_column(String(100))
    tile: Mapped[str | None] = mapped_column(String(100))
    acquired_at: Mapped[datetime]
    processing_baseline: Mapped[str | None] = mapped_column(String(20))
    details: Mapped[dict[str, Any]]
    digest: Mapped[str] = mapped_column(String(64))
    grid_id: Mapped[int | None] = mapped_column(ForeignKey("grid.id"))
    supersedes_id: Mapped[int | None] = mapped_column(ForeignKey("scene.id"))
    generation: Mapped[int]
    state: Mapped[str] = mapped_column(String(20))
    progress: Mapped[float] = mapped_column(Float(53))
    report: Mapped[dict[str, Any] | None] = mapped_column(JSON(none_as_null=True))
    failure: Mapped[dict[str, Any] | None] = mapped_column(JSON(none_as_null=True))
    found: Mapped[list[dict[str, str]] | None] = mapped_column(JSON(none_as_null=True))
    received_at: Mapped[datetime]
    changed_at: Mapped[datetime]

    grid: Mapped[GridRow | None] = relationship(lazy="joined")
    files: Mapped[list["SceneFile"]] = relationship(
        cascade="all, delete-orphan", order_by="SceneFile.part"
    )


class SceneFile(Base):
    """A file of a scene's present content, by the digest that names it in the archive."""

    __tablename__ = "scene_file"

    scene_id: Mapped[int] = mapped_column(ForeignKey("scene.id"), primary_key=True)
    part: Mapped[str] = mapped_column(String(40), primary_key=True)
    digest: Mapped[str] = mapped_column(String(64), index=True)
    size: Mapped[int] = mapped_column(BigInteger)


class Layout(Base):
    """Which figures an observation holds, in which order, by which recipe."""

    __tablename__ = "layout"

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    digest: Mapped[str] = mapped_column(String(64), unique=True)
    columns: Mapped[list[str]]
    recipe: Mapped[dict[str, Any]]


class Write(Base):
    """The observations made of one scene in one generation; current while `closed_at` is null."""

    __tablename__ = "write"
    __table_args__ = (Index("ux_write_scene", "scene_id", "generation", unique=True),)

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    scene_id: Mapped[int] = mapped_column(ForeignKey("scene.id"))
    generation: Mapped[int]
    digest: Mapped[str] = mapped_column(String(64))
    layout_id: Mapped[int] = mapped_column(ForeignKey("layout.id"))
    scaling: Mapped[dict[str, Any]]
    recorded_at: Mapped[datetime]
    closed_at: Mapped[datetime | None]


class Observation(Base):
    """All measures of one parcel in one write, packed. Rows are inserted in key order."""

    __tablename__ = "observation"
    __table_args__ = (
        Index("ix_observation_write", "write_id"),
        {"sqlite_with_rowid": False},
    )

    bucket: Mapped[int] = mapped_column(primary_key=True, autoincrement=False)
    parcel_id: Mapped[int] = mapped_column(BigInteger, primary_key=True, autoincrement=False)
    acquired_at: Mapped[datetime] = mapped_column(primary_key=True)
    write_id: Mapped[int] = mapped_column(BigInteger, primary_key=True, autoincrement=False)
    boundary_id: Mapped[int] = mapped_column(BigInteger)
    figures: Mapped[NDArray[np.float32]] = mapped_column(Figures)


class Latest(Base):
    """The newest look of a parcel by measure, for the overview: derived, kept with each write."""

    __tablename__ = "latest"
    # Every scene rewrites most rows: with room beside them PostgreSQL does it in place.
    __table_args__ = ({"sqlite_with_rowid": False, "postgresql_with": {"fillfactor": 45}},)

    measure: Mapped[str] = mapped_column(String(100), primary_key=True)
    parcel_id: Mapped[int] = mapped_column(BigInteger, primary_key=True, autoincrement=False)
    acquired_at: Mapped[datetime]
    write_id: Mapped[int] = mapped_column(BigInteger)
    value: Mapped[float | None] = mapped_column(Figure)
    valid_share: Mapped[float] = mapped_column(Figure)


class Answer(Base):
    """The first answer to a POST with an Idempotency-Key, kept for 24 hours."""

    __tablename__ = "answer"

    api_key_id: Mapped[int] = mapped_column(ForeignKey("api_key.id"), primary_key=True)
    name: Mapped[str] = mapped_column(String(64), primary_key=True)
    fingerprint: Mapped[str] = mapped_column(String(64))
    status: Mapped[int]
    headers: Mapped[dict[str, Any]]
    body: Mapped[bytes] = mapped_column(LargeBinary)
    recorded_at: Mapped[datetime] = mapped_column(index=True)


class Webhook(Base):
    """A registered receiver of events.

    While a secret is being replaced, the old one still signs beside the new one.
    """

    __tablename__ = "webhook"

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    public_id: Mapped[str] = mapped_column(String(40), unique=True)
    url: Mapped[str] = mapped_column(String)
    events: Mapped[list[str]]
    holdings: Mapped[list[str] | None] = mapped_column(JSON(none_as_null=True))
    min_severity: Mapped[str | None] = mapped_column(String(10))
    secret: Mapped[str] = mapped_column(String(120))
    old_secret: Mapped[str | None] = mapped_column(String(120))
    old_secret_until: Mapped[datetime | None]
    state: Mapped[str] = mapped_column(String(20))
    created_at: Mapped[datetime]


class Event(Base):
    """Something that happened, as it is told: its body is the same for every receiver."""

    __tablename__ = "event"

    id: Mapped[str] = mapped_column(String(60), primary_key=True)
    name: Mapped[str] = mapped_column(String(40))
    subject: Mapped[str] = mapped_column(String(120))
    body: Mapped[bytes] = mapped_column(LargeBinary)
    recorded_at: Mapped[datetime] = mapped_column(index=True)


class Delivery(Base):
    """One event for one receiver. A row in state `waiting` is the promise of an attempt.

    A round of attempts that was asked for anew raises `generation`; `earlier_attempts` are
    those of the rounds before.
    """

    __tablename__ = "delivery"
    __table_args__ = (
        Index("ux_delivery_event", "event_id", "webhook_id", unique=True),
        Index("ix_delivery_webhook", "webhook_id", "id"),
        Index("ix_delivery_state", "state"),
    )

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    public_id: Mapped[str] = mapped_column(String(40), unique=True)
    event_id: Mapped[str] = mapped_column(ForeignKey("event.id"))
    webhook_id: Mapped[int] = mapped_column(ForeignKey("webhook.id", ondelete="CASCADE"))
    state: Mapped[str] = mapped_column(String(20))
    generation: Mapped[int]
    attempts: Mapped[int]
    earlier_attempts: Mapped[int]
    begun_at: Mapped[datetime]
    next_at: Mapped[datetime]

    event: Mapped[Event] = relationship(lazy="joined")
    webhook: Mapped[Webhook] = relationship(lazy="joined")


class Attempt(Base):
    """One POST of a delivery, and what came of it."""

    __tablename__ = "attempt"

    delivery_id: Mapped[int] = mapped_column(
        ForeignKey("delivery.id", ondelete="CASCADE"), primary_key=True
    )
    number: Mapped[int] = mapped_column(primary_key=True, autoincrement=False)
    started_at: Mapped[datetime]
    seconds: Mapped[float] = mapped_column(Float(53))
    status: Mapped[int | None]
    error: Mapped[str | None] = mapped_column(String(40))
    detail: Mapped[str | None] = mapped_column(String)
    answer: Mapped[str] = mapped_column(String)
