"""One guarded request: a vetted address, one deadline, a capped answer, no redirect.

Proxies, certificate stores and credentials of the environment are not looked at.
"""

import ssl
from collections.abc import Iterator, Mapping, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from typing import Final

import httpcore
import httpx

from service.egress.addresses import Network
from service.egress.targets import (
    MAX_URL_CHARACTERS,
    Resolver,
    port_of,
    read_url,
    system_resolver,
    vetted,
)
from service.egress.wire import AnswerTooLong, Deadline, Dialer, PinnedBackend, TlsFailed, dial
from service.errors import Unavailable

UNREACHABLE: Final = "unreachable"
TLS_FAILED: Final = "tls-failed"
TIMED_OUT: Final = "timed-out"
BROKEN_ANSWER: Final = "broken-answer"

# Unpacked bodies are not bounded by what was sent.
FIXED_HEADERS: Final[Mapping[str, str]] = {
    "accept-encoding": "identity",
    "connection": "close",
    "user-agent": "Furrowlight",
}
# Room for status line, headers and chunk marks beside the kept part of the body.
_OVERHEAD_BYTES: Final = 128 * 1024


@dataclass(frozen=True, slots=True, kw_only=True)
class Limits:
    """What one request may take: seconds in all, name look-up included, and bytes of body.

    Signed addresses of files are long, so their requests may have more characters.
    """

    seconds: float
    answer_bytes: int
    url_characters: int = MAX_URL_CHARACTERS


@dataclass(frozen=True, slots=True, kw_only=True)
class Answer:
    """What came back; header names are in lower case.

    `is_complete` is false when the body was cut, by its size or by the time.
    """

    status: int
    headers: Mapping[str, str]
    body: bytes
    is_complete: bool


class GuardedTransport(httpx.BaseTransport):
    """The only way out: resolves once, vets all addresses, connects to a vetted one.

    Each request has its own connection, so each one is vetted anew.

    Parameters
    ----------
    allowed
        Networks that the operator opens beyond the public addresses; plain http is sent
        only there.
    limits
        Time and size of one request.
    resolve, dialer
        How names become addresses, and addresses connections.
    trust
        Certificates to trust; those that ship with the service if not given.
    """

    def __init__(
        self,
        *,
        allowed: Sequence[Network],
        limits: Limits,
        resolve: Resolver = system_resolver,
        dialer: Dialer = dial,
        trust: ssl.SSLContext | None = None,
    ) -> None:
        self.limits = limits
        self._allowed = tuple(allowed)
        self._resolve = resolve
        self._dial = dialer
        self._trust = trust or httpx.create_ssl_context(trust_env=False)

    def handle_request(self, request: httpx.Request) -> httpx.Response:
        """Send one request and return its answer, whose body is still to be read.

        Raises
        ------
        RejectedInput
            The address is off limits.
        Unavailable
            No answer, or none that is HTTP.
        """
        deadline = Deadline(self.limits.seconds)
        url = read_url(str(request.url), longest=self.limits.url_characters)
        addresses = vetted(url, self._allowed, resolve=self._resolve, seconds=self.limits.seconds)
        backend = PinnedBackend(
            addresses,
            deadline=deadline,
            budget_bytes=self.limits.answer_bytes + _OVERHEAD_BYTES,
            dialer=self._dial,
        )
        with ExitStack() as stack, _translated():
            pool = stack.enter_context(
                httpcore.ConnectionPool(
                    ssl_context=self._trust, max_keepalive_connections=0, network_backend=backend
                )
            )
            answer = pool.handle_request(_as_core(request, url))
            body = _Body(answer, stack.pop_all())
        return httpx.Response(answer.status, headers=answer.headers, stream=body, request=request)


def send(
    transport: GuardedTransport,
    method: str,
    url: str,
    *,
    headers: Mapping[str, str],
    content: bytes = b"",
) -> Answer:
    """Send one request and return the first part of its answer, up to the transport's limit.

    A redirect is an answer like any other. The request goes straight to the transport:
    a client on top of it would log the URL, which may hold a secret.

    Raises
    ------
    RejectedInput
        The URL is no plain address, or leads to an address that is off limits.
    Unavailable
        No answer within the time, or none that is HTTP.
    """
    request = httpx.Request(
        method, read_url(url), headers={**FIXED_HEADERS, **headers}, content=content
    )
    response = transport.handle_request(request)
    try:
        body, is_complete = _first(response, transport.limits.answer_bytes)
    finally:
        response.close()
    return Answer(
        status=response.status_code,
        headers=dict(response.headers),
        body=body,
        is_complete=is_complete,
    )


def _first(response: httpx.Response, size: int) -> tuple[bytes, bool]:
    """Return the first bytes of a body, and whether they are all of it."""
    body = bytearray()
    try:
        for part in response.iter_raw():
            body += part
            if len(body) > size:
                return bytes(body[:size]), False
    except Unavailable:
        # The status did arrive; the body broke off, and what there is of it is shown.
        return bytes(body), False
    return bytes(body), True


class _Body(httpx.SyncByteStream):
    def __init__(self, answer: httpcore.Response, connection: ExitStack) -> None:
        self._answer = answer
        self._connection = connection

    def __iter__(self) -> Iterator[bytes]:
        with _translated():
            yield from self._answer.iter_stream()

    def close(self) -> None:
        self._answer.close()
        self._connection.close()


def _as_core(request: httpx.Request, url: httpx.URL) -> httpcore.Request:
    target = httpcore.URL(
        scheme=url.raw_scheme, host=url.raw_host, port=port_of(url), target=url.raw_path
    )
    return httpcore.Request(
        request.method, target, headers=request.headers.raw, content=request.read()
    )


@contextmanager
def _translated() -> Iterator[None]:
    """Turn the wire's errors into ours."""
    try:
        yield
    except (httpcore.TimeoutException, TimeoutError) as error:
        raise Unavailable(TIMED_OUT, "The other side did not answer in time.") from error
    except TlsFailed as error:
        raise Unavailable(
            TLS_FAILED, "No secure connection; is the certificate valid for this name?"
        ) from error
    except (AnswerTooLong, httpcore.ProtocolError) as error:
        raise Unavailable(
            BROKEN_ANSWER, "The answer is not HTTP, broke off or is too long."
        ) from error
    except httpcore.NetworkError as error:
        raise Unavailable(
            UNREACHABLE, "No connection, or it was cut before the answer; is the server running?"
        ) from error
