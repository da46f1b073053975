"""How far seasons are judged: what is promised, and what folds remember after passes."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

from sqlalchemy import Delete, delete, func, or_, select, update
from sqlalchemy.orm import Session, aliased

from service.store.alert_tables import BaselineRow, FoldState, SeasonFold

NEWEST_KEPT: Final = 6
"""So many of the newest passes are remembered: scenes come late by days."""
EVERY_KEPT: Final = 8
"""Of the earlier passes every eighth is remembered."""
_STALE: Final = ""
"""The history of baselines whose looks or labels have changed since they were fitted."""


def want(session: Session, axis_id: str, season: int, *, since: datetime | None = None) -> None:
    """Promise that a season is judged, and those of later seasons that were.

    What was acquired before `since` has not changed; without it nothing is known of that.
    """
    row = session.get(SeasonFold, (axis_id, season), with_for_update=True)
    if row is None:
        row = SeasonFold(axis=axis_id, season=season, wanted=0, done=0, wanted_from=None)
        session.add(row)
    _raise(row, since)
    if since is None:
        _outdate(session, axis_id, season)
    want_later(session, axis_id, season)


def want_known(
    session: Session, axis_id: str, season: int, *, since: datetime | None = None
) -> None:
    """Promise that a season is judged anew if it was, and later ones."""
    row = session.get(SeasonFold, (axis_id, season), with_for_update=True)
    if row is not None:
        _raise(row, since)
    if since is None:
        _outdate(session, axis_id, season)
    want_later(session, axis_id, season)


def want_later(session: Session, axis_id: str, season: int) -> None:
    """Promise the later seasons from their start: what they go on from may change."""
    query = select(SeasonFold).where(SeasonFold.axis == axis_id, SeasonFold.season > season)
    for row in session.scalars(query.with_for_update()):
        _raise(row, None)
    session.flush()


def _raise(row: SeasonFold, since: datetime | None) -> None:
    is_promised = row.wanted > row.done
    if not is_promised:
        row.wanted_from = since
    elif since is None or row.wanted_from is None:
        row.wanted_from = None
    else:
        row.wanted_from = min(row.wanted_from, since)
    row.wanted += 1


def _outdate(session: Session, axis_id: str, season: int) -> None:
    """Let baselines be fitted anew from a season on, whatever their history looks like."""
    session.execute(
        update(BaselineRow)
        .where(BaselineRow.axis == axis_id, BaselineRow.season >= season)
        .values(history=_STALE)
        .execution_options(synchronize_session=False)
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Kept:
    """What a fold remembers after a pass."""

    seen_until: datetime
    pass_at: datetime
    number: int
    state: bytes


def is_worth_keeping(number: int, *, newest: int) -> bool:
    """Whether what is remembered after a pass is kept, by its number and the newest one's."""
    return number > newest - NEWEST_KEPT or number % EVERY_KEPT == 0


def newest_state(
    session: Session, axis_id: str, season: int, *, basis: str, before: datetime
) -> FoldState | None:
    """Return what a season's fold remembers of the last pass that ended before an instant."""
    query = select(FoldState).where(
        FoldState.axis == axis_id,
        FoldState.season == season,
        FoldState.basis == basis,
        FoldState.seen_until < before,
    )
    return session.scalar(query.order_by(FoldState.seen_until.desc()).limit(1))


def last_state(session: Session, axis_id: str, season: int) -> FoldState | None:
    """Return what is remembered of the last pass of the last judged season before one."""
    query = select(FoldState).where(FoldState.axis == axis_id, FoldState.season < season)
    newest = query.order_by(FoldState.season.desc(), FoldState.seen_until.desc())
    return session.scalar(newest.limit(1))


def keep_states(
    session: Session,
    axis_id: str,
    season: int,
    kept: Sequence[Kept],
    *,
    basis: str,
    after: datetime | None,
    newest: int,
) -> None:
    """Remember the passes behind `after` (without it all) as they are, and thin out the rest.

    `newest` is the number of the season's last pass. Of seasons before the last one no more
    than their end is remembered.
    """
    own = (FoldState.axis == axis_id, FoldState.season == season)
    outdated = delete(FoldState).where(*own).execution_options(synchronize_session=False)
    session.execute(
        outdated
        if after is None
        else outdated.where(or_(FoldState.seen_until > after, FoldState.basis != basis))
    )
    numbers = session.scalars(select(FoldState.number).where(*own)).all()
    thin = [number for number in numbers if not is_worth_keeping(number, newest=newest)]
    if thin:
        session.execute(outdated.where(FoldState.number.in_(thin)))
    session.execute(_all_but_the_end(axis_id, season - 1))
    session.add_all(
        FoldState(
            axis=axis_id,
            season=season,
            seen_until=each.seen_until,
            pass_at=each.pass_at,
            number=each.number,
            basis=basis,
            state=each.state,
        )
        for each in kept
    )
    session.flush()


def _all_but_the_end(axis_id: str, before: int) -> Delete:
    """Forget of the seasons before one all passes but the last."""
    later = aliased(FoldState)
    end = select(func.max(later.seen_until)).where(
        later.axis == FoldState.axis, later.season == FoldState.season
    )
    return (
        delete(FoldState)
        .where(
            FoldState.axis == axis_id,
            FoldState.season < before,
            FoldState.seen_until < end.scalar_subquery(),
        )
        .execution_options(synchronize_session=False)
    )
