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

from collections.abc import Sequence
from dataclasses import dataclass


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

    def __init__(self, code: str, detail: str, *, retry_after_seconds: int = 30) -> None:
        super().__init__(code, detail)
        self.retry_after_seconds = retry_after_seconds
