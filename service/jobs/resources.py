"""What jobs work with. The queue engine is one to a process, and so is this."""

from dataclasses import dataclass

from service.settings import Settings
from service.store.sessions import Sessions
from service.tiles.archive import Archive
from service.tiles.plans import Plans


@dataclass(frozen=True, slots=True, kw_only=True)
class Resources:
    """Sessions, archive, plans and settings of the running service."""

    settings: Settings
    sessions: Sessions
    archive: Archive
    plans: Plans


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
