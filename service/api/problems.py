"""Problem documents (RFC 9457): from kinds of error to HTTP, and the pages that explain them."""

import html
from collections.abc import Mapping, Sequence
from http import HTTPStatus
from typing import Any, Final

import structlog
from fastapi import APIRouter, FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import HTMLResponse, JSONResponse, Response
from starlette.exceptions import HTTPException

from service.api.problem_kinds import KINDS
from service.errors import (
    MAX_ERRORS,
    Conflict,
    FurrowlightError,
    NotAllowed,
    NotFound,
    RejectedInput,
    Unavailable,
    pointer_of,
)

MEDIA_TYPE: Final = "application/problem+json"
_log = structlog.get_logger()

_STATUS_BY_KIND: Final[Mapping[type[FurrowlightError], int]] = {
    RejectedInput: 422,
    NotAllowed: 403,
    NotFound: 404,
    Conflict: 409,
    Unavailable: 503,
}

router = APIRouter(include_in_schema=False)


@router.get("/problems/{code}")
def explain_problem(code: str) -> HTMLResponse:
    """Answer the page that a problem's `type` points to."""
    kind = KINDS.get(code)
    if kind is None:
        raise NotFound("not-found", "No problem has this name.")
    title, page = html.escape(kind.title), html.escape(kind.page)
    return HTMLResponse(
        f'<!doctype html><html lang="en"><meta charset="utf-8"><title>{title}</title>'
        f"<h1>{title}</h1><p>{page}</p></html>"
    )


def problem_document(
    code: str,
    detail: str,
    *,
    status: int,
    instance: str,
    errors: Sequence[Mapping[str, str]] = (),
) -> dict[str, Any]:
    """Return the members of a problem document."""
    document: dict[str, Any] = {
        "type": f"/problems/{code}",
        "title": KINDS[code].title,
        "status": status,
        "detail": detail,
        "instance": instance,
    }
    if errors:
        document["errors"] = list(errors[:MAX_ERRORS])
        document["errors_total"] = len(errors)
    return document


def status_of(code: str, kind: type[FurrowlightError]) -> int:
    """Return the HTTP status of an error."""
    return KINDS[code].status or _STATUS_BY_KIND[kind]


def answer_of(error: FurrowlightError, *, instance: str) -> Response:
    """Return the answer that tells of an error."""
    status = status_of(error.code, type(error))
    document = problem_document(
        error.code,
        error.detail,
        status=status,
        instance=instance,
        errors=[fault.as_dict() for fault in error.faults],
    )
    headers = {}
    if status == HTTPStatus.UNAUTHORIZED:
        headers["WWW-Authenticate"] = "Bearer"
    if isinstance(error, Unavailable):
        headers["Retry-After"] = str(error.retry_after_seconds)
    return JSONResponse(document, status, headers, media_type=MEDIA_TYPE)


def answer_problems(app: FastAPI) -> None:
    """Make every error of the application a problem document."""
    app.add_exception_handler(FurrowlightError, _furrowlight)
    app.add_exception_handler(RequestValidationError, _validation)
    app.add_exception_handler(HTTPException, _http)
    app.add_exception_handler(Exception, _bug)
    app.include_router(router)


def _furrowlight(request: Request, error: Exception) -> Response:
    assert isinstance(error, FurrowlightError)  # noqa: S101 - registered for it
    return answer_of(error, instance=request.url.path)


def _validation(request: Request, error: Exception) -> Response:
    assert isinstance(error, RequestValidationError)  # noqa: S101 - registered for it
    found = [_fault(entry) for entry in error.errors()]
    if any(entry["type"] == "json_invalid" for entry in error.errors()):
        return _plain(request, "malformed-json", "The body is not valid JSON.", 400)
    in_query = all("parameter" in fault for fault in found)
    code = "invalid-parameter" if in_query else "invalid-input"
    document = problem_document(
        code,
        found[0]["detail"] if len(found) == 1 else f"{len(found)} things are wrong; see `errors`.",
        status=422,
        instance=request.url.path,
        errors=found,
    )
    return JSONResponse(document, 422, media_type=MEDIA_TYPE)


def _fault(entry: Mapping[str, Any]) -> dict[str, str]:
    """Turn one validation error into a fault, without what was sent."""
    place, *rest = entry["loc"]
    detail = str(entry["msg"]).removeprefix("Value error, ")
    if place in ("query", "header", "path"):
        return {"parameter": str(rest[0]), "detail": detail}
    return {"pointer": pointer_of(rest), "detail": detail}


_CODES_BY_STATUS: Final = {
    404: ("not-found", "There is nothing at this address; /openapi.json lists what there is."),
    405: ("method-not-allowed", "This address does not take this method."),
    413: ("body-too-large", "The body is over the limit of this address."),
    415: ("unsupported-media-type", "This address does not take bodies of this Content-Type."),
}


def _http(request: Request, error: Exception) -> Response:
    assert isinstance(error, HTTPException)  # noqa: S101 - registered for it
    code, detail = _CODES_BY_STATUS.get(
        error.status_code, ("malformed-body", "The body could not be read.")
    )
    answer = _plain(request, code, detail, error.status_code)
    answer.headers.update(error.headers or {})
    return answer


def _bug(request: Request, error: Exception) -> Response:
    # No access to the trace for the caller: the request id leads the operator to it.
    _log.error("request failed", path=request.url.path, exc_info=error)
    answer = _plain(
        request,
        "internal-error",
        f"The service failed; its log tells more under request {request.state.request_id}.",
        500,
    )
    # The server drops the connection after a fault; a client that used it again would see a reset.
    answer.headers["Connection"] = "close"
    return answer


def _plain(request: Request, code: str, detail: str, status: int) -> Response:
    document = problem_document(code, detail, status=status, instance=request.url.path)
    return JSONResponse(document, status, media_type=MEDIA_TYPE)
