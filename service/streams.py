"""JSON read item by item, whoever sent it: never whole in memory, never nested without end."""

import json
from collections.abc import Iterator
from typing import IO, Any, Final

import ijson

from service.errors import RejectedInput

BULK_LIMIT_ROWS: Final = 100_000
MAX_DEPTH: Final = 32


def json_items(file: IO[bytes], prefix: str) -> Iterator[Any]:
    """Yield the items of a JSON array, one in memory at a time.

    Raises
    ------
    RejectedInput
        The body is not JSON, or has more items than a call may bring.
    """
    for _ in _flat_events(file):
        pass
    file.seek(0)
    try:
        for number, item in enumerate(ijson.items(file, prefix, use_float=True)):
            if number >= BULK_LIMIT_ROWS:
                raise too_many()
            yield item
    except (ijson.JSONError, UnicodeDecodeError, ValueError, OverflowError) as error:
        raise RejectedInput("malformed-json", "The body is not valid JSON.") from error


def json_document(file: IO[bytes]) -> Any:
    """Return a short JSON document whole; the caller has bounded its length.

    Raises
    ------
    RejectedInput
        It is not JSON, is nested deeply, or holds numbers that nothing here could mean.
    """
    for _ in _flat_events(file):
        pass
    file.seek(0)
    try:
        return json.load(file)
    except ValueError as error:
        raise RejectedInput("malformed-json", "The body is not valid JSON.") from error


def json_array(file: IO[bytes]) -> Iterator[Any]:
    """Yield the items of a body that must be a JSON array.

    Raises
    ------
    RejectedInput
        The body is not JSON, is no array, or has more items than a call may bring.
    """
    _, first, _ = next(_flat_events(file))
    if first != "start_array":
        raise RejectedInput.at("", "The body must be a JSON array of objects.")
    file.seek(0)
    yield from json_items(file, "item")


def json_members(file: IO[bytes], *, but: str) -> dict[str, Any]:
    """Return the plain members of a JSON object, without reading one member's array into memory.

    Of that member only the kind of its value is told: ``start_array``, ``number`` …
    """
    found: dict[str, Any] = {}
    name = None
    for depth, kind, value in _flat_events(file):
        if depth == 0 and kind not in ("start_map", "end_map"):
            raise RejectedInput.at("", "The body must be a JSON object.")
        if depth == 1 and kind == "map_key":
            name = value
            found[name] = None
        elif depth == 1 and name is not None and not kind.startswith("end"):
            found[name] = kind if name == but else value
    file.seek(0)
    return found


def json_length(file: IO[bytes], member: str) -> int:
    """Return how many objects there are in the array that is a member of a JSON object."""
    count, name = 0, None
    for depth, kind, value in _flat_events(file):
        if depth == 1 and kind == "map_key":
            name = value
        count += depth == 2 and kind == "start_map" and name == member
    file.seek(0)
    return count


def _flat_events(file: IO[bytes]) -> Iterator[tuple[int, str, Any]]:
    """Yield a JSON body's events, each with the depth it stands at.

    Paths to what is nested take time and memory by the square of the depth (a body of 100 kB
    held a process up for minutes), so a body that is nested deeply is refused before they are
    made.
    """
    depth = 0
    try:
        for kind, value in ijson.basic_parse(file, use_float=True):
            depth -= kind in ("end_map", "end_array")
            yield depth, kind, value
            depth += kind in ("start_map", "start_array")
            if depth > MAX_DEPTH:
                raise RejectedInput.at("", f"JSON is taken up to {MAX_DEPTH} levels deep.")
    except (ijson.JSONError, UnicodeDecodeError, ValueError, OverflowError) as error:
        raise RejectedInput("malformed-json", "The body is not valid JSON.") from error


def too_many() -> RejectedInput:
    """Return the error for more items than a call may bring."""
    return too_many_in("")


def too_many_in(pointer: str) -> RejectedInput:
    """Return the error for a part with more items than a call may bring."""
    return RejectedInput.at(
        pointer, f"A call takes up to {BULK_LIMIT_ROWS:,} items. Send them in several calls."
    )
