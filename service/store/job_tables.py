"""What is kept of work that takes longer than a request."""

from datetime import datetime
from typing import Any

from sqlalchemy import JSON, Float, ForeignKey, Index, String
from sqlalchemy.orm import Mapped, mapped_column

from service.store.tables import Base, RowId


class Job(Base):
    """Work that was asked for. A row in state `queued` is the promise of it.

    `asked` are its parameters and `digest` the file that it works on; `fingerprint` is that of
    both, by which the same work asked for again while it goes on is found. `holdings` are those
    that the asking key is limited to (None: all).
    """

    __tablename__ = "job"
    __table_args__ = (Index("ix_job_state", "state"),)

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    public_id: Mapped[str] = mapped_column(String(40), unique=True)
    kind: Mapped[str] = mapped_column(String(20))
    api_key_id: Mapped[int] = mapped_column(ForeignKey("api_key.id"))
    holdings: Mapped[list[str] | None] = mapped_column(JSON(none_as_null=True))
    asked: Mapped[dict[str, Any]]
    digest: Mapped[str] = mapped_column(String(64))
    fingerprint: Mapped[str] = mapped_column(String(64))
    state: Mapped[str] = mapped_column(String(20))
    progress: Mapped[float] = mapped_column(Float(53))
    result: Mapped[dict[str, Any] | None] = mapped_column(JSON(none_as_null=True))
    failure: Mapped[dict[str, Any] | None] = mapped_column(JSON(none_as_null=True))
    created_at: Mapped[datetime]
    changed_at: Mapped[datetime]
