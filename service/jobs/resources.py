"""What jobs work with. The queue engine is one to a process, and so is this."""

from collections import OrderedDict
from dataclasses import dataclass, field
from typing import Final

from service.assess import Prepared
from service.settings import Settings
from service.store.sessions import Sessions
from service.tiles.archive import Archive
from service.tiles.plans import Plans

BASELINES_HELD: Final = 2
"""Baselines of ten thousand parcels take tens of megabytes."""


class HeldBaselines:
    """The baselines that were used last, by number, so that a scene need not unpack them."""

    def __init__(self) -> None:
        self._held: OrderedDict[int, Prepared] = OrderedDict()

    def find(self, number: int) -> Prepared | None:
        """Return baselines that are held, None if they are not."""
        if number in self._held:
            self._held.move_to_end(number)
        return self._held.get(number)

    def hold(self, number: int, prepared: Prepared) -> None:
        """Hold baselines, and let go of those that were not used for longest."""
        self._held[number] = prepared
        self._held.move_to_end(number)
        while len(self._held) > BASELINES_HELD:
            self._held.popitem(last=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Resources:
    """Sessions, archive, plans and settings of the running service, and what judging holds."""

    settings: Settings
    sessions: Sessions
    archive: Archive
    plans: Plans
    baselines: HeldBaselines = field(default_factory=HeldBaselines)


_lent: list[Resources] = []


def lend(resources: Resources | None) -> None:
    """Give the jobs of this process what they work with, or take it back."""
    _lent[:] = [resources] if resources is not None else []


def resources() -> Resources:
    """Return what was lent.

    Raises
    ------
    LookupError
        The worker has not been started.
    """
    if not _lent:
        raise LookupError("jobs run only after the worker was started")
    return _lent[0]
