"""Structured logs: one JSON object a line on stderr, keys redacted."""

import logging
import re
import sys
from collections.abc import Mapping, MutableMapping
from typing import Any

import structlog

_SECRET = re.compile(r"(flk_|whsec_)[A-Za-z0-9_+/=-]{8,}")
# A URL's user info, its place, its query and fragment.
_URL = re.compile(
    r"(\b[A-Za-z][A-Za-z0-9+.-]{0,30}://)(?:[^/\s?#]*@)?([^\s?#]*)(?:[?#][^\s\"'<>]*)?"
)


def redacted(text: str) -> str:
    """Return the text without key secrets, and without user info and queries of URLs."""
    return _URL.sub(r"\1\2", _SECRET.sub(r"\1[redacted]", text))


def _redacted_within(value: Any) -> Any:
    if isinstance(value, str):
        return redacted(value)
    if isinstance(value, Mapping):
        return {_redacted_within(name): _redacted_within(part) for name, part in value.items()}
    if isinstance(value, list | tuple | set):
        return [_redacted_within(part) for part in value]
    return value


def _redact(
    _logger: object, _method: str, event: MutableMapping[str, Any]
) -> MutableMapping[str, Any]:
    # The records of other libraries stand here too, under names that begin with "_".
    return {
        name: value if name.startswith("_") else _redacted_within(value)
        for name, value in event.items()
    }


def set_up_logs(level: str) -> None:
    """Send structlog and standard logging to stderr as JSON lines."""
    shared: list[Any] = [
        structlog.contextvars.merge_contextvars,
        structlog.processors.add_log_level,
        structlog.processors.TimeStamper(fmt="iso", utc=True),
        structlog.processors.format_exc_info,
        _redact,
    ]
    structlog.configure(
        processors=[*shared, structlog.stdlib.ProcessorFormatter.wrap_for_formatter],
        logger_factory=structlog.stdlib.LoggerFactory(),
        cache_logger_on_first_use=True,
    )
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(
        structlog.stdlib.ProcessorFormatter(
            foreign_pre_chain=shared,
            processors=[
                structlog.stdlib.ProcessorFormatter.remove_processors_meta,
                structlog.processors.JSONRenderer(),
            ],
        )
    )
    root = logging.getLogger()
    root.handlers[:] = [handler]
    root.setLevel(level.upper())
    for noisy in ("dbos", "alembic", "uvicorn.access"):
        logging.getLogger(noisy).setLevel(logging.WARNING)
    # It warns of every driver to skip that its build does not have.
    logging.getLogger("rasterio").setLevel(logging.ERROR)
