"""Structured logs: one JSON object a line on stderr, keys redacted."""

import logging
import re
import sys
from collections.abc import MutableMapping
from typing import Any

import structlog

_SECRET = re.compile(r"\b(flk_|whsec_)[A-Za-z0-9_+/=-]{8,}")
_URL_TAIL = re.compile(r"(https?://)(?:[^/\s@]*@)?([^\s?#]*)[?#]\S*")


def redacted(text: str) -> str:
    """Return the text without key secrets and without query strings of URLs."""
    return _URL_TAIL.sub(r"\1\2", _SECRET.sub(r"\1[redacted]", text))


def _redact(
    _logger: object, _method: str, event: MutableMapping[str, Any]
) -> MutableMapping[str, Any]:
    return {name: redacted(v) if isinstance(v, str) else v for name, v in event.items()}


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
