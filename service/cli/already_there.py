"""Whether the service has a scene's content already, told without sending it."""

from collections.abc import Mapping
from datetime import datetime
from enum import StrEnum
from typing import Any, Final


class Standing(StrEnum):
    """How what would be sent stands to what the service has under the same ref."""

    SAME = "same"
    OTHER = "other"
    UNSURE = "unsure"
    """The files are the same and the metadata seem not to be: the service decides."""


_TO_BE_SENT_AGAIN: Final = ("failed", "withdrawn")
_NOT_COMPARED: Final = ("ref", "replace")


def is_to_be_sent_again(there: Mapping[str, Any]) -> bool:
    """Whether a scene that is there has no figures and none on their way."""
    return there["state"] in _TO_BE_SENT_AGAIN


def standing_of(
    there: Mapping[str, Any], scene: Mapping[str, Any], files: Mapping[str, str] | None
) -> Standing:
    """Compare a scene with what ``GET /v1/scenes/{ref}/content`` answered.

    Parameters
    ----------
    there
        The answer.
    scene
        The ``scene`` part that would be sent.
    files
        SHA-256 by part that would be sent, None if the service is to fetch them: then a
        scene of the same ref and metadata counts as the same.
    """
    kept = {part: file["sha256"] for part, file in there["files"].items()}
    if files is not None and _with_one_name(kept) != _with_one_name(files):
        return Standing.OTHER
    return Standing.SAME if _told(there["scene"]) == _told(scene) else Standing.UNSURE


def _told(scene: Mapping[str, Any]) -> dict[str, Any]:
    """Return the metadata in a form that can be compared."""
    found = {
        name: value
        for name, value in scene.items()
        if value is not None and name not in _NOT_COMPARED
    }
    if isinstance(found.get("acquired_at"), str):
        found["acquired_at"] = _instant(found["acquired_at"])
    if isinstance(found.get("scaling"), Mapping):
        found["scaling"] = _with_one_name(found["scaling"])
    if isinstance(found.get("stack"), list):
        found["stack"] = [_one_name(role, found["stack"]) for role in found["stack"]]
    return found


def _instant(text: str) -> datetime | str:
    try:
        return datetime.fromisoformat(text)
    except ValueError:
        return text


def _with_one_name(by_role: Mapping[str, Any]) -> dict[str, Any]:
    """Call an only near-infrared ``nir``, as the service does with sensors that have one."""
    return {_one_name(role, by_role): value for role, value in by_role.items()}


def _one_name(role: Any, roles: Any) -> Any:
    return "nir" if role == "nir08" and "nir" not in roles else role
