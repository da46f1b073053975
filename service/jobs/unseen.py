"""Telling of parcels that nobody has seen for a while, though passes came."""

from datetime import datetime, timedelta

from sqlalchemy.orm import Session

from service.jobs.announce import announce_unseen
from service.settings import Settings
from service.store.looks import observations_of_scene
from service.store.reports import parcel_in_scene
from service.store.tables import Parcel, Scene
from service.store.unseen import first_passes, last_looks, note_spell, unseen_passes


def tell_of_unseen(session: Session, settings: Settings, scene: Scene, *, at: datetime) -> None:
    """Tell of the parcels that a scene did not show either, once a spell.

    A spell begins with the last look, or with the first pass where there never was one. It is
    told of by the first pass without a look after so many days.
    """
    hidden = [
        row.parcel_id
        for row in observations_of_scene(session, scene.id)
        if not parcel_in_scene(row).is_look
    ]
    if not hidden:
        return
    seen = last_looks(session, hidden)
    first = first_passes(session, [parcel for parcel in hidden if parcel not in seen])
    begun = {parcel: seen.get(parcel, first.get(parcel, scene.acquired_at)) for parcel in hidden}
    long_ago = scene.acquired_at - timedelta(days=settings.unseen_days)
    told_now = {
        parcel: since
        for parcel, since in begun.items()
        if since <= long_ago and note_spell(session, parcel, seen.get(parcel), at=at)
    }
    for parcel, unseen in unseen_passes(session, told_now, until=scene.acquired_at).items():
        announce_unseen(session, settings, session.get_one(Parcel, parcel), unseen, at=at)
