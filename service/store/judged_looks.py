"""Writing what is thought of looks, a pass at a time."""

from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import bindparam, select, text, update
from sqlalchemy.orm import Session

from service.store.alert_tables import Judgement
from service.store.batches import in_batches
from service.store.bulk_judgements import insert_judgements
from service.store.columns import UtcDateTime
from service.store.tables import Parcel

JUDGED: Final = ("expected", "low", "high", "shortfall", "departure", "weight")
"""The figures of each measure in a judgement, in this order."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class JudgedPass:
    """What is thought of the looks of a pass.

    Attributes
    ----------
    baseline_season
        The season whose baselines judged it.
    parcel_ids, instants
        Of each look; acquisition in microseconds since 1970. Shape (looks,).
    crops, unjudged
        Of each look; None for no crop, and for a look that was judged.
    score, p
        NaN where a look was not judged, or the past does not tell, shape (looks,).
    figures
        Shape (looks, measures * len(JUDGED)), a measure's figures side by side.
    """

    baseline_season: int
    parcel_ids: NDArray[np.int64]
    instants: NDArray[np.int64]
    crops: Sequence[str | None]
    unjudged: Sequence[str | None]
    score: NDArray[np.float64]
    p: NDArray[np.float64]
    figures: NDArray[np.float32]

    def chosen(self, places: NDArray[np.int64]) -> "JudgedPass":
        """Return the looks at some places."""
        return JudgedPass(
            baseline_season=self.baseline_season,
            parcel_ids=self.parcel_ids[places],
            instants=self.instants[places],
            crops=[self.crops[place] for place in places.tolist()],
            unjudged=[self.unjudged[place] for place in places.tolist()],
            score=self.score[places],
            p=self.p[places],
            figures=self.figures[places],
        )


def put_judgements(
    session: Session,
    parcel_ids: Collection[int],
    passes: Sequence[JudgedPass],
    baseline_ids: Mapping[int, int],
    *,
    since: datetime,
    until: datetime,
    at: datetime,
) -> None:
    """Make the judgements of parcels in an interval these; what says the same stays as it is.

    `since` is included, `until` is not. Of two passes that look at a parcel at the very same
    instant the later one counts. Parcels whose judgements change get another revision.
    """
    passes = _without_doubles(passes)
    interval = {"since": since, "until": until}
    held = select(Judgement.parcel_id).where(
        Judgement.acquired_at >= since, Judgement.acquired_at < until
    )
    if session.scalar(held.limit(1)) is None:
        _insert(session, "judgement", passes, baseline_ids, at=at)
        touched = {parcel for one in passes for parcel in one.parcel_ids.tolist()}
        _bump(session, touched)
        return
    session.execute(text("CREATE TEMP TABLE sent AS SELECT * FROM judgement LIMIT 0"))
    session.execute(text("CREATE UNIQUE INDEX sent_key ON sent (parcel_id, acquired_at)"))
    session.execute(text("CREATE TEMP TABLE sent_parcel (parcel_id BIGINT PRIMARY KEY)"))
    _insert(session, "sent", passes, baseline_ids, at=at)
    for some in in_batches(sorted(parcel_ids)):
        session.execute(_ADD_PARCEL, [{"parcel_id": parcel_id} for parcel_id in some])
    gone = session.scalars(_DELETE_OTHERS, interval).all()
    new = session.scalars(_INSERT_MISSING).all()
    session.execute(text("DROP TABLE sent"))
    session.execute(text("DROP TABLE sent_parcel"))
    _bump(session, {*gone, *new})


def _without_doubles(passes: Sequence[JudgedPass]) -> list[JudgedPass]:
    """Leave out looks at a parcel at whose instant a later pass looks at it as well."""
    seen: dict[int, set[int]] = {}
    kept: list[JudgedPass] = []
    for one in reversed(passes):
        instants = np.unique(one.instants).tolist()
        is_double = np.zeros(one.instants.size, dtype=bool)
        for instant in instants:
            at = one.instants == instant
            if instant in seen:
                is_double |= at & np.isin(one.parcel_ids, list(seen[instant]))
            seen.setdefault(instant, set()).update(one.parcel_ids[at].tolist())
        kept.append(one.chosen(np.flatnonzero(~is_double)) if is_double.any() else one)
    return kept[::-1]


_INSTANT: Final = UtcDateTime()
_ADD_PARCEL: Final = text("INSERT INTO sent_parcel (parcel_id) VALUES (:parcel_id)")
_DELETE_OTHERS: Final = text(
    """
    DELETE FROM judgement
    WHERE acquired_at >= :since AND acquired_at < :until
        AND parcel_id IN (SELECT parcel_id FROM sent_parcel)
        AND NOT EXISTS (
            SELECT 1 FROM sent
            WHERE sent.parcel_id = judgement.parcel_id
                AND sent.acquired_at = judgement.acquired_at
                AND sent.baseline_id = judgement.baseline_id
                AND sent.crop IS NOT DISTINCT FROM judgement.crop
                AND sent.score IS NOT DISTINCT FROM judgement.score
                AND sent.p IS NOT DISTINCT FROM judgement.p
                AND sent.unjudged IS NOT DISTINCT FROM judgement.unjudged
                AND sent.figures = judgement.figures
        )
    RETURNING parcel_id
    """
).bindparams(bindparam("since", type_=_INSTANT), bindparam("until", type_=_INSTANT))
_INSERT_MISSING: Final = text(
    """
    INSERT INTO judgement
    SELECT sent.* FROM sent
    WHERE NOT EXISTS (
        SELECT 1 FROM judgement
        WHERE judgement.parcel_id = sent.parcel_id AND judgement.acquired_at = sent.acquired_at
    )
    ORDER BY sent.parcel_id, sent.acquired_at
    RETURNING parcel_id
    """
)


def _insert(
    session: Session,
    table: str,
    passes: Sequence[JudgedPass],
    baseline_ids: Mapping[int, int],
    *,
    at: datetime,
) -> None:
    for one in passes:
        insert_judgements(
            session,
            table,
            parcel_ids=one.parcel_ids,
            instants=one.instants,
            baseline_id=baseline_ids[one.baseline_season],
            crops=one.crops,
            score=one.score,
            p=one.p,
            unjudged=one.unjudged,
            figures=one.figures,
            recorded_at=at,
        )


def _bump(session: Session, parcel_ids: Iterable[int]) -> None:
    for some in in_batches(sorted(parcel_ids)):
        session.execute(
            update(Parcel)
            .where(Parcel.id.in_(some))
            .values(revision=Parcel.revision + 1)
            .execution_options(synchronize_session=False)
        )
