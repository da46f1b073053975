"""Child processes of this program: its own commands, run beside the one that is running."""

import os
import queue
import subprocess
import sys
import threading
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Final

from service.errors import Unavailable

START_SECONDS: Final = 180.0
END_SECONDS: Final = 15.0
COMMAND_SECONDS: Final = 180.0
LOG_LINES_SHOWN: Final = 20


def bare_environment(settings: Mapping[str, str]) -> dict[str, str]:
    """Return this process's environment with only the given settings of the service.

    What an operator has set for a real deployment, its database above all, must not reach
    a child that works on a folder of its own.
    """
    kept = {name: text for name, text in os.environ.items() if not name.startswith("FURROWLIGHT_")}
    return {**kept, **settings}


def output_of(arguments: list[str], *, settings: Mapping[str, str]) -> str:
    """Run Python with the arguments to its end and return what it printed on stdout.

    Raises
    ------
    Unavailable
        It failed or took too long; what it printed on stderr has been passed on.
    """
    try:
        done = subprocess.run(  # noqa: S603 - our own program, no shell, no outside text
            [sys.executable, *arguments],
            stdout=subprocess.PIPE,
            stdin=subprocess.DEVNULL,
            env=bare_environment(settings),
            text=True,
            timeout=COMMAND_SECONDS,
            check=True,
        )
    except subprocess.SubprocessError as error:
        raise Unavailable("child-failed", "A step failed; what it said stands above.") from error
    return done.stdout


@dataclass(frozen=True, slots=True, kw_only=True)
class RunningService:
    """A service in a child process that answers at an address."""

    address: str
    process: subprocess.Popen[str]

    def wait(self) -> None:
        """Wait until the service ends, which it does not do by itself."""
        self.process.wait()
        raise Unavailable("ended", "The service has ended.")


@contextmanager
def running_service(
    data: Path, *, log: Path, settings: Mapping[str, str]
) -> Iterator[RunningService]:
    """Serve a data folder in a child process until the block ends; end it in any case.

    Raises
    ------
    Unavailable
        The service ended, or said nothing, before it had an address.
    """
    command = ["-m", "service.cli", "serve", "--data", str(data)]
    with log.open("wb") as log_file:
        child = subprocess.Popen(  # noqa: S603 - our own program, no shell, no outside text
            [sys.executable, *command, "--host", "127.0.0.1", "--port", "0"],
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=log_file,
            env=bare_environment(settings),
            text=True,
            # Ctrl-C reaches the parent alone, which then ends the child in order.
            start_new_session=True,
        )
        try:
            yield RunningService(address=_address_of(child, log), process=child)
        finally:
            _end(child)


def _address_of(child: subprocess.Popen[str], log: Path) -> str:
    """Wait for the first line on the child's stdout, which is its address."""
    if child.stdout is None:
        raise RuntimeError("the child's stdout must be a pipe")
    first: queue.SimpleQueue[str] = queue.SimpleQueue()
    threading.Thread(target=_drain, args=(child.stdout, first), daemon=True).start()
    try:
        address = first.get(timeout=START_SECONDS).strip()
    except queue.Empty:
        address = ""
    if not address.startswith("http"):
        tail = log.read_text("utf-8", errors="replace").splitlines()[-LOG_LINES_SHOWN:]
        sys.stderr.write("".join(f"{line}\n" for line in tail))
        raise Unavailable("not-started", "The service did not start; its last words stand above.")
    return address


def _drain(stdout: IO[str], first: queue.SimpleQueue[str]) -> None:
    """Pass the first line on and read the rest away, so that the child never waits for us."""
    first.put(stdout.readline())
    for _ in stdout:
        pass


def _end(child: subprocess.Popen[str]) -> None:
    """Ask the child to end, and make it end if it does not or if the wait is cut short."""
    child.terminate()
    try:
        with suppress(subprocess.TimeoutExpired):
            child.wait(timeout=END_SECONDS)
    finally:
        child.kill()
        child.wait()
