"""From a file of outlines to a batch of parcels; small files at once, large ones as a job."""

import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, Final

from service.errors import Fault, RejectedInput
from service.outlines.features import FILE, Drawing, Feature, OutlineFile, too_large
from service.outlines.files import open_outlines
from service.settings import Settings
from service.store.names import MAX_NAME, MAX_REF, MAX_TEXT, checked_ref, checked_text
from service.store.parcel_batches import Limits, ParcelBatch, Places
from service.store.parcels import ParcelChange

FEATURES_AT_ONCE: Final = 5_000
LIMITS_AT_ONCE: Final = Limits()
SECONDS_AT_ONCE: Final = 10.0
"""What a request takes: as many features, vertices and seconds. Beyond that a job is promised."""
LIMITS_OF_A_JOB: Final = Limits(vertices=5_000_000, repaired=50_000)
SECONDS_OF_A_JOB: Final = 1_800.0
_WHOLE_BELOW: Final = 2.0**53
_RULES: Final[Mapping[str, tuple[int, Callable[[str], str]]]] = {
    "ref": (MAX_REF, checked_ref),
    "name": (MAX_NAME, checked_text),
    "holding": (MAX_REF, checked_ref),
    "crop": (MAX_TEXT, checked_text),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """What was asked for with a file: which fields hold what, and how faults are taken."""

    ref_field: str
    name_field: str | None
    holding_field: str | None
    crop_field: str | None
    dry_run: bool
    is_lenient: bool
    repair: bool

    @property
    def fields(self) -> dict[str, str]:
        """The file's fields by the member that each fills."""
        named = {name: getattr(self, f"{name}_field") for name in _RULES}
        return {name: field for name, field in named.items() if field is not None}

    def as_dict(self) -> dict[str, Any]:
        """Return it for a job's row."""
        return asdict(self)


def batch_at_once(path: Path, asked: Asked, settings: Settings) -> ParcelBatch | None:
    """Return the parcels of a file, or None if they are more than a request takes.

    Raises
    ------
    RejectedInput
        The file as a whole is not what it should be. Faults of features are in the batch.
    """
    started = time.monotonic()
    batch = _empty(asked)
    with open_outlines(path) as file:
        _check_fields(file, asked)
        if file.count() > FEATURES_AT_ONCE:
            return None
        for _ in _taken(batch, file, asked, settings):
            is_over = (
                batch.vertices > LIMITS_AT_ONCE.vertices
                or batch.repaired > LIMITS_AT_ONCE.repaired
                or time.monotonic() - started > SECONDS_AT_ONCE
            )
            if is_over:
                return None
    return batch


def whole_batch(
    path: Path, asked: Asked, settings: Settings, *, tell: Callable[[float], None]
) -> ParcelBatch:
    """Return the parcels of a file of any size, telling meanwhile which share of it is read.

    Raises
    ------
    RejectedInput
        The file as a whole is not what it should be, or takes too long.
    """
    started = time.monotonic()
    batch = _empty(asked)
    with open_outlines(path) as file:
        _check_fields(file, asked)
        count = max(1, file.count())
        for done in _taken(batch, file, asked, settings):
            tell(min(1.0, done / count))
            if time.monotonic() - started > SECONDS_OF_A_JOB:
                raise too_large("Checking the file's outlines takes too long. Send it in parts.")
    return batch


def _empty(asked: Asked) -> ParcelBatch:
    members = {name: asked.fields.get(name) for name in _RULES}
    places = Places(features=f"{FILE}/features", members=members)
    return ParcelBatch(places=places, limits=LIMITS_OF_A_JOB)


def _check_fields(file: OutlineFile, asked: Asked) -> None:
    """Refuse fields that the file does not have, each by the part that names it."""
    detail = (
        "The file has no such field of text or numbers. Names are told apart by upper and lower "
        "case; a Shapefile cuts them after ten characters."
    )
    missing = [name for name, field in asked.fields.items() if not file.has_field(field)]
    if missing:
        faults = [Fault(pointer=f"/{name}_field", detail=detail) for name in missing]
        raise RejectedInput("invalid-input", detail, faults)


def _taken(
    batch: ParcelBatch, file: OutlineFile, asked: Asked, settings: Settings
) -> Iterator[int]:
    """Take the file's features into the batch one by one, yielding how many were taken."""
    drawing = Drawing(repair=asked.repair, area_limit_ha=settings.parcel_area_limit_ha)
    if file.warning is not None:
        batch.warn(FILE, file.warning)
    fields = list(dict.fromkeys(asked.fields.values()))
    for item, feature in enumerate(file.features(fields)):
        if feature.name:
            batch.faults.names[item] = feature.name
        batch.take(item, lambda: _change(batch.places, item, feature, file, asked, drawing))  # noqa: B023
        yield item + 1


def _change(
    places: Places,
    item: int,
    feature: Feature,
    file: OutlineFile,
    asked: Asked,
    drawing: Drawing,
) -> ParcelChange:
    """Return what a feature says of a parcel; an empty field leaves what is there as it is."""
    found: dict[str, str] = {}
    faults: list[Fault] = []
    for name, field in asked.fields.items():
        try:
            text = _text_of(feature.attributes.get(field))
            if text is not None:
                found[name] = _checked(name, text)
        except ValueError as error:
            faults.append(Fault(pointer=places.member(item, name), detail=f"{error}."))
    if "ref" not in found and not faults:
        faults.append(Fault(pointer=places.member(item, "ref"), detail="A parcel needs a ref."))
    if faults:
        raise RejectedInput("invalid-input", "A field is not what it should be.", faults)
    outline = file.outline(feature, drawing, pointer=places.geometry(item))
    return ParcelChange(ref=found.pop("ref"), outline=outline, given=found)


def _text_of(value: object) -> str | None:
    """Return a field's value as text, None if it is empty."""
    if value is None or value == "":
        return None
    if isinstance(value, float) and value.is_integer() and abs(value) < _WHOLE_BELOW:
        value = int(value)
    if isinstance(value, bool) or not isinstance(value, str | int):
        raise ValueError("send text or a whole number")  # noqa: TRY004 - a fault like the others
    return str(value)


def _checked(name: str, text: str) -> str:
    longest, check = _RULES[name]
    # What the encoding can't be was kept as lone surrogates.
    if any("\ud800" <= letter <= "\udfff" for letter in text):
        raise ValueError(
            "the text is not in the encoding that the file names; a Shapefile names it in a .cpg "
            "file beside it"
        )
    if len(text) > longest:
        raise ValueError(f"send at most {longest} characters")
    return check(text)
