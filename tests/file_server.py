"""A real file server on loopback, with TLS or without, that keeps what it was asked for.

`loopback.example.pem` is a key and self-signed certificate for the address 127.0.0.1, made for
these tests alone; it protects nothing.
"""

import ssl
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import partial
from http.server import SimpleHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any

CERTIFICATE = Path(__file__).parent / "loopback.example.pem"


@dataclass(slots=True, kw_only=True)
class FileServer:
    """Where the files are, and the paths that were asked for."""

    url: str
    host: str
    paths: list[str] = field(default_factory=list)


class _Handler(SimpleHTTPRequestHandler):
    def __init__(self, *args: Any, paths: list[str], **named: Any) -> None:
        self._paths = paths
        super().__init__(*args, **named)

    def do_GET(self) -> None:
        self._paths.append(self.path)
        super().do_GET()

    def log_message(self, *_: object) -> None:
        """Print nothing."""


@contextmanager
def serving_files(folder: Path, *, tls: bool) -> Iterator[FileServer]:
    """Serve a folder's files."""
    paths: list[str] = []
    handler = partial(_Handler, directory=str(folder), paths=paths)
    server = ThreadingHTTPServer(("127.0.0.1", 0), handler)
    if tls:
        context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
        context.load_cert_chain(CERTIFICATE)
        server.socket = context.wrap_socket(server.socket, server_side=True)
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.01})
    thread.start()
    host = f"127.0.0.1:{server.server_port}"
    try:
        yield FileServer(url=f"http{'s' if tls else ''}://{host}", host=host, paths=paths)
    finally:
        server.shutdown()
        server.server_close()
        thread.join()
