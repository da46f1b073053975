"""Parcels that nobody has seen for a while: since when, in how many passes, and why."""

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from itertools import groupby
from typing import Final

from sqlalchemy import ColumnElement, func, select
from sqlalchemy.orm import Session

from service.spectral.indices import INDICES
from service.spectral.roles import BandRole
from service.store.batches import in_batches
from service.store.looks import observations, one_per_pass
from service.store.reports import LOSSES, parcel_in_scene
from service.store.tables import Latest, Observation, Parcel, UnseenSpell

_BY_THE_SCENES_RULE: Final = (
    *(index.id for index in INDICES.values() if index.quality_rule is None),
    *BandRole,
)
"""Measures whose newest look is one by the scene's own rule: snow that an index is about hides
the field all the same."""
_NEVER: Final = datetime(1970, 1, 1, tzinfo=UTC)
"""Stands for the spell of a parcel that nobody ever saw, whenever its first pass was."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Unseen:
    """A spell without a look: the last look before it, the passes since, and what hid them."""

    last_look_at: datetime | None
    passes: int
    reasons: Mapping[str, int]


def not_seen_since(instant: datetime) -> ColumnElement[bool]:
    """Return the condition that a parcel has had no look at or after an instant."""
    seen = select(Latest.parcel_id).where(
        Latest.measure.in_(_BY_THE_SCENES_RULE), Latest.acquired_at >= instant
    )
    return Parcel.id.not_in(seen)


def last_looks(session: Session, parcel_ids: Sequence[int]) -> dict[int, datetime]:
    """Return when parcels were last seen; those that never were are left out."""
    found: dict[int, datetime] = {}
    newest = func.max(Latest.acquired_at, type_=Latest.acquired_at.type)
    for some in in_batches(parcel_ids):
        query = select(Latest.parcel_id, newest).where(
            Latest.measure.in_(_BY_THE_SCENES_RULE), Latest.parcel_id.in_(some)
        )
        found |= dict(session.execute(query.group_by(Latest.parcel_id)).all())
    return found


def first_passes(session: Session, parcel_ids: Sequence[int]) -> dict[int, datetime]:
    """Return the first pass over each parcel that has had one."""
    found: dict[int, datetime] = {}
    first = func.min(Observation.acquired_at, type_=Observation.acquired_at.type)
    for some in in_batches(parcel_ids):
        query = select(Observation.parcel_id, first).where(Observation.parcel_id.in_(some))
        query = query.group_by(Observation.parcel_id)
        found |= dict(session.execute(query).all())
    return found


def unseen_passes(
    session: Session, since: Mapping[int, datetime], *, until: datetime
) -> dict[int, Unseen]:
    """Return by parcel what hid it in the passes from an instant of its own until another one."""
    parcel_ids = sorted(since)
    seen = last_looks(session, parcel_ids)
    hidden: dict[int, Counter[str]] = {parcel_id: Counter() for parcel_id in parcel_ids}
    first = min(since.values(), default=until)
    rows = observations(session, parcel_ids, since=first, until=until)
    for parcel_id, of_parcel in groupby(rows, key=lambda row: row.parcel_id):
        for look in one_per_pass(of_parcel):
            reason = parcel_in_scene(look).reason
            if reason is not None and look.acquired_at >= since[parcel_id]:
                hidden[parcel_id][reason] += 1
    return {
        parcel_id: Unseen(
            last_look_at=seen.get(parcel_id),
            passes=reasons.total(),
            reasons={loss: reasons[loss] for loss in LOSSES if reasons[loss]},
        )
        for parcel_id, reasons in hidden.items()
    }


def note_spell(
    session: Session, parcel_id: int, last_look_at: datetime | None, *, at: datetime
) -> bool:
    """Note that a spell is told of; return False if it was told before."""
    since = last_look_at or _NEVER
    row = session.get(UnseenSpell, parcel_id)
    if row is not None and row.since == since:
        return False
    if row is None:
        session.add(UnseenSpell(parcel_id=parcel_id, since=since, told_at=at))
    else:
        row.since, row.told_at = since, at
    session.flush()
    return True
