"""Keyset paging: opaque cursors, and the link to the next page (RFC 8288)."""

import base64
import binascii
import json
from typing import Annotated, Any, Final

from fastapi import Query, Request, Response

from service.errors import RejectedInput

Limit = Annotated[int, Query(ge=1, le=1000, description="Items a page.")]
Cursor = Annotated[
    str | None, Query(max_length=500, description="Opaque place, from a page's next link.")
]

_MAX_ID: Final = 2**63 - 1
"""Largest id that every database takes."""


def place_in(cursor: str | None, *types: type) -> list[Any] | None:
    """Return the values that a cursor stands for, None without one.

    Raises
    ------
    RejectedInput
        It is none of ours.
    """
    if cursor is None:
        return None
    try:
        values = json.loads(base64.urlsafe_b64decode(cursor.encode() + b"=="))
    except (binascii.Error, ValueError):
        values = None
    if not isinstance(values, list) or [type(value) for value in values] != list(types):
        raise foreign_cursor()
    if any(isinstance(value, int) and not 0 <= value <= _MAX_ID for value in values):
        raise foreign_cursor()
    return values


def foreign_cursor() -> RejectedInput:
    """Return the error for a cursor that no page of the list gave out."""
    return RejectedInput.parameter(
        "cursor", "This is no cursor of this list; follow the next link of a page."
    )


def link_next(request: Request, response: Response, *place: Any) -> None:
    """Link the answer to the page that begins after a place."""
    packed = base64.urlsafe_b64encode(json.dumps(place).encode()).decode().rstrip("=")
    url = request.url.include_query_params(cursor=packed)
    response.headers["Link"] = f'<{url.path}?{url.query}>; rel="next"'
