"""Problem documents (RFC 9457): the one table from kinds of error to HTTP, and its pages."""

import html
from collections.abc import Mapping, Sequence
from http import HTTPStatus
from typing import Any, Final

import structlog
from fastapi import APIRouter, FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import HTMLResponse, JSONResponse, Response
from starlette.exceptions import HTTPException

from service.api.problem_kinds import ITEM_KINDS, Kind
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


KINDS: Final[Mapping[str, Kind]] = {
    "malformed-json": Kind(
        title="Malformed JSON", status=400, page="The body is not JSON. Nothing was kept."
    ),
    "malformed-body": Kind(
        title="Malformed body",
        status=400,
        page="The body is not what its Content-Type says, or ended early. Nothing was kept.",
    ),
    "digest-mismatch": Kind(
        title="Content digest mismatch",
        status=400,
        page="The body does not have the Content-Digest that was sent with it (RFC 9530): it was "
        "damaged on its way. Send it again.",
    ),
    "invalid-input": Kind(
        title="Invalid input",
        page="The input breaks a rule; `errors` says where and how to mend it. Unless the "
        "request said `Prefer: handling=lenient`, nothing of it was kept.",
    ),
    "invalid-parameter": Kind(
        title="Invalid parameter",
        page="A query parameter is unknown, or its value is not one that it takes. Parameters "
        "that do nothing are refused, so that a typing error does not pass for a filter.",
    ),
    "invalid-geometry": Kind(
        title="Invalid geometry",
        page="An outline is not a valid polygon in WGS 84 longitude and latitude (RFC 7946).",
    ),
    "body-too-large": Kind(
        title="Body too large", status=413, page="The body is over the limit of this address."
    ),
    "unsupported-media-type": Kind(
        title="Unsupported media type",
        status=415,
        page="This address does not take bodies of this Content-Type.",
    ),
    "not-acceptable": Kind(
        title="Not acceptable",
        status=406,
        page="None of the media types in Accept can be written here.",
    ),
    "no-key": Kind(
        title="No key", status=401, page="The request carries no key in its Authorization header."
    ),
    "unknown-key": Kind(
        title="Unknown key", status=401, page="The key is unknown, has expired or was revoked."
    ),
    "scope-missing": Kind(title="Scope missing", page="The key may not do this."),
    "key-limited": Kind(
        title="Key limited to holdings",
        page="The key is limited to holdings, and this concerns others too.",
    ),
    "key-too-wide": Kind(
        title="Key too wide", page="A key can't make one with more rights than its own."
    ),
    "not-found": Kind(title="Not found", page="There is nothing at this address."),
    "method-not-allowed": Kind(
        title="Method not allowed", status=405, page="This address does not take this method."
    ),
    "parcel-not-found": Kind(
        title="Parcel not found",
        page="No parcel has this ref, or none that the key may see. Refs are case-sensitive.",
    ),
    "scene-not-found": Kind(title="Scene not found", page="No scene has this ref."),
    "key-not-found": Kind(title="Key not found", page="No key has this id."),
    "index-not-found": Kind(title="Index not found", page="No index has this id."),
    "file-missing": Kind(
        title="File missing", page="The archive does not hold a file that it should."
    ),
    "ref-taken": Kind(
        title="Ref taken",
        status=409,
        page="Refs are unique in the deployment, and this one belongs to a parcel that the key "
        "may not see.",
    ),
    "season-overlaps": Kind(
        title="Season overlaps",
        status=409,
        page="Crop seasons of a parcel may follow one another within a year, but not overlap.",
    ),
    "scene-exists": Kind(
        title="Scene exists",
        page="The ref stands for other content. A corrected or reprocessed product is sent with "
        "`replace`: its figures supersede the old ones in one step, and those stay queryable "
        "by `as_of`.",
    ),
    "tile-pass-taken": Kind(
        title="Tile and pass taken",
        page="Another scene of this tile and pass is there. A product that supersedes it is "
        "sent with `replace`.",
    ),
    "content-known": Kind(
        title="Content known", page="The same content is kept under another ref."
    ),
    "not-failed": Kind(title="Not failed", page="Only a failed scene can be tried again."),
    "secret-shown": Kind(
        title="Secret already shown",
        page="A key's secret is shown once, in the first answer, and is stored nowhere. If that "
        "answer was lost, revoke the key and make another under a new Idempotency-Key.",
    ),
    "idempotency-key-reused": Kind(
        title="Idempotency-Key reused",
        page="An Idempotency-Key names one request for 24 hours: the same request gets the "
        "first answer again, another request is refused.",
    ),
    "unknown-sensor": Kind(title="Unknown sensor", page="No sensor profile has this id."),
    "sensor-built-in": Kind(title="Built-in sensor", page="It comes with the service as it is."),
    "unknown-offset": Kind(
        title="Unknown offset",
        page="Without the right offset every index would be wrong, and nothing would show it: "
        "a forgotten offset turns an NDVI of 0.79 into 0.52. Send the processing baseline or "
        "the scaling from the product's metadata.",
    ),
    "wrong-quality-layer": Kind(
        title="Wrong quality layer",
        page="The quality or saturation layer is not the one that the sensor's profile reads.",
    ),
    "no-index": Kind(
        title="No index can be measured",
        page="The scene's bands feed none of the watched indices; `GET /v1/indices` lists the "
        "band roles that each needs.",
    ),
    "not-a-raster": Kind(
        title="Not a raster", page="Files must be GeoTIFF or JPEG 2000, told by their content."
    ),
    "unsupported-raster": Kind(
        title="Unsupported raster", page="The file uses a feature that is not read here."
    ),
    "raster-too-large": Kind(
        title="Raster too large", page="The header claims more than the service is ready to read."
    ),
    "truncated-raster": Kind(
        title="Truncated raster", page="The file ends before the pixels that its header names."
    ),
    "unreadable-pixels": Kind(
        title="Unreadable pixels",
        page="Reading the pixels failed somewhere in the file; nothing was measured from it.",
    ),
    "no-crs": Kind(
        title="No coordinate reference system", page="The file does not say where on Earth it lies."
    ),
    "unsupported-crs": Kind(
        title="Unsupported coordinate reference system",
        page="Scenes must be in a projected coordinate reference system in metres, such as UTM; "
        "files of parcels in a projected or geographic one that needs no further file.",
    ),
    "unsupported-grid": Kind(
        title="Unsupported grid", page="Grids must be aligned to their axes, without rotation."
    ),
    "crs-differs": Kind(
        title="Coordinate reference systems differ",
        page="All bands of a scene share one coordinate reference system.",
    ),
    "no-overlap": Kind(title="No overlap", page="All bands of a scene overlap on the ground."),
    "not-outlines": Kind(
        title="Not a file of outlines",
        page="Parcels are read from GeoPackage, zipped Shapefile and GeoJSON files, told by their "
        "content and not by their name.",
    ),
    "unreadable-outlines": Kind(
        title="Unreadable file of outlines",
        page="The file is damaged, incomplete, or uses what is not read here. Nothing was kept.",
    ),
    "outlines-too-large": Kind(
        title="Too much in a file of outlines",
        page="The file holds, or unpacks to, more than the service is ready to read.",
    ),
    "job-not-found": Kind(title="Job not found", page="No job has this id."),
    "disk-full": Kind(
        title="Disk full",
        page="The service keeps a reserve of free disk space and takes no uploads below it.",
    ),
    "worker-running": Kind(
        title="Already served", page="Another process works on the same data folder."
    ),
    "not-ready": Kind(title="Not ready", page="The service can't work at present."),
    "alert-not-found": Kind(title="Alert not found", page="No alert has this id."),
    "alert-state": Kind(
        title="Alert state", page="What was asked for does not fit what has become of the alert."
    ),
    "precondition-required": Kind(
        title="Precondition required",
        status=428,
        page="Changes of an alert carry `If-Match` with its entity tag, so that two people do not "
        "overwrite each other.",
    ),
    "precondition-failed": Kind(
        title="Precondition failed",
        status=412,
        page="Somebody, or judging, has changed the alert since it was looked at.",
    ),
    "no-baseline": Kind(
        title="No baseline", page="What is normal is worked out when a parcel's season is judged."
    ),
    "not-kept": Kind(
        title="Not kept",
        page="Figures are kept as they were known at any time, what was expected of them is not.",
    ),
    "webhook-not-found": Kind(title="Webhook not found", page="No webhook has this id."),
    "delivery-not-found": Kind(title="Delivery not found", page="No delivery has this id."),
    "webhook-address": Kind(
        title="Webhook address",
        page="Events are sent by https to public addresses, and elsewhere only if the operator "
        "allows it (`FURROWLIGHT_WEBHOOK_NETWORKS`).",
    ),
    "webhook-disabled": Kind(
        title="Webhook disabled",
        page="The receiver is disabled, by a person or because it said that it is gone for good; "
        "nothing is sent to it. Set its state to active, then try again.",
    ),
    "still-trying": Kind(
        title="Still trying", page="Attempts to deliver this event are still being made."
    ),
    "internal-error": Kind(
        title="Internal error",
        status=500,
        page="The service has a fault; its log tells more under the request's or scene's id.",
    ),
    **ITEM_KINDS,
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
    return _plain(
        request,
        "internal-error",
        f"The service failed; its log tells more under request {request.state.request_id}.",
        500,
    )


def _plain(request: Request, code: str, detail: str, status: int) -> Response:
    document = problem_document(code, detail, status=status, instance=request.url.path)
    return JSONResponse(document, status, media_type=MEDIA_TYPE)
