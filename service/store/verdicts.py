"""What people said of a parcel at some time."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import select
from sqlalchemy.orm import Session

from service.store.alert_tables import AlertRow
from service.store.batches import in_batches
from service.store.judgements import RETRACTED
from service.store.tables import Parcel


@dataclass(frozen=True, slots=True, kw_only=True)
class Spoken:
    """A verdict on an alert, and the time that it is about; an `until` of None is unended."""

    alert_id: str
    since: datetime
    until: datetime | None
    verdict: str

    def meets(self, since: datetime, until: datetime | None) -> bool:
        """Whether it shares time with an interval, both ends included."""
        begun = until is None or self.since <= until
        return begun and (self.until is None or since <= self.until)


def verdicts_on(session: Session, refs: Iterable[str]) -> Mapping[str, list[Spoken]]:
    """Return by parcel the verdicts that people gave, of any rule, in order of time."""
    found: dict[str, list[Spoken]] = {}
    for some in in_batches(sorted(refs)):
        query = (
            select(Parcel.ref, AlertRow)
            .join(Parcel, Parcel.id == AlertRow.parcel_id)
            .where(
                Parcel.ref.in_(some),
                AlertRow.verdict.is_not(None),
                AlertRow.state != RETRACTED,
            )
            .order_by(AlertRow.opened_at, AlertRow.id)
        )
        for ref, row in session.execute(query):
            if row.verdict is None:
                continue
            spoken = Spoken(
                alert_id=row.id,
                since=row.first_departure_at,
                until=row.closed_at,
                verdict=row.verdict,
            )
            found.setdefault(ref, []).append(spoken)
    return found
