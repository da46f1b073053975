"""Strict scoring, on cases worked out by hand."""

import numpy as np
import pytest

from benchmarks.histories.events import Event
from benchmarks.histories.making import Drought
from benchmarks.scoring import Alarm, Share, Tally, Truth, pooled, score, total

LOOKS = (100, 105, 110, 115, 120, 125, 130, 200)


def event(kind: str = "hail", **changed: int | None) -> Event:
    times: dict[str, int | None] = {
        "parcel": 0, "onset": 104, "visible": 104, "faded": 140, "over": 150,
    } | changed  # fmt: skip
    return Event(kind=kind, season=0, change=0.3, **times)  # type: ignore[arg-type]


def truth(*events: Event, drought: Drought | None = None, parcels: int = 3) -> Truth:
    days = np.repeat(LOOKS, parcels)
    return Truth(
        events=events,
        look_parcel=np.tile(np.arange(parcels), len(LOOKS)),
        look_day=days,
        drought=drought,
    )


def scored(one: Event, *days: int, **told: str | float) -> Tally:
    return score(truth(one), [Alarm(parcel=0, day=day, **told) for day in days])  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("kind", "day", "hit"),
    [
        ("hail", 105, 1),
        ("hail", 110, 1),  # the second look
        ("hail", 115, 0),  # the third
        ("decline", 120, 1),  # the fourth
        ("decline", 125, 0),  # the fifth
    ],
)
def test_an_event_counts_if_opened_at_its_second_or_fourth_look_from_visible(
    kind: str, day: int, hit: int
) -> None:
    tally = scored(event(kind), day)
    by_kind = tally.sudden if kind == "hail" else tally.slow
    assert by_kind == {kind: Share(hits=hit, of=1)}
    assert tally.false_alarms == 0


def test_an_alarm_before_the_onset_is_false_and_detects_nothing() -> None:
    tally = scored(event(), 100)
    assert tally.false_alarms == 1
    assert total(tally.sudden) == Share(hits=0, of=1)


def test_an_early_false_alarm_does_not_spoil_a_later_true_one() -> None:
    tally = scored(event(), 100, 110)
    assert tally.false_alarms == 1
    assert total(tally.sudden) == Share(hits=1, of=1)


def test_an_alarm_between_onset_and_visible_is_true() -> None:
    tally = scored(event("decline", visible=112), 105)
    assert tally.false_alarms == 0
    assert total(tally.slow) == Share(hits=1, of=1)


def test_the_looks_are_counted_from_visible_and_not_from_the_onset() -> None:
    assert total(scored(event(visible=112), 120).sudden) == Share(hits=1, of=1)
    assert total(scored(event(visible=112), 125).sudden) == Share(hits=0, of=1)


def test_an_alarm_behind_the_end_of_its_event_is_false() -> None:
    tally = scored(event(), 200)
    assert tally.false_alarms == 1
    assert total(tally.sudden) == Share(hits=0, of=1)


def test_alarms_of_other_parcels_are_false() -> None:
    tally = score(truth(event()), [Alarm(parcel=1, day=110), Alarm(parcel=2, day=110)])
    assert tally.false_alarms == 2


def test_an_event_that_never_shows_or_is_seen_once_is_not_scored() -> None:
    hidden = event(visible=None, faded=None, over=None)
    once = event(parcel=1, faded=108)
    tally = score(truth(hidden, once), [Alarm(parcel=0, day=110)])
    assert tally.unseen == 2
    assert tally.sudden == {}
    assert tally.false_alarms == 1


def test_parcel_weeks_are_those_with_a_look() -> None:
    # Days 100 to 130 touch weeks 14, 15, 16, 17, 18, and day 200 week 28.
    assert truth(parcels=3).parcel_weeks == 3 * 6
    tally = pooled([Tally(false_alarms=3, parcel_weeks=1000), Tally(parcel_weeks=500)])
    assert tally.false_alarm_rate == 2.0


def test_causes_are_told_by_what_was_and_what_was_named() -> None:
    events = (event("flood"), event("burn", parcel=1))
    alarms = [
        Alarm(parcel=0, day=105, cause="flood"),
        Alarm(parcel=0, day=130, cause="removal"),  # again: the first counts
        Alarm(parcel=1, day=105, cause="flood"),
        Alarm(parcel=2, day=105, cause="burn"),
    ]
    tally = score(truth(*events), alarms)
    assert tally.causes == {
        ("flood", "flood"): 1,
        ("burn", "flood"): 1,
        ("nothing", "burn"): 1,
    }
    assert tally.cause_right == Share(hits=1, of=2)
    assert tally.steady_precision == Share(hits=1, of=2)


def test_chance_is_held_against_what_came_true() -> None:
    alarms = [
        Alarm(parcel=0, day=105, chance=0.05),
        Alarm(parcel=1, day=105, chance=0.08),
        Alarm(parcel=2, day=105, chance=0.6),
    ]
    tally = score(truth(event()), alarms)
    assert tally.sure_and_true == Share(hits=1, of=2)
    assert [(high, share.hits, share.of) for high, share, _ in tally.reliability()] == [
        (0.05, 1, 1),
        (0.1, 0, 1),
        (1.0, 0, 1),
    ]


def test_p_values_count_on_looks_that_nothing_has_befallen_yet() -> None:
    known = truth(event(), parcels=2)
    p = np.full(known.look_day.size, 0.5)
    p[known.look_parcel == 0] = 0.001  # of these only the look before the onset counts
    p[-1] = np.nan
    (nominal,) = score(known, [], p_values=p).nominal
    assert nominal == Share(hits=1, of=1 + len(LOOKS) - 1)


@pytest.mark.parametrize(("day", "hits"), [(159, 0), (160, 1), (200, 1), (201, 0)])
def test_a_drought_is_warned_of_from_its_onset_to_thirty_days_behind_showing(
    day: int, hits: int
) -> None:
    drought = Drought(onset=160, visible=170)
    tally = score(truth(drought=drought), [], notices=[day])
    assert tally.droughts == Share(hits=hits, of=1)
    assert tally.notices == (1,)


def test_a_method_without_notices_or_p_values_is_not_scored_on_them() -> None:
    tally = score(truth(drought=Drought(onset=160, visible=170)), [])
    assert tally.notices == ()
    assert tally.nominal == ()
    assert tally.droughts == Share()


def test_the_interval_is_wilsons() -> None:
    # Newcombe 1998, Statistics in Medicine 17, 857-872: 81 of 263, score method (from memory).
    low, high = Share(hits=81, of=263).interval
    assert (round(low, 4), round(high, 4)) == (0.2553, 0.3662)


def test_seasons_pool_kind_by_kind() -> None:
    both = pooled([scored(event(), 105), scored(event(), 200), scored(event("decline"), 110)])
    assert both.sudden == {"hail": Share(hits=1, of=2)}
    assert both.slow == {"decline": Share(hits=1, of=1)}
    assert both.seasons == 3
