"""Batches: all or nothing, or, if preferred, the good items with a list of the rest."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from typing import TypeVar

from pydantic import BaseModel, ValidationError

from service.api.problems import MAX_ERRORS, pointer_of
from service.errors import Conflict, Fault, RejectedInput

Model = TypeVar("Model", bound=BaseModel)
Item = TypeVar("Item")


@dataclass(slots=True)
class Faults:
    """The faults of a batch, by item; `lines` tells on which line of a CSV body an item ends."""

    faults: list[Fault] = field(default_factory=list)
    rejected: set[int] = field(default_factory=set)
    codes: set[str] = field(default_factory=set)
    lines: dict[int, int] = field(default_factory=dict)

    def add(self, item: int, fault: Fault, code: str = "invalid-input") -> None:
        """Note a fault of an item, by its place in the batch."""
        if item in self.lines:
            fault = replace(fault, detail=f"Line {self.lines[item]}: {fault.detail}")
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


def model_of(model: type[Model], value: object, pointer: str) -> Model:
    """Return a value as a wire model.

    Raises
    ------
    RejectedInput
        With a fault at each place that is wrong, below `pointer`.
    """
    try:
        return model.model_validate(value)
    except ValidationError as error:
        raise RejectedInput(
            "invalid-input", "The item is not what it should be.", list(_faults(error, pointer))
        ) from error


def _faults(error: ValidationError, pointer: str) -> Iterable[Fault]:
    for entry in error.errors(include_url=False, include_input=False, include_context=False):
        detail = str(entry["msg"]).removeprefix("Value error, ")
        yield Fault(pointer=pointer + pointer_of(entry["loc"]), detail=f"{detail}.")
