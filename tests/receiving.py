"""A small server on loopback that answers as a test says, and keeps what it received.

`receiver.example.pem` is a key and self-signed certificate for the name receiver.example,
made for these tests alone; it protects nothing.
"""

import socket
import ssl
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field
from ipaddress import IPv4Network
from pathlib import Path

from service.egress.client import GuardedTransport, Limits
from service.egress.targets import Resolver, system_resolver

CERTIFICATE = Path(__file__).parent / "receiver.example.pem"
CERTIFIED_NAME = "receiver.example"
LOOPBACK = IPv4Network("127.0.0.0/8")
SHORT = Limits(seconds=0.4, answer_bytes=1024)
LONG = Limits(seconds=15.0, answer_bytes=1024)


@dataclass(frozen=True, slots=True, kw_only=True)
class Request:
    """A request as it arrived; header names in lower case."""

    line: str
    headers: dict[str, str]
    body: bytes


@dataclass(frozen=True, slots=True, kw_only=True)
class Connection:
    """The server's end of one connection."""

    socket: socket.socket
    ending: threading.Event

    def send(self, data: bytes) -> None:
        self.socket.sendall(data)

    def pause(self, seconds: float) -> bool:
        """Wait, and return whether the test still runs."""
        return not self.ending.wait(seconds)

    def request(self) -> Request:
        """Read one request."""
        data = b""
        while b"\r\n\r\n" not in data:
            data += self._some()
        head, _, body = data.partition(b"\r\n\r\n")
        line, *fields = head.decode("latin-1").split("\r\n")
        pairs = (one.split(": ", 1) for one in fields)
        headers = {name.lower(): value for name, value in pairs}
        while len(body) < int(headers.get("content-length", "0")):
            body += self._some()
        return Request(line=line, headers=headers, body=body)

    def _some(self) -> bytes:
        data = self.socket.recv(65_536)
        if not data:
            raise ConnectionError
        return data


Behaviour = Callable[[Connection], None]


@dataclass(slots=True, kw_only=True)
class Receiver:
    """What a test sees of the server."""

    port: int
    requests: list[Request] = field(default_factory=list)
    server_names: list[str | None] = field(default_factory=list)
    connections: int = 0

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.port}/hook"


def answering(
    status: str = "200 OK", *, body: bytes = b"", fields: tuple[str, ...] = ()
) -> Callable[[Connection], None]:
    """Return the behaviour of a plain server: one answer, then the end."""
    head = [f"HTTP/1.1 {status}", f"Content-Length: {len(body)}", *fields, "", ""]
    answer = "\r\n".join(head).encode() + body

    def behave(connection: Connection) -> None:
        connection.send(answer)

    return behave


class _Server:
    """Accepts connections and has each converse in a thread of its own."""

    def __init__(self, behave: Behaviour, *, reads: str, tls: bool) -> None:
        self.listener = socket.create_server(("127.0.0.1", 0))
        self.receiver = Receiver(port=self.listener.getsockname()[1])
        self.ending = threading.Event()
        self._behave = behave
        self._reads = reads
        self._tls = _server_tls(self.receiver) if tls else None
        self._threads = [threading.Thread(target=self._accept)]
        self._threads[0].start()

    def _accept(self) -> None:
        with suppress(OSError):
            while True:
                accepted, _ = self.listener.accept()
                self.receiver.connections += 1
                thread = threading.Thread(target=self._converse, args=(accepted,))
                self._threads.append(thread)
                thread.start()

    def _converse(self, accepted: socket.socket) -> None:
        # The client hangs up on many behaviours: that is what is tested.
        with suppress(OSError), accepted:
            accepted.settimeout(10)
            ours = self._tls.wrap_socket(accepted, server_side=True) if self._tls else accepted
            with ours:
                connection = Connection(socket=ours, ending=self.ending)
                if self._reads == "request":
                    self.receiver.requests.append(connection.request())
                self._behave(connection)

    def close(self) -> None:
        self.ending.set()
        # Wakes the thread that accepts, where closing alone would leave it waiting.
        with suppress(OSError):
            self.listener.shutdown(socket.SHUT_RDWR)
        self.listener.close()
        for thread in self._threads:
            thread.join()


@contextmanager
def receiving(
    behave: Behaviour | None = None, *, reads: str = "request", tls: bool = False
) -> Iterator[Receiver]:
    """Run a server whose every connection behaves so, after reading a request.

    With `reads` = "nothing" it doesn't read before.
    """
    server = _Server(behave or answering(), reads=reads, tls=tls)
    try:
        yield server.receiver
    finally:
        server.close()


def _server_tls(receiver: Receiver) -> ssl.SSLContext:
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    context.load_cert_chain(CERTIFICATE)

    def note(_socket: object, name: str | None, _context: ssl.SSLContext) -> None:
        receiver.server_names.append(name)

    context.sni_callback = note
    return context


def transport(
    *,
    limits: Limits = LONG,
    resolve: Resolver = system_resolver,
    trust: ssl.SSLContext | None = None,
) -> GuardedTransport:
    """Return a way out that an operator opened to loopback."""
    return GuardedTransport(allowed=[LOOPBACK], limits=limits, resolve=resolve, trust=trust)
