"""What can go wrong, sorted by what the caller can do about it.

::

    FurrowlightError
    ├── RejectedInput   mend the input and send it again
    ├── NotAllowed      use another key
    ├── NotFound        ask for something else
    ├── Conflict        look at what is there, then decide
    └── Unavailable     send the same again later

No HTTP status lives here: `api.problems` and `cli` map the kinds in one table each.
An exception that is none of these is our own bug.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import Final, TypeVar

MAX_ERRORS: Final = 100
"""As many faults are listed; the rest are counted."""
Item = TypeVar("Item")


def pointer_of(location: Sequence[str | int]) -> str:
    """Return a location in a body as JSON pointer (RFC 6901)."""
    return "".join("/" + str(step).replace("~", "~0").replace("/", "~1") for step in location)


@dataclass(frozen=True, slots=True, kw_only=True)
class Fault:
    """One thing wrong with an input, and where.

    `pointer` is an RFC 6901 JSON pointer into the body, `parameter` the name of a
    query parameter; one of them is set unless the fault concerns the whole input.
    `detail` says what is wrong and how to mend it, without echoing the input.
    """

    detail: str
    pointer: str | None = None
    parameter: str | None = None

    def as_dict(self) -> dict[str, str]:
        """Return the fault as members of a problem document."""
        named = {"pointer": self.pointer, "parameter": self.parameter, "detail": self.detail}
        return {name: text for name, text in named.items() if text is not None}


class FurrowlightError(Exception):
    """Root of the errors that this service raises on purpose.

    Parameters
    ----------
    code
        Short stable name of the kind of problem, such as ``ref-taken``; each has a page
        under ``/problems/``.
    detail
        A sentence for the person who reads it: what is wrong, and how to mend it.
    faults
        The single things wrong with the input, if it can be said more closely.
    """

    def __init__(self, code: str, detail: str, faults: Sequence[Fault] = ()) -> None:
        super().__init__(detail)
        self.code = code
        self.detail = detail
        self.faults = tuple(faults)


class RejectedInput(FurrowlightError):
    """The input breaks a rule; nothing of it was kept."""

    @classmethod
    def at(cls, pointer: str, detail: str, *, code: str = "invalid-input") -> "RejectedInput":
        """Reject the input for one fault, named by a JSON pointer."""
        return cls(code, detail, [Fault(pointer=pointer, detail=detail)])

    @classmethod
    def parameter(
        cls, name: str, detail: str, *, code: str = "invalid-parameter"
    ) -> "RejectedInput":
        """Reject the request for one query parameter."""
        return cls(code, detail, [Fault(parameter=name, detail=detail)])


class NotAllowed(FurrowlightError):
    """The key is missing, unknown or too small for this."""


class NotFound(FurrowlightError):
    """There is no such thing, or not for this key."""


class Conflict(FurrowlightError):
    """The input is fine, but what is there already stands against it."""


class Unavailable(FurrowlightError):
    """The service can't do this now; the same request will work later."""

    def __init__(
        self,
        code: str,
        detail: str,
        *,
        retry_after_seconds: int = 30,
        faults: Sequence[Fault] = (),
    ) -> None:
        super().__init__(code, detail, faults)
        self.retry_after_seconds = retry_after_seconds


@dataclass(slots=True)
class Faults:
    """The faults of a batch, by item; `names` are what an item is called where it stands.

    A batch is all or nothing, or, if preferred, the good items with a list of the rest.
    """

    faults: list[Fault] = field(default_factory=list)
    rejected: set[int] = field(default_factory=set)
    codes: set[str] = field(default_factory=set)
    names: dict[int, str] = field(default_factory=dict)

    def add(self, item: int, fault: Fault, code: str = "invalid-input") -> None:
        """Note a fault of an item, by its place in the batch."""
        if item in self.names:
            fault = replace(fault, detail=f"{self.names[item]}: {fault.detail}")
        self.faults.append(fault)
        self.rejected.add(item)
        self.codes.add(code)

    def collect(self, item: int, check: Callable[[], Item]) -> Item | None:
        """Return what a check gives, or note what it rejects and return None."""
        try:
            return check()
        except RejectedInput as error:
            for fault in error.faults:
                self.add(item, fault, error.code)
        return None

    def refuse(self, *, unless_lenient: bool) -> None:
        """Refuse the whole batch for its faults, unless good items may land alone.

        Raises
        ------
        RejectedInput, Conflict
            Conflict if every fault is one with what is there already.
        """
        if not self.faults or unless_lenient:
            return
        count = len(self.faults)
        detail = (
            f"{self.faults[0].detail} Nothing was kept."
            if count == 1
            else f"{count} things are wrong; see `errors`. Nothing was kept."
        )
        code = next(iter(self.codes)) if len(self.codes) == 1 else "invalid-input"
        is_conflict = code in ("ref-taken", "season-overlaps")
        raise (Conflict if is_conflict else RejectedInput)(code, detail, self.faults)

    def listed(self) -> list[dict[str, str]]:
        """Return the faults for an answer, at most as many as a problem document lists."""
        return [fault.as_dict() for fault in self.faults[:MAX_ERRORS]]
