"""Files that an Item names: only under roots that the operator allows, copied to files of ours.

No raster library ever sees an address: what is copied here is judged by its content later, like
any upload. Nothing is allowed unless the operator says so.
"""

import os
import re
import stat
import threading
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from ipaddress import ip_network
from pathlib import Path
from typing import Final
from urllib.parse import unquote, urlsplit

from service.egress.buckets import signed_address
from service.egress.fetching import (
    FILE_REFUSED,
    FILE_UNAVAILABLE,
    URL_CHARACTERS,
    Fetcher,
    too_large,
)
from service.egress.targets import FORBIDDEN, INVALID, port_of, read_url
from service.egress.wire import Deadline
from service.errors import Fault, RejectedInput, Unavailable
from service.settings import Settings

ASSET_FORBIDDEN: Final = "asset-forbidden"
_SCHEME: Final = re.compile(r"([a-z][a-z0-9+.-]*):", re.IGNORECASE)
_DEFAULT_PORTS: Final = (443, 80)
_CHUNK_BYTES: Final = 2**20
Write = Callable[[bytes], object]


@dataclass(frozen=True, slots=True, kw_only=True)
class LocalFile:
    """A file under an allowed folder, links and ``..`` resolved."""

    root: Path
    path: Path


@dataclass(frozen=True, slots=True, kw_only=True)
class WebFile:
    """A file on an allowed host."""

    url: str


@dataclass(frozen=True, slots=True, kw_only=True)
class StoredObject:
    """An object in an allowed bucket."""

    bucket: str
    key: str


Source = LocalFile | WebFile | StoredObject


class Assets:
    """Copies files from where the operator allows it; a few requests at a time.

    Safe to use from several threads.
    """

    def __init__(self, settings: Settings) -> None:
        self._seconds = settings.asset_seconds
        self._folders = tuple(folder.resolve() for folder in settings.asset_folders)
        self._hosts = frozenset(_host(text) for text in settings.asset_hosts)
        self._buckets = frozenset(settings.asset_buckets)
        self._endpoint = settings.asset_store_endpoint
        self._turns = threading.BoundedSemaphore(settings.asset_fetches)
        self._fetcher = Fetcher(
            allowed=[ip_network(text) for text in settings.asset_networks],
            certificates=settings.asset_certificates,
        )

    def source(self, href: str) -> Source:
        """Return where an address leads, if it is under an allowed root.

        Raises
        ------
        RejectedInput
            It is not (``asset-forbidden``); whether anything is there is not looked at.
        """
        match = _SCHEME.match(href)
        if match is None:
            raise _forbidden(
                "This address is relative, and the Item has no `self` link with an absolute "
                "address. Add one, or write the address in full."
            )
        match match[1].lower():
            case "file":
                return self._local(href)
            case "https" | "http":
                return self._web(href)
            case "s3":
                return self._stored(href)
        raise _forbidden("Files are read by `https:`, `file:` and `s3:` addresses.")

    @contextmanager
    def turn(self) -> Iterator[Deadline]:
        """Take one of the few turns to fetch; give the time by which all has to be there.

        Raises
        ------
        Unavailable
            Others have them all.
        """
        if not self._turns.acquire(blocking=False):
            raise Unavailable(
                "fetching-busy",
                "The service fetches the assets of other Items just now. Send this one again.",
                retry_after_seconds=15,
            )
        try:
            yield Deadline(self._seconds)
        finally:
            self._turns.release()

    def copy(self, source: Source, write: Write, *, deadline: Deadline, size: int) -> None:
        """Pass a file's bytes on, at most so many and until the deadline.

        Raises
        ------
        RejectedInput
            There is no such file, or it is too large.
        Unavailable
            It can't be had now, or not in time.
        """
        try:
            seconds = deadline.left()
            if isinstance(source, LocalFile):
                _copy(source, write, deadline=deadline, size=size)
                return
            url = source.url if isinstance(source, WebFile) else self._signed(source)
            self._fetcher.fetch(url, write, seconds=seconds, size=size)
        except TimeoutError as error:
            raise Unavailable(
                FILE_UNAVAILABLE, "The files did not arrive in time.", retry_after_seconds=60
            ) from error

    def _signed(self, source: StoredObject) -> str:
        return signed_address(source.bucket, source.key, endpoint=self._endpoint)

    def _local(self, href: str) -> LocalFile:
        parts = urlsplit(href)
        try:
            name = unquote(parts.path, errors="strict")
        except UnicodeDecodeError:
            name = ""
        is_plain = parts.netloc in ("", "localhost") and not (parts.query or parts.fragment)
        if not is_plain or not name.startswith("/") or "\0" in name:
            raise _forbidden("A `file:` address is `file:///` and the path of a file.")
        try:
            path = Path(name).resolve()
        except (OSError, RuntimeError):
            # A loop of links.
            raise _outside() from None
        for root in self._folders:
            if path != root and path.is_relative_to(root):
                return LocalFile(root=root, path=path)
        raise _outside()

    def _web(self, href: str) -> WebFile:
        target = read_url(href, longest=URL_CHARACTERS)
        host, port = target.host.lower(), port_of(target)
        # A host without a port is allowed at the ports that need not be written.
        is_allowed = (host, port) in self._hosts or (
            (host, None) in self._hosts and port in _DEFAULT_PORTS
        )
        if not is_allowed:
            raise _outside()
        return WebFile(url=href)

    def _stored(self, href: str) -> StoredObject:
        bucket, _, key = href.partition(":")[2].removeprefix("//").partition("/")
        if bucket not in self._buckets or not key:
            raise _outside()
        return StoredObject(bucket=bucket, key=key)


@contextmanager
def named(pointer: str) -> Iterator[None]:
    """Say of errors which file they are about."""
    try:
        yield
    except RejectedInput as error:
        code = ASSET_FORBIDDEN if error.code in (FORBIDDEN, INVALID) else error.code
        raise RejectedInput.at(pointer, error.detail, code=code) from error
    except Unavailable as error:
        raise Unavailable(
            FILE_UNAVAILABLE,
            error.detail,
            retry_after_seconds=error.retry_after_seconds,
            faults=[Fault(pointer=pointer, detail=error.detail)],
        ) from error


def _host(text: str) -> tuple[str, int | None]:
    """Return an allowed host and its port, None for those that need not be written."""
    parts = urlsplit(f"//{text}")
    return (parts.hostname or "").lower(), parts.port


def _forbidden(detail: str) -> RejectedInput:
    return RejectedInput(ASSET_FORBIDDEN, detail)


def _outside() -> RejectedInput:
    return _forbidden(
        "This address is not under a folder, host or bucket that the operator allows for assets "
        "(`FURROWLIGHT_ASSET_FOLDERS`, `…_HOSTS`, `…_BUCKETS`). Ask for it, or post the files."
    )


def _copy(source: LocalFile, write: Write, *, deadline: Deadline, size: int) -> None:
    left = size
    with ExitStack() as stack:
        file = stack.enter_context(os.fdopen(_opened(source), "rb"))
        while piece := file.read(_CHUNK_BYTES):
            left -= len(piece)
            if left < 0:
                raise too_large()
            write(piece)
            deadline.left()


def _opened(source: LocalFile) -> int:
    """Open a file step by step from its root, so that no link that appears meanwhile is followed.

    Raises
    ------
    RejectedInput
        There is nothing, or no regular file.
    """
    *folders, name = source.path.relative_to(source.root).parts
    try:
        handle = os.open(source.root, os.O_RDONLY | os.O_DIRECTORY)
        for folder in folders:
            handle = _step(handle, folder, os.O_DIRECTORY)
        # Opening a pipe would wait for its other end.
        handle = _step(handle, name, os.O_NONBLOCK)
    except OSError:
        raise _no_file() from None
    if not stat.S_ISREG(os.fstat(handle).st_mode):
        os.close(handle)
        raise _no_file()
    return handle


def _step(handle: int, name: str, how: int) -> int:
    try:
        return os.open(name, os.O_RDONLY | os.O_NOFOLLOW | how, dir_fd=handle)
    finally:
        os.close(handle)


def _no_file() -> RejectedInput:
    return RejectedInput(FILE_REFUSED, "There is no file that can be read at this address.")
