"""A file of another server, streamed through the guarded client: never whole in memory."""

import ssl
from collections.abc import Callable, Mapping, Sequence
from http import HTTPStatus
from pathlib import Path
from typing import Final

import httpx

from service.egress.addresses import Network
from service.egress.client import FIXED_HEADERS, GuardedTransport, Limits
from service.egress.targets import Resolver, read_url, system_resolver
from service.errors import RejectedInput, Unavailable

FILE_REFUSED: Final = "asset-refused"
FILE_UNAVAILABLE: Final = "asset-unavailable"
URL_CHARACTERS: Final = 8_000
"""Temporary credentials make signed addresses of a few thousand characters."""
_TRY_AGAIN: Final = frozenset({HTTPStatus.REQUEST_TIMEOUT, HTTPStatus.TOO_MANY_REQUESTS})
_CHUNK_BYTES: Final = 2**20


class Fetcher:
    """Gets files by https, and by plain http in networks that the operator opens.

    Parameters
    ----------
    allowed
        Networks beyond the public addresses.
    certificates
        A file of further certificate authorities to trust (PEM), None for none.
    resolve
        How names become addresses.
    """

    def __init__(
        self,
        *,
        allowed: Sequence[Network],
        certificates: Path | None = None,
        resolve: Resolver = system_resolver,
    ) -> None:
        self._allowed = tuple(allowed)
        self._resolve = resolve
        self._trust: ssl.SSLContext = httpx.create_ssl_context(trust_env=False)
        if certificates is not None:
            self._trust.load_verify_locations(certificates)

    def fetch(
        self, url: str, write: Callable[[bytes], object], *, seconds: float, size: int
    ) -> None:
        """Pass a file on, piece by piece.

        Parameters
        ----------
        seconds
            Time for all of it.
        size
            Most bytes that it may have.

        Raises
        ------
        RejectedInput
            The address is off limits, redirects, names no file, or the file is too large
            (``assets-too-large``).
        Unavailable
            The other side can't give the file now, or not in time.
        """
        limits = Limits(seconds=seconds, answer_bytes=size, url_characters=URL_CHARACTERS)
        transport = GuardedTransport(
            allowed=self._allowed, limits=limits, resolve=self._resolve, trust=self._trust
        )
        target = read_url(url, longest=URL_CHARACTERS)
        request = httpx.Request("GET", target, headers=dict(FIXED_HEADERS))
        response = transport.handle_request(request)
        try:
            _check(response.status_code, response.headers)
            self._pass_on(response, write, size)
        finally:
            response.close()

    def _pass_on(
        self, response: httpx.Response, write: Callable[[bytes], object], size: int
    ) -> None:
        declared = response.headers.get("content-length", "0")
        if not declared.isdecimal() or len(declared) > len(str(size)) or int(declared) > size:
            raise too_large()
        piece, received = bytearray(), 0
        for part in response.iter_raw():
            received += len(part)
            if received > size:
                raise too_large()
            piece += part
            if len(piece) >= _CHUNK_BYTES:
                write(bytes(piece))
                piece.clear()
        write(bytes(piece))


def _check(status: int, headers: Mapping[str, str]) -> None:
    if status == HTTPStatus.OK:
        if headers.get("content-encoding", "identity").strip().lower() != "identity":
            raise RejectedInput(
                FILE_REFUSED, "The host sends the file packed; have it sent as it is."
            )
        return
    if status >= HTTPStatus.INTERNAL_SERVER_ERROR or status in _TRY_AGAIN:
        raise Unavailable(
            FILE_UNAVAILABLE, "The host can't give the file now.", retry_after_seconds=60
        )
    if HTTPStatus.MULTIPLE_CHOICES <= status < HTTPStatus.BAD_REQUEST:
        detail = "The host redirects; give the address that it points to."
    else:
        detail = "The host gives no file at this address; check that it is there and may be read."
    raise RejectedInput(FILE_REFUSED, detail)


def too_large() -> RejectedInput:
    """Return the error for files of an Item over the limit of a scene's upload."""
    return RejectedInput(
        "assets-too-large",
        "With this file the assets of the Item are over the limit of one scene's upload.",
    )
