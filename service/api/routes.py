"""What holds for every route: unknown parameters are refused, GET answers carry entity tags."""

import hashlib
from collections.abc import Callable, Coroutine
from typing import Any, Final

from fastapi import APIRouter, Request, Response
from fastapi.dependencies.utils import get_flat_params
from fastapi.params import Query
from fastapi.routing import APIRoute
from starlette.types import Message

from service.api.bodies import JSON_LIMIT_BYTES, stream_to, unsupported_media_type
from service.api.problems import MEDIA_TYPE
from service.errors import Fault, RejectedInput

_JSON: Final = "application/json"
_PROBLEMS: Final[dict[int | str, dict[str, Any]]] = {
    "4XX": {
        "description": "A problem document (RFC 9457): what is wrong, where, and how to mend it.",
        "content": {MEDIA_TYPE: {"schema": {"type": "object"}}},
    }
}


class ContractRoute(APIRoute):
    """A route that keeps the conventions of the contract."""

    def get_route_handler(self) -> Callable[[Request], Coroutine[Any, Any, Response]]:
        """Wrap the handler with what holds for all of them."""
        handle = super().get_route_handler()
        body = self.body_field
        is_optional = body is not None and not body.field_info.is_required()
        params = get_flat_params(self.dependant)
        known = {param.alias for param in params if isinstance(param.field_info, Query)}

        async def handled(request: Request) -> Response:
            refuse_unknown(request, known)
            if body is not None and not (is_optional and _has_no_body(request)):
                request = await _with_json(request)
            response = await handle(request)
            return with_tag(request, response) if request.method == "GET" else response

        return handled


def _has_no_body(request: Request) -> bool:
    """Whether a request says that it brings no body (RFC 9112, 6.3)."""
    length = request.headers.get("Content-Length", "0")
    return length == "0" and "Transfer-Encoding" not in request.headers


async def _with_json(request: Request) -> Request:
    """Return a request whose JSON body has been read, under a cap of our own.

    The framework's cap answers in plain text, and it takes other media types for faulty JSON.
    """
    if request.headers.get("Content-Type", "").partition(";")[0].strip().lower() != _JSON:
        raise unsupported_media_type(_JSON)
    body = bytearray()
    await stream_to(request, body.extend, limit=JSON_LIMIT_BYTES)

    async def read() -> Message:
        return {"type": "http.request", "body": bytes(body), "more_body": False}

    return Request(request.scope, read)


def contract_router(prefix: str, tag: str) -> APIRouter:
    """Return a router of contract routes under ``/v1``."""
    return APIRouter(
        prefix=f"/v1{prefix}", tags=[tag], route_class=ContractRoute, responses=_PROBLEMS
    )


def takes(*media_types: str) -> dict[str, Any]:
    """Return how the OpenAPI document tells of a body that the framework does not parse."""
    return {"requestBody": {"required": True, "content": {name: {} for name in media_types}}}


def refuse_unknown(request: Request, known: set[str]) -> None:
    """Refuse query parameters that a route does not have.

    Raises
    ------
    RejectedInput
        With one fault for each of them.
    """
    unknown = sorted(set(request.query_params) - known)
    if unknown:
        can = f"It takes {', '.join(sorted(known))}." if known else "It takes none."
        raise RejectedInput(
            "invalid-parameter",
            f"This address does not have a parameter that was sent. {can}",
            [Fault(parameter=name[:100], detail=f"Unknown parameter. {can}") for name in unknown],
        )


def tag_of(*parts: object) -> str:
    """Return a strong entity tag for what the parts determine."""
    return f'"{hashlib.sha256(repr(parts).encode()).hexdigest()[:32]}"'


def is_known(request: Request, tag: str) -> bool:
    """Whether the caller has the answer with this tag already (RFC 9110, If-None-Match)."""
    sent = request.headers.get("If-None-Match", "")
    return sent.strip() == "*" or tag in [
        part.strip().removeprefix("W/") for part in sent.split(",")
    ]


def not_modified(tag: str) -> Response:
    """Return the answer for a caller that has it already."""
    return Response(status_code=304, headers={"ETag": tag})


def with_tag(request: Request, response: Response) -> Response:
    """Give an answer its entity tag and caching rules; shorten it to 304 if it is known."""
    if response.status_code == 200 and "ETag" not in response.headers:
        response.headers["ETag"] = tag_of(bytes(response.body), response.media_type)
        if is_known(request, response.headers["ETag"]):
            response = not_modified(response.headers["ETag"])
    response.headers["Cache-Control"] = "private, no-cache"
    response.headers["Vary"] = "Accept, Authorization"
    return response
