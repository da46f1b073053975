"""What else is known while a pass is watched, and what of it explains a departure."""

from dataclasses import dataclass, field

from service.alerts.alert import Alert
from service.alerts.chance import Odds
from service.alerts.diary import EXPLAINED, Diary
from service.alerts.notices import Region


@dataclass(frozen=True, slots=True, kw_only=True)
class Explained:
    """That a parcel departed and no alert was opened, because something explains it.

    `alert_id` is the identity that the alert would have had.
    """

    alert_id: str
    rule: str
    parcel: str
    at: str
    cause: str
    because: str
    lasts: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Known:
    """The diary of the parcels, the state of their region, and the odds of the past."""

    diary: Diary = field(default_factory=Diary)
    region: Region = field(default_factory=Region)
    odds: Odds = field(default_factory=Odds)

    def explain(self, alert: Alert, *, cohort: str, threshold: float) -> Explained | None:
        """Return why an alert need not be opened, None if it must be.

        `cohort` is the crop, or the group of crops, that its parcel was compared with.
        """
        first, last = alert.first_departure_at.date(), alert.opened_at.date()
        entry = self.diary.explanation(alert.parcel, alert.cause.kind, first, last)
        if entry is not None:
            because, lasts = f"diary: {entry.said}", EXPLAINED[entry.kind].lasts
        elif self.region.explains(
            cause=alert.cause.kind, crop=cohort, thresholds_away=alert.strength / threshold
        ):
            because, lasts = f"regional notice {self.region.open_id}", False
        else:
            return None
        return Explained(
            alert_id=alert.id,
            rule=alert.rule,
            parcel=alert.parcel,
            at=alert.opened_at.isoformat(),
            cause=alert.cause.kind,
            because=because,
            lasts=lasts,
        )

    def beside(self, alert: Alert) -> tuple[str, ...]:
        """Return what the diary says for the time of an alert."""
        first, last = alert.first_departure_at.date(), alert.last_observed_at.date()
        return tuple(entry.said for entry in self.diary.around(alert.parcel, first, last))
