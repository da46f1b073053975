"""A folder of named rasters with a manifest of our own, ``scene.json``.

The manifest has the members of the ``scene`` part of ``POST /v1/scenes`` and, as ``files``, the
name of the file of each part. Without ``files`` a file is of the part that it is named for:
``red.tif``, ``quality.jp2``.
"""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Final

from service.products.places import Span, file_inside, incomplete, invalid, read_limited
from service.products.product import Found, Product
from service.spectral.gathered import QUALITY, SATURATION
from service.spectral.roles import BandRole

KIND: Final = "folder with scene.json"
MANIFEST: Final = "scene.json"
_STACK: Final = "stack"
_PARTS: Final = (*(role.value for role in BandRole), QUALITY, SATURATION, _STACK)
_SUFFIXES: Final = (".tif", ".tiff", ".jp2")
_MANIFEST_LIMIT: Final = 2 * 2**20


def has_manifest(folder: Path) -> bool:
    """Whether a folder has a manifest."""
    return (folder / MANIFEST).exists()


def read_folder(folder: Path) -> Product[Span]:
    """Return what a manifest says of a folder; the service checks its members.

    Raises
    ------
    RejectedInput
        The manifest is no JSON object with at least a ref and a time, names a file that is
        not in the folder, or a part that there isn't.
    """
    scene = _manifest(folder)
    if "replace" in scene:
        raise invalid(
            "`replace` is no member of a scene.json, since it would replace again at every run; "
            "say `--replace` when you mean it."
        )
    named = scene.pop("files", None)
    by = "manifest" if named is not None else "file name"
    files = _named(named) if named is not None else _by_name(folder)
    paths = {part: file_inside(folder, name) for part, name in files.items()}
    missing = [part for part, path in paths.items() if path is None]
    if missing or not files:
        of = f" of {', '.join(missing)}" if missing else ""
        raise incomplete(
            f"The folder lacks the files{of} that scene.json goes with, or they are empty."
        )
    return Product(
        kind=KIND,
        scene=scene,
        files={part: Span.whole(path) for part, path in paths.items() if path is not None},
        found=tuple(Found(part=part, source=name, by=by) for part, name in files.items()),
        left_out={},
    )


def _manifest(folder: Path) -> dict[str, Any]:
    path = file_inside(folder, MANIFEST)
    if path is None:
        raise incomplete("The folder's scene.json is empty.")
    content = read_limited(Span.whole(path), limit=_MANIFEST_LIMIT, what=MANIFEST)
    try:
        value = json.loads(content)
    except (ValueError, RecursionError):
        raise incomplete("scene.json is not valid JSON, or ends early.") from None
    if not isinstance(value, dict) or not all(
        isinstance(value.get(member), str) for member in ("ref", "acquired_at")
    ):
        raise invalid(
            "scene.json is an object with the members of the scene part, at least `ref`, `sensor` "
            "and `acquired_at` as texts, and `files` with the name of the file of each band role."
        )
    return value


def _named(files: Any) -> Mapping[str, str]:
    if not isinstance(files, dict) or not all(isinstance(name, str) for name in files.values()):
        raise invalid(
            "`files` in scene.json is an object: band role, `quality`, `saturation` or `stack`, "
            "and the name of its file."
        )
    if not files.keys() <= set(_PARTS):
        raise invalid(f"`files` in scene.json names a part that there isn't: {', '.join(_PARTS)}.")
    return files


def _by_name(folder: Path) -> Mapping[str, str]:
    found: dict[str, str] = {}
    for path in sorted(folder.iterdir()):
        if path.stem not in _PARTS or path.suffix.lower() not in _SUFFIXES:
            continue
        if path.stem in found:
            raise invalid(
                "Two files are named for the same part. Say in `files` of scene.json which to send."
            )
        found[path.stem] = path.name
    return found
