"""What judging promises and remembers: from when on, and after which passes."""

from datetime import UTC, datetime, timedelta

from sqlalchemy import select
from sqlalchemy.orm import Session

from service.store.alert_tables import BaselineRow, FoldState, SeasonFold
from service.store.folds import Kept, keep_states, last_state, newest_state, want, want_known
from service.store.sessions import Sessions

AXIS = "10-01"
SOME = datetime(2024, 5, 1, tzinfo=UTC)
LATER = SOME + timedelta(days=9)


def promised(session: Session) -> dict[int, tuple[bool, datetime | None]]:
    """Return by season whether judging is promised, and from when on."""
    return {row.season: (row.wanted > row.done, row.wanted_from) for row in folds(session)}


def folds(session: Session) -> list[SeasonFold]:
    return list(session.scalars(select(SeasonFold).order_by(SeasonFold.season)))


def settle(session: Session) -> None:
    for row in folds(session):
        row.done = row.wanted
    session.flush()


def remember(session: Session, season: int, count: int, *, basis: str = "b") -> None:
    """Keep the states of so many passes, one a day, from the season's start on."""
    begin = datetime(season, 1, 1, tzinfo=UTC)
    kept = [
        Kept(
            seen_until=begin + timedelta(days=number),
            pass_at=begin + timedelta(days=number),
            number=number,
            state=bytes([number]),
        )
        for number in range(1, count + 1)
    ]
    keep_states(session, AXIS, season, kept, basis=basis, after=None, newest=count)


def remembered(session: Session, season: int) -> list[int]:
    query = select(FoldState.number).where(FoldState.season == season)
    return sorted(session.scalars(query))


def test_a_season_is_promised_from_the_earliest_change_on(sessions: Sessions) -> None:
    with sessions.writing() as session:
        want(session, AXIS, 2024, since=LATER)
        assert promised(session) == {2024: (True, LATER)}
        want(session, AXIS, 2024, since=SOME)
        want(session, AXIS, 2024, since=LATER)
        assert promised(session) == {2024: (True, SOME)}
        want(session, AXIS, 2024)
        want(session, AXIS, 2024, since=SOME)
        assert promised(session) == {2024: (True, None)}
        settle(session)
        want(session, AXIS, 2024, since=LATER)
        assert promised(session) == {2024: (True, LATER)}


def test_later_seasons_are_judged_whole_and_unknown_ones_are_not_begun(sessions: Sessions) -> None:
    with sessions.writing() as session:
        want(session, AXIS, 2025, since=LATER)
        settle(session)
        want_known(session, AXIS, 2024, since=SOME)
        assert promised(session) == {2025: (True, None)}
        settle(session)
        want(session, AXIS, 2024, since=SOME)
        assert promised(session) == {2024: (True, SOME), 2025: (True, None)}


def test_a_change_that_nobody_can_date_outdates_baselines_and_a_dated_one_does_not(
    sessions: Sessions,
) -> None:
    with sessions.writing() as session:
        for season in (2023, 2024):
            session.add(
                BaselineRow(
                    axis=AXIS,
                    season=season,
                    history="h",
                    version="v",
                    measures=[],
                    arrays=b"",
                    tuned=None,
                    fitted_at=SOME,
                )
            )
        session.flush()

        def histories() -> list[str]:
            query = select(BaselineRow.history).order_by(BaselineRow.season)
            return list(session.scalars(query))

        want_known(session, AXIS, 2024, since=SOME)
        assert histories() == ["h", "h"]
        want_known(session, AXIS, 2024)
        assert histories() == ["h", ""]


def test_the_newest_passes_are_remembered_and_every_eighth(sessions: Sessions) -> None:
    with sessions.writing() as session:
        want(session, AXIS, 2024)
        remember(session, 2024, 5)
        assert remembered(session, 2024) == [1, 2, 3, 4, 5]
        begin = datetime(2024, 1, 1, tzinfo=UTC)
        for number in range(6, 23):
            kept = Kept(
                seen_until=begin + timedelta(days=number),
                pass_at=begin + timedelta(days=number),
                number=number,
                state=b"s",
            )
            before = begin + timedelta(days=number - 1)
            keep_states(session, AXIS, 2024, [kept], basis="b", after=before, newest=number)
        assert remembered(session, 2024) == [8, 16, 17, 18, 19, 20, 21, 22]


def test_of_a_season_before_the_last_only_its_end_is_remembered(sessions: Sessions) -> None:
    with sessions.writing() as session:
        for season in (2022, 2023, 2024):
            want(session, AXIS, season)
            remember(session, season, 4)
        assert [remembered(session, season) for season in (2022, 2023, 2024)] == [
            [4],
            [1, 2, 3, 4],
            [1, 2, 3, 4],
        ]
        before = last_state(session, AXIS, 2023)
        assert before is not None
        assert (before.season, before.number) == (2022, 4)


def test_judging_goes_on_from_before_the_change_and_on_the_same_basis_alone(
    sessions: Sessions,
) -> None:
    with sessions.writing() as session:
        want(session, AXIS, 2024)
        remember(session, 2024, 5)
        third = datetime(2024, 1, 4, tzinfo=UTC)
        found = newest_state(session, AXIS, 2024, basis="b", before=third)
        assert found is not None
        # What was seen at the very instant of the change is in question.
        assert found.number == 2
        assert newest_state(session, AXIS, 2024, basis="other", before=third) is None
