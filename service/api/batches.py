"""Items of a batch as wire models, with a fault at each place that is wrong."""

from collections.abc import Iterable
from typing import TypeVar

from pydantic import BaseModel, ValidationError

from service.errors import Fault, RejectedInput, pointer_of

Model = TypeVar("Model", bound=BaseModel)


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
