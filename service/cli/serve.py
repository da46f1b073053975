"""Serving the API with its worker."""

import os
import signal
import socket
import sys
from pathlib import Path
from typing import Annotated, Final

import typer
import uvicorn
from pydantic import ValidationError

from service.app import create_app
from service.errors import RejectedInput, Unavailable
from service.logs import set_up_logs
from service.settings import Settings

_EXIT_INTERRUPTED: Final = 130


class _Server(uvicorn.Server):
    """A server that prints its address once it answers."""

    def __init__(self, config: uvicorn.Config, address: str) -> None:
        super().__init__(config)
        self._address = address

    async def startup(self, sockets: list[socket.socket] | None = None) -> None:
        """Start, then tell scripts where: the first line on stdout."""
        await super().startup(sockets=sockets)
        if self.started:
            sys.stdout.write(f"{self._address}\n")
            sys.stdout.flush()


def serve(
    data: Annotated[
        Path | None, typer.Option(help="Data folder; made and migrated if need be.")
    ] = None,
    host: Annotated[str, typer.Option(help="Address to listen on.")] = "127.0.0.1",
    port: Annotated[int, typer.Option(help="Port to listen on; 0 picks a free one.")] = 8765,
) -> None:
    """Serve the API, with the worker that measures scenes.

    The address is the first line on stdout, printed once the service answers.
    """
    # The server hands these on after it has shut down in order.
    signal.signal(signal.SIGTERM, _end)
    signal.signal(signal.SIGINT, _end)
    settings = settings_for(data)
    set_up_logs(settings.log_level)
    app = create_app(settings)
    app.state.claim()
    with _listening(host, port) as listener:
        bound = listener.getsockname()[1]
        shown = f"[{host}]" if ":" in host else host
        config = uvicorn.Config(
            app, log_config=None, access_log=False, timeout_graceful_shutdown=10
        )
        server = _Server(config, f"http://{shown}:{bound}")
        try:
            server.run(sockets=[listener])
        except SystemExit as error:
            raise Unavailable(
                "not-ready", "The service did not start; the log above says why."
            ) from error


def _end(number: int, _frame: object) -> None:
    """End without waiting for a step that is still at work: the next start resumes it."""
    sys.stdout.flush()
    os._exit(_EXIT_INTERRUPTED if number == signal.SIGINT else 0)


def settings_for(data: Path | None) -> Settings:
    """Return the settings of the environment, with the data folder that was named.

    Raises
    ------
    RejectedInput
        A setting is not what it may be.
    """
    try:
        return Settings() if data is None else Settings(data=data)
    except ValidationError as error:
        names = sorted({f"FURROWLIGHT_{fault['loc'][0]}".upper() for fault in error.errors()})
        raise RejectedInput(
            "invalid-setting",
            f"Not valid: {', '.join(names)}. The README says what each setting may be.",
        ) from None


def _listening(host: str, port: int) -> socket.socket:
    family = socket.AF_INET6 if ":" in host else socket.AF_INET
    listener = socket.socket(family)
    listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    try:
        listener.bind((host, port))
    except OSError as error:
        listener.close()
        raise Unavailable(
            "not-ready", f"Can't listen on {host} port {port}: {error.strerror}."
        ) from error
    return listener
