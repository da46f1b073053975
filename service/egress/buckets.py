"""Objects in a store that speaks the S3 protocol: their addresses, signed for a short time.

The library signs, with the operator's credentials; the object is then fetched through the
guarded client like any other file, with its caps and its vetted addresses.
"""

from collections.abc import Callable, Sequence
from datetime import timedelta
from functools import lru_cache
from typing import Any, Final

from service.errors import RejectedInput, Unavailable

_VALID_FOR: Final = timedelta(minutes=15)
_PATIENCE: Final = timedelta(seconds=5)
Signer = Callable[[str, str], str]
"""Gives the signed address of an object from its bucket and key."""


def signed_address(bucket: str, key: str, *, endpoint: str) -> str:
    """Return an address by which an object may be read for some minutes.

    Credentials and region are those of the process's environment (``AWS_ACCESS_KEY_ID``,
    ``AWS_SECRET_ACCESS_KEY``, ``AWS_SESSION_TOKEN``, ``AWS_REGION`` …), never of the request.

    Parameters
    ----------
    endpoint
        Address of the store; empty means that of the environment, else the public one.

    Raises
    ------
    RejectedInput
        The extra ``object-stores`` is not installed, or the key is none.
    Unavailable
        The store's credentials are missing or don't work.
    """
    sign = _library()
    try:
        return str(sign(_store(bucket, endpoint), "GET", key, _VALID_FOR))
    except (TypeError, ValueError) as error:
        raise RejectedInput("asset-refused", "This is not the key of an object.") from error
    except _failures() as error:
        raise Unavailable(
            "asset-unavailable",
            "The service has no working credentials for its object store; the operator sets them.",
            retry_after_seconds=600,
        ) from error


def _library() -> Callable[..., str | Sequence[str]]:
    try:
        import obstore  # noqa: PLC0415 - an extra
    except ImportError:
        raise RejectedInput(
            "asset-refused",
            "This service was installed without its extra `object-stores`, which reads buckets. "
            "Ask the operator, or post the files.",
        ) from None
    return obstore.sign


@lru_cache(maxsize=64)
def _store(bucket: str, endpoint: str) -> Any:
    from obstore.store import S3Store  # noqa: PLC0415 - an extra

    own: dict[str, Any] = {"endpoint": endpoint} if endpoint else {}
    return S3Store(
        bucket,
        **own,
        client_options={"timeout": _PATIENCE, "connect_timeout": _PATIENCE},
        retry_config={"max_retries": 1, "retry_timeout": _PATIENCE},
    )


def _failures() -> type[Exception]:
    from obstore.exceptions import BaseError  # noqa: PLC0415 - an extra

    return BaseError
