"""What refs and other short texts may be, whichever way they come."""

import unicodedata
from typing import Final

MAX_REF: Final = 100
MAX_TEXT: Final = 100
MAX_NAME: Final = 200
_SPREADSHEET_FORMULA: Final = ("=", "+", "-", "@")


def checked_ref(ref: str) -> str:
    """Return a ref if it is safe in URLs, logs and spreadsheets, and in Unicode form NFC."""
    text = checked_text(ref)
    if "/" in text or text in (".", ".."):
        raise ValueError("a ref contains no / and is neither . nor ..")
    return text


def checked_text(text: str) -> str:
    """Return a text if it is one printable line, in Unicode form NFC, and no formula."""
    if not text.isprintable() or text != text.strip() or not text:
        raise ValueError("send printable characters without a blank at either end")
    if not unicodedata.is_normalized("NFC", text):
        raise ValueError("send Unicode in its composed form (NFC)")
    if text.startswith(_SPREADSHEET_FORMULA):
        raise ValueError("do not begin with = + - or @: a spreadsheet would take it for a formula")
    return text
