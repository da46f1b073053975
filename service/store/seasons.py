"""Crop seasons: what grew on a parcel from one day to another."""

from collections.abc import Collection, Iterable, Sequence
from dataclasses import dataclass
from datetime import date

from sqlalchemy import select
from sqlalchemy.orm import Session

from service.seasons.axis import SeasonStart, season_holding
from service.store.batches import in_batches
from service.store.tables import CropSeason, Parcel


@dataclass(frozen=True, slots=True, kw_only=True)
class SeasonSent:
    """A crop season as sent, its interval worked out; both days belong to it."""

    parcel: Parcel
    crop: str
    from_on: date
    until_on: date
    sown_on: date | None = None
    harvested_on: date | None = None


def season_start(parcel: Parcel, latitude: float, starts: tuple[str, str]) -> SeasonStart:
    """Return when the crop year of a parcel begins: its holding's start, or the hemisphere's.

    `starts` are those north and south of the equator.
    """
    north, south = starts
    own = parcel.holding.season_start if parcel.holding else None
    return SeasonStart.parse(own or (north if latitude >= 0 else south))


def season_of_day(
    parcel: Parcel, crop: str, day: date, latitude: float, starts: tuple[str, str]
) -> SeasonSent:
    """Return the crop year that holds a day, as a season of a crop."""
    first, last = season_holding(day, season_start(parcel, latitude, starts))
    return SeasonSent(parcel=parcel, crop=crop, from_on=first, until_on=last)


def seasons_of(session: Session, parcel_ids: Iterable[int]) -> dict[int, list[CropSeason]]:
    """Return the crop seasons by parcel, in order of time."""
    found: dict[int, list[CropSeason]] = {}
    for some in in_batches(parcel_ids):
        query = select(CropSeason).where(CropSeason.parcel_id.in_(some))
        for row in session.scalars(query.order_by(CropSeason.from_on)):
            found.setdefault(row.parcel_id, []).append(row)
    return found


def crop_on(seasons: Sequence[CropSeason], day: date) -> str | None:
    """Return the crop of the season that holds a day; outside all of them None."""
    return next((s.crop for s in seasons if s.from_on <= day <= s.until_on), None)


def overlapping(sent: SeasonSent, seasons: Collection[CropSeason]) -> CropSeason | None:
    """Return a season that shares days with the one sent; the very same interval is none."""
    return next(
        (
            s
            for s in seasons
            if s.from_on <= sent.until_on
            and sent.from_on <= s.until_on
            and (s.from_on, s.until_on) != (sent.from_on, sent.until_on)
        ),
        None,
    )


def put_season(session: Session, sent: SeasonSent, seasons: list[CropSeason]) -> str:
    """Add a season, or correct the one with the same interval.

    `seasons` are the parcel's, and are kept true. Returns ``created``, ``updated`` or
    ``unchanged``.
    """
    same = next(
        (s for s in seasons if (s.from_on, s.until_on) == (sent.from_on, sent.until_on)), None
    )
    if same is None:
        row = CropSeason(
            parcel_id=sent.parcel.id,
            crop=sent.crop,
            from_on=sent.from_on,
            until_on=sent.until_on,
            sown_on=sent.sown_on,
            harvested_on=sent.harvested_on,
        )
        session.add(row)
        seasons.append(row)
        sent.parcel.revision += 1
        return "created"
    told = (sent.crop, sent.sown_on, sent.harvested_on)
    if (same.crop, same.sown_on, same.harvested_on) == told:
        return "unchanged"
    same.crop, same.sown_on, same.harvested_on = told
    sent.parcel.revision += 1
    return "updated"


def put_crop_of_day(
    session: Session, sent: SeasonSent, seasons: list[CropSeason], day: date
) -> bool:
    """Name the crop of the season that holds a day, adding the one sent if there is none.

    A season added this way ends where its neighbours begin. Returns whether anything changed.
    """
    held = next((s for s in seasons if s.from_on <= day <= s.until_on), None)
    if held is None:
        return put_season(session, _between(sent, seasons, day), seasons) != "unchanged"
    if held.crop == sent.crop:
        return False
    held.crop = sent.crop
    sent.parcel.revision += 1
    return True


def _between(sent: SeasonSent, seasons: Sequence[CropSeason], day: date) -> SeasonSent:
    before = [s.until_on for s in seasons if s.until_on < day]
    after = [s.from_on for s in seasons if s.from_on > day]
    return SeasonSent(
        parcel=sent.parcel,
        crop=sent.crop,
        from_on=max([sent.from_on, *(end + date.resolution for end in before)]),
        until_on=min([sent.until_on, *(start - date.resolution for start in after)]),
    )
