"""The table of a Shapefile: dBASE, as far as refs, names and crops need it.

Layout: the dBASE III table file, as the ESRI Shapefile Technical Description (July 1998,
page 25) refers to it. Which byte of the header names which code page is common practice.
"""

import codecs
import re
import struct
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import IO, Final

from service.errors import RejectedInput
from service.outlines.features import unreadable

_HEAD: Final = struct.Struct("<B3xLHH17xB2x")
_FIELD: Final = struct.Struct("<11sc4xBB14x")
_END_OF_FIELDS: Final = b"\r"
_MOST_FIELDS: Final = 2_046
_DELETED: Final = b"*"
_TEXT: Final = "C"
_DATE: Final = "D"
_NUMBERS: Final = "NF"
_CODE_PAGES: Final = (
    *(437, 737, 775, 850, 852, 855, 857, 858, 860, 861, 862, 863, 864, 865, 866, 869, 874),
    *(932, 936, 949, 950, 1250, 1251, 1252, 1253, 1254, 1255, 1256, 1257, 1258),
)
_OTHER_ENCODINGS: Final = (
    *("utf-8", "ascii", "big5", "shift_jis", "euc_jp", "euc_kr", "gbk", "gb2312", "gb18030"),
    *("koi8-r", "koi8-u", *(f"iso8859-{part}" for part in range(1, 17) if part != 12)),
)
_PAGE_OF_BYTE: Final[Mapping[int, int]] = dict(
    [
        *[(0x01, 437), (0x02, 850), (0x03, 1252), (0x13, 932), (0x26, 866), (0x4D, 936)],
        *[(0x4E, 949), (0x4F, 950), (0x50, 874), (0x57, 1252), (0x58, 1252), (0x59, 1252)],
        *[(0x64, 852), (0x65, 866), (0x6A, 737), (0x6B, 857), (0xC8, 1250), (0xC9, 1251)],
        *[(0xCA, 1254), (0xCB, 1253), (0xCC, 1257)],
    ]
)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Field:
    """A column: where its cell is in a row, and what it holds."""

    kind: str
    start: int
    length: int


class Table:
    """An open table; cells that are not in its encoding keep their bytes as lone surrogates."""

    def __init__(self, file: IO[bytes], *, encoding: str | None) -> None:
        self._file = file
        head = file.read(_HEAD.size)
        if len(head) < _HEAD.size:
            raise _damaged()
        _, rows, self._head_bytes, self._row_bytes, page = _HEAD.unpack(head)
        self.rows: int = rows
        named = _PAGE_OF_BYTE.get(page)
        self._encoding = encoding or (f"cp{named}" if named else "ascii")
        self._fields = self._read_fields()
        self._check_size()

    def _read_fields(self) -> dict[str, _Field]:
        fields: dict[str, _Field] = {}
        start = 1
        for _ in range(_MOST_FIELDS):
            entry = self._file.read(_FIELD.size)
            if entry[:1] == _END_OF_FIELDS:
                return fields
            if len(entry) < _FIELD.size or self._file.tell() > self._head_bytes:
                raise _damaged()
            raw, kind, length, _ = _FIELD.unpack(entry)
            name = raw.partition(b"\0")[0].decode(self._encoding, "replace")
            field = _Field(kind=kind.decode("latin-1"), start=start, length=length)
            fields.setdefault(name, field)
            start += length
            if start > self._row_bytes:
                raise _damaged()
        raise _damaged()

    def _check_size(self) -> None:
        size = self._file.seek(0, 2)
        if self._row_bytes < 1 or self._head_bytes + self.rows * self._row_bytes > size:
            raise _damaged()

    def has_field(self, name: str) -> bool:
        """Whether the table has a column of text or numbers with this name."""
        field = self._fields.get(name)
        return field is not None and field.kind in (_TEXT, _DATE, *_NUMBERS)

    def cells(self, names: Sequence[str]) -> Iterator[dict[str, object] | None]:
        """Yield the named cells of each row, None for a row that was deleted."""
        fields = {name: self._fields[name] for name in names}
        self._file.seek(self._head_bytes)
        for _ in range(self.rows):
            row = self._file.read(self._row_bytes)
            if row[:1] == _DELETED:
                yield None
            else:
                yield {name: self._value(row, field) for name, field in fields.items()}

    def _value(self, row: bytes, field: _Field) -> object:
        cell = row[field.start : field.start + field.length]
        if field.kind == _TEXT:
            return cell.rstrip(b"\0 ").decode(self._encoding, "surrogateescape")
        text = cell.strip(b"\0 ").decode("ascii", "replace")
        # Stars fill a number that did not fit, or that nobody knows.
        if not text or not text.strip("*"):
            return None
        if field.kind == _DATE:
            return text
        try:
            return int(text)
        except ValueError:
            return _fraction(text)


def _fraction(text: str) -> object:
    """Return a number, or the text as it stands if it is none."""
    try:
        return float(text)
    except ValueError:
        return text


def encoding_named(text: str) -> str:
    """Return the codec that the words of a ``.cpg`` file name.

    Raises
    ------
    RejectedInput
        They name none that is known here.
    """
    word = re.sub(r"[\s_-]+", "", text).lower()
    part = re.fullmatch(r"(?:iso)?8859(\d{1,2})", word)
    page = re.fullmatch(r"(?:ansi|cp|windows|win|oem|ibm)?(\d{3,4})", word)
    if word in ("utf8", "65001"):
        return "utf-8"
    if page is not None and int(page[1]) in _CODE_PAGES:
        return f"cp{page[1]}"
    name = f"iso8859-{part[1]}" if part is not None else text.strip()
    try:
        found = codecs.lookup(name).name
    except (LookupError, ValueError) as error:
        raise _unknown_encoding() from error
    if found not in _OTHER_ENCODINGS:
        raise _unknown_encoding()
    return found


def _unknown_encoding() -> RejectedInput:
    return unreadable(
        "The .cpg file of the Shapefile names an encoding that is not known here. Write the layer "
        "again as UTF-8."
    )


def _damaged() -> RejectedInput:
    return unreadable("The Shapefile's table (.dbf) is damaged or cut short. Write it again.")
