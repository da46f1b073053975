"""Connections to vetted addresses, where one deadline and one budget hold for all of it."""

import socket
import ssl
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from typing import Any, Final

import httpcore

from service.egress.addresses import Address

MAX_ADDRESSES_TRIED: Final = 4

Dialer = Callable[[Address, int, float], socket.socket]
"""Opens a connection to an address and port within some seconds, or raises OSError."""


class TlsFailed(httpcore.ConnectError):
    """The other side's certificate or its TLS is not acceptable."""


class AnswerTooLong(httpcore.ReadError):
    """More came back than the budget of bytes allows."""


class Deadline:
    """A point in time that all waiting of one request ends at."""

    def __init__(self, seconds: float) -> None:
        self._end = time.monotonic() + seconds

    def left(self) -> float:
        """Return the seconds left, never zero: sockets take that for "don't wait"."""
        left = self._end - time.monotonic()
        if left <= 0:
            raise TimeoutError
        return left


def dial(address: Address, port: int, seconds: float) -> socket.socket:
    """Connect to a numeric address; no name is looked up."""
    family = socket.AF_INET if address.version == 4 else socket.AF_INET6
    connection = socket.socket(family, socket.SOCK_STREAM)
    try:
        connection.settimeout(seconds)
        connection.connect((str(address), port))
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    except OSError:
        connection.close()
        raise
    return connection


class PinnedBackend(httpcore.NetworkBackend):
    """Connects to the given addresses, whatever host it is asked for.

    So a name is resolved once, before, and what was vetted is what is connected to. The
    host stays what TLS and the Host header name.
    """

    def __init__(
        self,
        addresses: Sequence[Address],
        *,
        deadline: Deadline,
        budget_bytes: int,
        dialer: Dialer,
    ) -> None:
        self._addresses = addresses[:MAX_ADDRESSES_TRIED]
        self._deadline = deadline
        self._budget_bytes = budget_bytes
        self._dial = dialer

    def connect_tcp(
        self,
        host: str,  # noqa: ARG002
        port: int,
        timeout: float | None = None,  # noqa: ARG002
        local_address: str | None = None,  # noqa: ARG002
        socket_options: Iterable[httpcore.SOCKET_OPTION] | None = None,  # noqa: ARG002
    ) -> httpcore.NetworkStream:
        """Connect to the first address that answers; each gets its share of the time."""
        with _mapped(httpcore.ConnectTimeout, httpcore.ConnectError):
            connection = self._first_to_answer(port)
        return TimedStream(connection, deadline=self._deadline, budget_bytes=self._budget_bytes)

    def connect_unix_socket(
        self,
        path: str,  # noqa: ARG002
        timeout: float | None = None,  # noqa: ARG002
        socket_options: Iterable[httpcore.SOCKET_OPTION] | None = None,  # noqa: ARG002
    ) -> httpcore.NetworkStream:
        """Refuse: sockets of this machine are no outgoing request."""
        raise httpcore.UnsupportedProtocol

    def _first_to_answer(self, port: int) -> socket.socket:
        failure: OSError = ConnectionError()
        for at, address in enumerate(self._addresses):
            share = self._deadline.left() / (len(self._addresses) - at)
            try:
                return self._dial(address, port, share)
            except OSError as error:
                failure = error
        raise failure


class TimedStream(httpcore.NetworkStream):
    """A connection that ends at the deadline and after so many bytes read.

    The timeouts that are handed in are those of single operations, which a slow sender
    resets with every byte; so they are not looked at.
    """

    def __init__(self, connection: socket.socket, *, deadline: Deadline, budget_bytes: int) -> None:
        self._connection = connection
        self._deadline = deadline
        self._budget_bytes = budget_bytes

    def read(self, max_bytes: int, timeout: float | None = None) -> bytes:  # noqa: ARG002
        """Return what has arrived, waiting for it until the deadline."""
        with _mapped(httpcore.ReadTimeout, httpcore.ReadError):
            self._connection.settimeout(self._deadline.left())
            data = self._connection.recv(max_bytes)
        self._budget_bytes -= len(data)
        if self._budget_bytes < 0:
            raise AnswerTooLong
        return data

    def write(self, buffer: bytes, timeout: float | None = None) -> None:  # noqa: ARG002
        """Send all of the buffer, until the deadline."""
        with _mapped(httpcore.WriteTimeout, httpcore.WriteError):
            self._connection.settimeout(self._deadline.left())
            self._connection.sendall(buffer)

    def close(self) -> None:
        """Hang up."""
        self._connection.close()

    def start_tls(
        self,
        ssl_context: ssl.SSLContext,
        server_hostname: str | None = None,
        timeout: float | None = None,  # noqa: ARG002
    ) -> httpcore.NetworkStream:
        """Shake hands under the name of the URL, not under the address."""
        try:
            with _mapped(httpcore.ConnectTimeout, TlsFailed):
                self._connection.settimeout(self._deadline.left())
                secured = ssl_context.wrap_socket(self._connection, server_hostname=server_hostname)
        except httpcore.NetworkError:
            self.close()
            raise
        return TimedStream(secured, deadline=self._deadline, budget_bytes=self._budget_bytes)

    def get_extra_info(self, info: str) -> Any:
        """Return the TLS object, the only thing asked for that this stream knows."""
        if info == "ssl_object" and isinstance(self._connection, ssl.SSLSocket):
            return self._connection
        return None


@contextmanager
def _mapped(
    timed_out: type[httpcore.TimeoutException], failed: type[httpcore.NetworkError]
) -> Iterator[None]:
    try:
        yield
    except TimeoutError as error:
        raise timed_out from error
    except OSError as error:
        raise failed from error
