"""Metadata text of Landsat products: ``KEY = VALUE`` lines in nested groups.

Source: USGS, Landsat Collection 2 Level-2 data format control book. Keys recur between
groups with other values, so that nothing is ever looked up without its group.
"""

from collections.abc import Mapping
from typing import Final

from service.products.places import incomplete, invalid

TOP: Final = "LANDSAT_METADATA_FILE"
_DEPTH: Final = 16


def groups_of(text: str) -> Mapping[str, Mapping[str, str]]:
    """Return by group its own members; quotes are taken off.

    Raises
    ------
    RejectedInput
        A line is neither, a group does not end, or one is there twice.
    """
    reader = _Reader()
    for line in (line.strip() for line in text.splitlines()):
        if line == "END":
            break
        if line:
            reader.take(line)
    if reader.open_groups:
        raise _unbalanced()
    return reader.groups


class _Reader:
    """The groups so far, and those that are open, from the outermost."""

    def __init__(self) -> None:
        self.groups: dict[str, dict[str, str]] = {}
        self.open_groups: list[str] = []

    def take(self, line: str) -> None:
        """Take the next line."""
        key, sign, value = (part.strip() for part in line.partition("="))
        if not sign:
            raise incomplete("The MTL text has a line that is no `KEY = VALUE`.")
        if key == "GROUP":
            self._open(value)
        elif key == "END_GROUP":
            self._close(value)
        elif self.open_groups:
            self.groups[self.open_groups[-1]][key] = value.strip('"')

    def _open(self, name: str) -> None:
        if name in self.groups or len(self.open_groups) >= _DEPTH:
            raise invalid(
                "The MTL text has a group twice, so that its values can't be told apart. Fetch "
                "the bundle again from its source."
            )
        self.groups[name] = {}
        self.open_groups.append(name)

    def _close(self, name: str) -> None:
        if not self.open_groups or self.open_groups.pop() != name:
            raise _unbalanced()


def _unbalanced() -> Exception:
    return incomplete("The MTL text has a group that does not end.")
