"""What holds for every route: unknown parameters are refused, GET answers carry entity tags."""

import hashlib
from collections.abc import Callable, Coroutine
from typing import Any

from fastapi import APIRouter, Request, Response
from fastapi.dependencies.utils import get_flat_params
from fastapi.params import Query
from fastapi.routing import APIRoute

from service.errors import Fault, RejectedInput


class ContractRoute(APIRoute):
    """A route that keeps the conventions of the contract."""

    def get_route_handler(self) -> Callable[[Request], Coroutine[Any, Any, Response]]:
        """Wrap the handler with what holds for all of them."""
        handle = super().get_route_handler()
        params = get_flat_params(self.dependant)
        known = {param.alias for param in params if isinstance(param.field_info, Query)}

        async def handled(request: Request) -> Response:
            refuse_unknown(request, known)
            response = await handle(request)
            return with_tag(request, response) if request.method == "GET" else response

        return handled


def contract_router(prefix: str, tag: str) -> APIRouter:
    """Return a router of contract routes under ``/v1``."""
    return APIRouter(prefix=f"/v1{prefix}", tags=[tag], route_class=ContractRoute)


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
