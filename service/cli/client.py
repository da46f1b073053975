"""What the client commands share: calls of the HTTP API, and its problems as our errors."""

import math
import os
from collections.abc import Mapping
from http import HTTPStatus
from pathlib import Path
from typing import Any, Final

import httpx

from service.clock import now
from service.errors import (
    Conflict,
    Fault,
    FurrowlightError,
    NotAllowed,
    NotFound,
    RejectedInput,
    Unavailable,
)
from service.webhooks.retries import retry_after

CALL_SECONDS: Final = 60.0

_KINDS: Final[Mapping[int, type[FurrowlightError]]] = {
    HTTPStatus.UNAUTHORIZED: NotAllowed,
    HTTPStatus.FORBIDDEN: NotAllowed,
    HTTPStatus.NOT_FOUND: NotFound,
    HTTPStatus.CONFLICT: Conflict,
    HTTPStatus.PRECONDITION_FAILED: Conflict,
    HTTPStatus.TOO_MANY_REQUESTS: Unavailable,
    # The two beside it are a proxy's, before a service that is starting or gone.
    HTTPStatus.BAD_GATEWAY: Unavailable,
    HTTPStatus.SERVICE_UNAVAILABLE: Unavailable,
    HTTPStatus.GATEWAY_TIMEOUT: Unavailable,
}


def connect(address: str, *, key: str) -> httpx.Client:
    """Return a client of the service at an address; no proxy of the environment is used."""
    return httpx.Client(
        base_url=address,
        headers={"Authorization": f"Bearer {key}"},
        timeout=CALL_SECONDS,
        trust_env=False,
    )


def connect_from_environment() -> httpx.Client:
    """Return a client of the service that FURROWLIGHT_URL and FURROWLIGHT_KEY_FILE name.

    Raises
    ------
    RejectedInput
        One of them is not set, or the file can't be read.
    """
    address, key_file = os.environ.get("FURROWLIGHT_URL"), os.environ.get("FURROWLIGHT_KEY_FILE")
    if not address or not key_file:
        raise RejectedInput(
            "no-connection",
            "Set FURROWLIGHT_URL to the service's address and FURROWLIGHT_KEY_FILE to a file "
            "with the key in it.",
        )
    try:
        key = Path(key_file).read_text(encoding="utf-8").strip()
    except OSError as error:
        raise RejectedInput(
            "no-connection", f"The key file can't be read: {error.strerror}."
        ) from error
    return connect(address, key=key)


def call(client: httpx.Client, method: str, path: str, **request: Any) -> dict[str, Any]:
    """Send one request and return the JSON object of its answer.

    Raises
    ------
    FurrowlightError
        The service answered with a problem, or could not be reached (`Unavailable`).
    """
    answer: dict[str, Any] = answer_of(client, method, path, **request).json()
    return answer


def answer_of(client: httpx.Client, method: str, path: str, **request: Any) -> httpx.Response:
    """Send one request and return its answer.

    Raises
    ------
    FurrowlightError
        As for `call`. An `Unavailable` says how many seconds the service asked to wait, 0 if
        it did not.
    """
    try:
        response = client.request(method, path, **request)
    except httpx.TransportError as error:
        raise Unavailable(
            "unreachable",
            "The service can't be reached. Is it running, and is the address right?",
            retry_after_seconds=0,
        ) from error
    if response.is_error:
        raise _error_of(response)
    return response


def _error_of(response: httpx.Response) -> Exception:
    """Return the error that a problem document stands for."""
    if response.status_code >= HTTPStatus.INTERNAL_SERVER_ERROR and (
        response.status_code not in _KINDS
    ):
        return RuntimeError(f"the service failed with status {response.status_code}")
    kind = _KINDS.get(response.status_code, RejectedInput)
    is_problem = "problem+json" in response.headers.get("Content-Type", "")
    problem = response.json() if is_problem else {}
    error = error_of(problem, kind, otherwise=f"The service said {response.status_code}.")
    if isinstance(error, Unavailable):
        asked = retry_after(response.headers.get("Retry-After"), now=now())
        error.retry_after_seconds = math.ceil(asked.total_seconds()) if asked else 0
    return error


def error_of(
    problem: Mapping[str, Any], kind: type[FurrowlightError], *, otherwise: str
) -> FurrowlightError:
    """Return the error of a kind that a problem document tells of, with its faults."""
    code = str(problem.get("type", "")).rsplit("/", 1)[-1] or "problem"
    error = kind(code, str(problem.get("detail") or otherwise))
    error.faults = tuple(Fault(**fault) for fault in problem.get("errors", ()))
    return error
