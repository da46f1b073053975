"""Parcels from files: small ones kept before the answer, large ones promised as a job."""

import hashlib
import json
from collections.abc import AsyncIterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Final

from fastapi import Depends, Query, Request, Response, status
from pydantic import Field
from starlette.concurrency import run_in_threadpool

from service.api.batches import model_of
from service.api.bodies import BULK_LIMIT_BYTES
from service.api.context import Caller, Context, Ctx, Steward
from service.api.jobs import JobOut, address_of, job_out, read_job
from service.api.multipart import FileSink, Sink, TextSink, receive_parts
from service.api.once import Once, OnceOnly, json_answer
from service.api.parcels import ParcelsPut
from service.api.preferences import Wait, is_finished, preferences_of
from service.api.routes import contract_router
from service.api.uploads import check_disk
from service.api.wire import Sent
from service.clock import now
from service.errors import RejectedInput
from service.jobs.parcel_files import Asked, batch_at_once
from service.jobs.parcel_import import KIND
from service.store.jobs import JobSent, promise_job
from service.store.parcel_batches import Kept, ParcelBatch, keep_parcels

FILE: Final = "file"
_FIELD_BYTES: Final = 1_024
_FINGERPRINT: Final = "parcels import"

router = contract_router("/parcels", "parcels")

FieldName = Annotated[str, Field(min_length=1, max_length=200)]


class FieldsSent(Sent):
    """Which fields of the file hold what; `dry_run` keeps nothing."""

    ref_field: FieldName
    name_field: FieldName | None = None
    holding_field: FieldName | None = None
    crop_field: FieldName | None = None
    dry_run: bool = False


class ParcelsImported(ParcelsPut):
    """What became of a file's parcels, or would have become of them in a dry run."""

    dry_run: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class FileOfParcels:
    """A file on disk under a name of our own, and the fields that were named with it."""

    path: Path
    digest: str
    fields: FieldsSent
    is_lenient: bool


class _Form:
    """Opens the parts of an import: the file, and short ones that name fields."""

    def __init__(self, context: Context, stack: ExitStack) -> None:
        self._context = context
        self._stack = stack
        self._texts: dict[str, TextSink] = {}
        self.file: FileSink | None = None

    def open(self, name: str) -> Sink:
        """Return where a part goes."""
        if name in self._texts or (name == FILE and self.file is not None):
            raise RejectedInput.at(f"/{name}", "Two parts have this name; send one.")
        if name == FILE:
            check_disk(self._context.archive, self._context.settings)
            path = self._stack.enter_context(self._context.archive.incoming())
            self.file = FileSink(path, self._stack.enter_context(path.open("wb")))
            return self.file
        if name not in FieldsSent.model_fields:
            known = ", ".join(f"`{part}`" for part in (FILE, *FieldsSent.model_fields))
            raise RejectedInput(
                "invalid-input",
                f"A part has a name that means nothing here. Parts are {known}.",
            )
        self._texts[name] = TextSink(pointer=f"/{name}", limit=_FIELD_BYTES)
        return self._texts[name]

    def fields(self) -> FieldsSent:
        """Return the fields that were named, checked."""
        sent = {}
        for name, sink in self._texts.items():
            try:
                sent[name] = sink.content.decode("utf-8")
            except UnicodeDecodeError as error:
                raise RejectedInput.at(f"/{name}", "Send text in UTF-8.") from error
        return model_of(FieldsSent, sent, "")


async def _received(request: Request, context: Ctx) -> AsyncIterator[FileOfParcels]:
    with ExitStack() as stack:
        form = _Form(context, stack)
        await receive_parts(request, form.open, limit=BULK_LIMIT_BYTES)
        if form.file is None:
            raise RejectedInput.at(f"/{FILE}", "Send the file in a part of this name.")
        yield FileOfParcels(
            path=form.file.path,
            digest=form.file.digest,
            fields=form.fields(),
            is_lenient=preferences_of(request).get("handling") == "lenient",
        )


_FORM: Final[dict[str, Any]] = {
    "requestBody": {
        "required": True,
        "content": {
            "multipart/form-data": {
                "schema": {
                    **FieldsSent.model_json_schema(),
                    "properties": {
                        FILE: {
                            "type": "string",
                            "format": "binary",
                            "description": "GeoPackage, zipped Shapefile or GeoJSON.",
                        },
                        **FieldsSent.model_json_schema()["properties"],
                    },
                    "required": [FILE, "ref_field"],
                }
            }
        },
    }
}


@router.post(
    "/import",
    response_model=ParcelsImported,
    responses={202: {"model": JobOut, "description": "Promised as a job."}},
    openapi_extra=_FORM,
)
async def post_parcels_file(
    caller: Steward,
    received: Annotated[FileOfParcels, Depends(_received)],
    context: Ctx,
    once: OnceOnly,
    wait: Wait,
    *,
    repair: Annotated[bool, Query(description="Mend rings that cross themselves.")] = False,
) -> Response:
    """Insert or update parcels by ref, from a GeoPackage, a zipped Shapefile or GeoJSON.

    Outlines are brought to WGS 84 from the file's own coordinate reference system. A file of
    more than 5,000 parcels, or of more than 250,000 vertices, is promised as a job: 202.
    """
    asked = Asked(**received.fields.model_dump(), is_lenient=received.is_lenient, repair=repair)
    batch = await run_in_threadpool(batch_at_once, received.path, asked, context.settings)
    if batch is not None:
        return await run_in_threadpool(_keep, received, asked, batch, caller, context, once)
    answer = await run_in_threadpool(_promise, received, asked, caller, context, once)
    return await _held(answer, caller, context, wait)


def _fingerprint(received: FileOfParcels, asked: Asked) -> str:
    """Return what makes a request the same request, whatever its boundary between parts."""
    told = json.dumps([_FINGERPRINT, received.digest, asked.as_dict()], sort_keys=True)
    return hashlib.sha256(told.encode()).hexdigest()


def _keep(
    received: FileOfParcels,
    asked: Asked,
    batch: ParcelBatch,
    caller: Caller,
    context: Context,
    once: Once,
) -> Response:
    """Keep the parcels of a small file, or see what would become of them."""
    fingerprint = _fingerprint(received, asked)

    def keep(session: Any) -> Kept:
        return keep_parcels(
            session,
            batch,
            holdings=caller.holdings,
            season_starts=context.settings.season_starts,
            is_lenient=asked.is_lenient,
            at=now(),
        )

    if asked.dry_run:
        with context.sessions.trying() as session:
            return json_answer(ParcelsImported(**keep(session).told(), dry_run=True))
    with context.sessions.writing() as session:
        if (first := once.replay(session, caller, fingerprint)) is not None:
            return first
        kept = keep(session)
        made = json_answer(ParcelsImported(**kept.told(), dry_run=False))
        answer = once.keep(session, caller, fingerprint, made)
    for promise in kept.promises:
        context.promise(*promise)
    context.promise_judging()
    return answer


def _promise(
    received: FileOfParcels, asked: Asked, caller: Caller, context: Context, once: Once
) -> Response:
    """Keep a large file and promise its import; the same promised work is not promised twice."""
    context.archive.keep(received.path, received.digest)
    fingerprint = _fingerprint(received, asked)
    with context.sessions.writing() as session:
        if (first := once.replay(session, caller, fingerprint)) is not None:
            return first
        row = promise_job(
            session,
            JobSent(
                kind=KIND,
                api_key_id=caller.key_id,
                holdings=caller.holdings,
                asked=asked.as_dict(),
                digest=received.digest,
                fingerprint=fingerprint,
            ),
            at=now(),
        )
        made = json_answer(job_out(row), 202, Location=address_of(row.public_id))
        answer = once.keep(session, caller, fingerprint, made)
        promised = row.public_id
    context.promise_import(promised)
    return answer


async def _held(answer: Response, caller: Caller, context: Context, seconds: float) -> Response:
    """Hold a promise's answer while the caller waits for the work; 200 once it is done."""
    if answer.status_code != status.HTTP_202_ACCEPTED or not seconds:
        return answer
    address = answer.headers["Location"]
    job_id = address.rsplit("/", 1)[-1]
    if not await is_finished(context, job_id, seconds):
        return answer
    made = await run_in_threadpool(read_job, job_id, caller, context)
    return json_answer(made, Location=address)
