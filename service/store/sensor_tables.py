"""What is kept of sensors that are not built in."""

from datetime import datetime
from typing import Any

from sqlalchemy import Index, String
from sqlalchemy.orm import Mapped, mapped_column

from service.store.tables import Base, RowId


class SensorProfile(Base):
    """One version of a sensor's profile, as it was sent; it is never changed."""

    __tablename__ = "sensor_profile"
    __table_args__ = (Index("ux_sensor_profile_version", "sensor", "version", unique=True),)

    id: Mapped[int] = mapped_column(RowId, primary_key=True)
    sensor: Mapped[str] = mapped_column(String(100))
    version: Mapped[int]
    document: Mapped[dict[str, Any]]
    recorded_at: Mapped[datetime]
