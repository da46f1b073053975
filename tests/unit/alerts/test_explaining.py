"""What the diary and regional notices explain: alerts held back, or told beside."""

from datetime import date, timedelta

import pytest

from service.alerts.alert import Change
from service.alerts.causes import CAUSES, UNDETERMINED
from service.alerts.diary import EXPLAINED, Diary, DiaryEntry, DiaryKind
from service.alerts.explained import Explained, Known
from service.alerts.notices import Notice, NoticeState, Region
from service.alerts.persistence import watch_pass
from service.alerts.watch import Watch
from tests.scored_looks import FIRST, RULE, on, scored

CUT = {"ndvi": -0.5, "ndmi": -0.4, "nbr": -0.5, "nir": -0.15, "swir16": 0.1}
FLOODED = {"ndvi": -0.3, "ndmi": 0.2, "nbr": 0.1, "ndwi": 0.4, "nir": -0.2, "swir16": -0.18}
DRY = {"ndvi": -0.05, "ndmi": -0.2, "nir": -0.02, "swir16": 0.08}


def day(number: int) -> date:
    return on(number).date()


def entry(kind: str, first: int, last: int | None = None, parcel: str = "A") -> DiaryEntry:
    return DiaryEntry(
        kind=DiaryKind(kind),
        parcel=parcel,
        first=day(first),
        last=day(first if last is None else last),
    )


def told(
    looks: list[tuple[float, dict[str, float]]], known: Known, *, first_day: int = 0
) -> tuple[Watch, list[Change], list[Explained]]:
    """Return memory, changes and what was explained after looks of parcel A every five days."""
    watch, changes, explained = Watch.nothing(RULE), [], []
    for at, (score, shortfalls) in enumerate(looks):
        one = scored(first_day + 5 * at, {"A": score}, shortfalls=shortfalls)
        after = watch_pass(watch, one, RULE, known)
        watch = after.watch
        changes += after.changes
        explained += after.explained
    return watch, changes, explained


CALM = (0.5, {"ndvi": -0.01})
CUTS = [CALM, CALM, (5.0, CUT), (5.0, CUT)]


def with_diary(*entries: DiaryEntry) -> Known:
    return Known(diary=Diary(entries))


def test_a_harvest_explains_that_the_cover_is_gone() -> None:
    watch, changes, (held,) = told(CUTS, with_diary(entry("harvest", 9)))
    assert changes == []
    assert (held.parcel, held.cause, held.because) == ("A", "removal", f"diary: harvest {day(9)}")
    assert held.at == on(15).isoformat()
    assert watch.strengths == ()


def test_without_an_entry_or_with_one_of_another_parcel_the_alert_opens() -> None:
    for known in (Known(), with_diary(entry("harvest", 9, parcel="B"))):
        _, (change,), explained = told(CUTS, known)
        assert (change.alert.cause.kind, change.alert.diary, explained) == ("removal", (), [])


def test_an_entry_that_does_not_fit_the_cause_is_told_beside_the_alert() -> None:
    _, (change,), explained = told(CUTS, with_diary(entry("irrigation", 8, 12)))
    assert explained == []
    assert change.alert.diary == (f"irrigation {day(8)} to {day(12)}",)


def test_a_later_entry_is_told_beside_an_open_alert() -> None:
    watch, changes, _ = told([*CUTS, (5.0, CUT)], with_diary(entry("ploughing", 20)))
    assert [change.kind.value for change in changes] == ["opened"]
    assert changes[0].alert.diary == ()
    assert watch.open["A"].diary == (f"ploughing {day(20)}",)


@pytest.mark.parametrize(("first", "opens"), [(13, False), (14, True), (-10, False), (-11, True)])
def test_an_entry_explains_from_a_little_before_to_its_reach(first: int, *, opens: bool) -> None:
    # The first departing look is on day 10; a harvest is seen for 20 days.
    assert EXPLAINED[DiaryKind.HARVEST].days_after == 20
    _, changes, explained = told(CUTS, with_diary(entry("harvest", first)))
    assert (len(changes), len(explained)) == ((1, 0) if opens else (0, 1))


def test_what_lasts_keeps_the_parcel_quiet_until_it_has_returned() -> None:
    long = [(5.0, CUT)] * 8
    watch, changes, explained = told([*CUTS, *long], with_diary(entry("harvest", 9)))
    assert (changes, len(explained)) == ([], 1)
    assert watch.quiet[watch.places["A"]]
    back = [CALM, CALM, (5.0, FLOODED), (5.0, FLOODED)]
    _, changes, _ = told([*CUTS, *long, *back], with_diary(entry("harvest", 9)))
    assert [change.alert.cause.kind for change in changes] == ["flood"]


def test_what_does_not_last_explains_no_longer_than_its_days() -> None:
    known = with_diary(entry("irrigation", 9))
    wet = [CALM, CALM, (5.0, FLOODED), (5.0, FLOODED)]
    watch, changes, explained = told(wet, known)
    assert (changes, len(explained), watch.held) == ([], 1, frozenset({"A"}))
    assert not watch.quiet[watch.places["A"]]
    # Its looks leave the window one by one; the first of those in it is then too late.
    _, changes, explained = told([*wet, *[(5.0, FLOODED)] * 4], known)
    assert [change.alert.cause.kind for change in changes] == ["flood"]
    assert len(explained) == 1


def test_every_kind_explains_causes_that_there_are() -> None:
    kinds = {cause.kind for cause in CAUSES} | {UNDETERMINED.kind}
    assert set(EXPLAINED) == set(DiaryKind)
    for explains in EXPLAINED.values():
        assert explains.causes
        assert explains.causes <= kinds
    assert EXPLAINED[DiaryKind.OTHER].causes == kinds


def test_the_order_of_entries_does_not_matter() -> None:
    entries = [entry("mowing", 8), entry("harvest", 9), entry("harvest", 6, 9)]
    found = {told(CUTS, with_diary(*some))[2][0] for some in (entries, entries[::-1])}
    assert len(found) == 1


def dry_region(*crops: str) -> Region:
    notice = Notice(
        id="ntc_1",
        kind="dry_spell",
        state=NoticeState.OPEN,
        opened_at=FIRST - timedelta(days=10),
        closed_at=None,
        measure="ndmi",
        shift=-0.07,
        crops=crops,
    )
    return Region(name="10-01", notice=notice)


def dry(score: float) -> list[tuple[float, dict[str, float]]]:
    return [CALM, CALM, (score, DRY), (score, DRY)]


def test_a_notice_explains_dryness_of_the_crops_that_it_names() -> None:
    _, changes, (held,) = told(dry(4.0), Known(region=dry_region("barley")))
    assert changes == []
    assert (held.cause, held.because) == ("moisture_stress", "regional notice ntc_1")
    for known in (Known(), Known(region=dry_region("maize")), Known(region=Region())):
        _, changes, explained = told(dry(4.0), known)
        assert (len(changes), explained) == (1, [])


def test_a_parcel_far_drier_than_its_own_crop_is_an_alert_of_its_own() -> None:
    assert len(told(dry(5.9), Known(region=dry_region("barley")))[1]) == 0
    assert len(told(dry(6.1), Known(region=dry_region("barley")))[1]) == 1


def test_a_notice_explains_nothing_but_dryness() -> None:
    assert len(told(CUTS, Known(region=dry_region("barley")))[1]) == 1


def test_when_a_notice_has_closed_a_parcel_that_still_departs_is_an_alert() -> None:
    watch, _, _ = told(dry(4.0), Known(region=dry_region("barley")))
    after = watch_pass(watch, scored(20, {"A": 4.0}, shortfalls=DRY), RULE, Known())
    assert [change.kind.value for change in after.changes] == ["opened"]
