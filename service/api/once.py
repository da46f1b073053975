"""Idempotency-Key: a POST that is sent again gets its first answer again."""

import hashlib
from typing import Annotated, Any

from fastapi import Depends, Header, Request
from fastapi.encoders import jsonable_encoder
from fastapi.responses import JSONResponse, Response
from sqlalchemy.orm import Session

from service.api.context import Caller
from service.clock import now
from service.store.answers import first_answer, keep_answer


class Once:
    """One request's Idempotency-Key, if it has one."""

    def __init__(self, name: str | None, request: Request) -> None:
        self._name = name
        self._address = f"{request.method} {request.url.path}?{request.url.query}"

    def replay(self, session: Session, caller: Caller, fingerprint: str) -> Response | None:
        """Return the first answer to this very request, if there was one within 24 hours."""
        if self._name is None:
            return None
        row = first_answer(
            session,
            api_key_id=caller.key_id,
            name=self._name,
            fingerprint=self._whole(fingerprint),
            at=now(),
        )
        return None if row is None else Response(row.body, row.status, row.headers)

    def keep(
        self, session: Session, caller: Caller, fingerprint: str, answer: JSONResponse
    ) -> JSONResponse:
        """Keep an answer in the transaction of its work; return it."""
        if self._name is not None:
            names = ("location", "content-type", "link")
            keep_answer(
                session,
                api_key_id=caller.key_id,
                name=self._name,
                fingerprint=self._whole(fingerprint),
                status=answer.status_code,
                headers={n: answer.headers[n] for n in names if n in answer.headers},
                body=bytes(answer.body),
                at=now(),
            )
        return answer

    def _whole(self, fingerprint: str) -> str:
        return hashlib.sha256(f"{self._address}\n{fingerprint}".encode()).hexdigest()


def _once(
    request: Request,
    idempotency_key: Annotated[
        str | None,
        Header(min_length=1, max_length=200, description="Makes a retry safe for 24 hours."),
    ] = None,
) -> Once:
    return Once(idempotency_key, request)


OnceOnly = Annotated[Once, Depends(_once)]


def json_answer(model: Any, status: int = 200, **headers: str) -> JSONResponse:
    """Return a model as JSON answer, ready to be kept."""
    named = {name.replace("_", "-"): value for name, value in headers.items()}
    return JSONResponse(jsonable_encoder(model), status, named)
