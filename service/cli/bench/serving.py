"""A service of the benchmark's own: a child process on a temporary data folder."""

import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Final

import httpx

from service.cli.children import output_of, running_service
from service.cli.client import connect

SETTINGS: Final[Mapping[str, str]] = {
    # A benchmark needs a few hundred megabytes and must run on a disk that is nearly full.
    "FURROWLIGHT_DISK_RESERVE_BYTES": str(32 * 1024**2),
    "FURROWLIGHT_QUEUE_POLLING_SECONDS": "0.05",
}
SCOPES: Final = "read,ingest,triage,manage"
CALL_SECONDS: Final = 600.0


@contextmanager
def own_service() -> Iterator[httpx.Client]:
    """Yield a client of a new, empty service; all of it is gone behind the block."""
    with tempfile.TemporaryDirectory(prefix="furrowlight-") as scratch:
        data, log = Path(scratch) / "data", Path(scratch) / "service.log"
        with running_service(data, log=log, settings=SETTINGS) as service:
            creating = ["-m", "service.cli", "keys", "create", "--data", str(data)]
            secret = output_of(
                [*creating, "--label", "bench", "--scopes", SCOPES], settings=SETTINGS
            )
            with connect(service.address, key=secret.strip()) as client:
                client.timeout = httpx.Timeout(CALL_SECONDS)
                yield client
