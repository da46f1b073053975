"""The command `push` in a process of its own, against a service that a test serves."""

import json
import os
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tests.serving import Service

COMMAND_SECONDS = 120


@dataclass(frozen=True, slots=True, kw_only=True)
class Pushed:
    """What a command ended with."""

    code: int
    lines: list[dict[str, Any]]
    told: str

    @property
    def outcomes(self) -> list[str]:
        """What became of each product, in the order in which it was told."""
        return [str(line["outcome"]) for line in self.lines]


def environment(folder: Path, *, url: str, secret: str) -> dict[str, str]:
    """Return what the command finds the service by."""
    key_file = folder / "key"
    key_file.write_text(secret, "utf-8")
    return {**os.environ, "FURROWLIGHT_URL": url, "FURROWLIGHT_KEY_FILE": str(key_file)}


def command(*arguments: str | Path) -> list[str]:
    """Return the command line; what became of products is told as JSON."""
    return [sys.executable, "-m", "service.cli", "push", "--json", *map(str, arguments)]


def pushed(
    service: Service, folder: Path, *arguments: str | Path, url: str = "", secret: str = ""
) -> Pushed:
    """Push to the running service, unless told otherwise."""
    done = subprocess.run(
        command(*arguments),
        stdin=subprocess.DEVNULL,
        capture_output=True,
        env=environment(
            folder, url=url or str(service.client.base_url), secret=secret or service.secret
        ),
        text=True,
        timeout=COMMAND_SECONDS,
        check=False,
    )
    lines = [json.loads(line) for line in done.stdout.splitlines()]
    return Pushed(code=done.returncode, lines=lines, told=done.stderr)


@contextmanager
def pushing(
    folder: Path, *arguments: str | Path, url: str, secret: str
) -> Iterator[subprocess.Popen[str]]:
    """Let the command run beside the test."""
    with subprocess.Popen(
        command(*arguments),
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        env=environment(folder, url=url, secret=secret),
        text=True,
    ) as process:
        try:
            yield process
        finally:
            process.kill()
