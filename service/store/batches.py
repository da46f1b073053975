"""Long lists cut for databases that take only so many parameters a statement."""

from collections.abc import Iterable, Iterator
from itertools import islice
from typing import Final, TypeVar

T = TypeVar("T")
SIZE: Final = 5_000


def in_batches(values: Iterable[T]) -> Iterator[list[T]]:
    """Yield the values in lists of at most `SIZE`."""
    rest = iter(values)
    while batch := list(islice(rest, SIZE)):
        yield batch
