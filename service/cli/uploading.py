"""One scene as a body: its files as they stream from disk, or the STAC Item that names them."""

import base64
import hashlib
import json
import secrets
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from service.products.places import Span

Tell = Callable[[float], None]
"""Takes how far the work is, from 0 to 1."""
_SCENE: Final = "scene"


@dataclass(frozen=True, slots=True, kw_only=True)
class Offer:
    """A scene, ready to be posted.

    Attributes
    ----------
    scene
        The ``scene`` part that it is, or that the service makes of it.
    files
        SHA-256 by part, None if the files are elsewhere.
    headers, params
        Of the request.
    body
        Gives the body anew for each attempt, telling how far it is.
    """

    scene: Mapping[str, Any]
    files: Mapping[str, str] | None
    headers: Mapping[str, str]
    params: Mapping[str, str]
    body: Callable[[Tell], Iterator[bytes]]


def offer_of_files(
    scene: Mapping[str, Any], files: Mapping[str, Span], *, is_replacing: bool
) -> Offer:
    """Return a scene whose files are on this machine, each read once."""
    scene = {**scene, **({"replace": True} if is_replacing else {})}
    upload = Upload(scene, files)
    measured = upload.measured(lambda _: None)
    return Offer(
        scene=scene,
        files=measured.files,
        headers={
            "Content-Type": upload.content_type,
            "Content-Length": str(measured.size),
            "Content-Digest": measured.content_digest,
        },
        params={},
        body=upload.body,
    )


def offer_of_item(scene: Mapping[str, Any], path: Path, *, is_replacing: bool) -> Offer:
    """Return an Item whose files the service is to fetch."""
    content = path.read_bytes()
    return Offer(
        scene=scene,
        files=None,
        headers={
            "Content-Type": "application/geo+json",
            "Content-Length": str(len(content)),
            "Content-Digest": _content_digest(hashlib.sha256(content).digest()),
        },
        params={"replace": "true"} if is_replacing else {},
        body=lambda _: iter((content,)),
    )


def _content_digest(digest: bytes) -> str:
    return f"sha-256=:{base64.b64encode(digest).decode()}:"


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured:
    """What one reading of all files gave.

    Attributes
    ----------
    files
        SHA-256 by part, in hexadecimal digits.
    content_digest
        The header of the whole body (RFC 9530).
    size
        Bytes of the body.
    """

    files: Mapping[str, str]
    content_digest: str
    size: int


class Upload:
    """A scene and its files as multipart/form-data (RFC 7578); no file is ever held whole.

    Parameters
    ----------
    scene
        The ``scene`` part.
    files
        Where each file part is.
    """

    def __init__(self, scene: Mapping[str, Any], files: Mapping[str, Span]) -> None:
        self._scene = json.dumps(scene, ensure_ascii=False).encode()
        self._files = files
        self._boundary = secrets.token_hex(16)
        self._bytes = sum(span.size for span in files.values()) or 1

    @property
    def content_type(self) -> str:
        """The body's media type."""
        return f"multipart/form-data; boundary={self._boundary}"

    def measured(self, tell: Tell) -> Measured:
        """Read all files once and return their digests, and the body's."""
        whole, parts, size = hashlib.sha256(), dict[str, Any](), 0
        for part, piece, is_content in self._pieces(tell):
            size += len(piece)
            whole.update(piece)
            if is_content and part != _SCENE:
                parts.setdefault(part, hashlib.sha256()).update(piece)
        return Measured(
            files={part: hashed.hexdigest() for part, hashed in parts.items()},
            content_digest=_content_digest(whole.digest()),
            size=size,
        )

    def body(self, tell: Tell) -> Iterator[bytes]:
        """Yield the body, telling how far it is."""
        for _, piece, _ in self._pieces(tell):
            yield piece

    def _pieces(self, tell: Tell) -> Iterator[tuple[str, bytes, bool]]:
        """Yield part, bytes, and whether they are the part's content."""
        done = 0
        for part, chunks in self._contents():
            kind = "application/json" if part == _SCENE else "application/octet-stream"
            # Under a name of our own: the service goes by content, and names may tell of people.
            name = "" if part == _SCENE else f'; filename="{part}"'
            yield (
                part,
                (
                    f"--{self._boundary}\r\n"
                    f'Content-Disposition: form-data; name="{part}"{name}\r\n'
                    f"Content-Type: {kind}\r\n\r\n"
                ).encode(),
                False,
            )
            for piece in chunks:
                yield part, piece, True
                done += len(piece) if part != _SCENE else 0
                tell(done / self._bytes)
            yield part, b"\r\n", False
        yield _SCENE, f"--{self._boundary}--\r\n".encode(), False

    def _contents(self) -> Iterator[tuple[str, Iterator[bytes]]]:
        yield _SCENE, iter((self._scene,))
        for part, span in self._files.items():
            yield part, span.chunks()
