"""GeoJSON files (RFC 7946): WGS 84 by definition."""

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import IO, Any, Final

from service.errors import RejectedInput
from service.outlines.features import FILE, Drawing, Feature, unreadable
from service.streams import json_items, json_length, json_members
from service.zonal.boundary import Outline, outline_from_geojson

_WGS84_NAMES: Final = (
    "urn:ogc:def:crs:OGC:1.3:CRS84",
    "urn:ogc:def:crs:OGC::CRS84",
    "urn:ogc:def:crs:EPSG::4326",
    "EPSG:4326",
)
"""As older writers say what the standard has fixed since, coordinates being the same."""


class GeoJson:
    """An open GeoJSON FeatureCollection."""

    warning: str | None = None

    def __init__(self, file: IO[bytes]) -> None:
        self._file = file
        with _of_the_file():
            members = json_members(file, but="features")
            if members.get("type") != "FeatureCollection" or (
                members.get("features") != "start_array"
            ):
                raise unreadable("A GeoJSON file of parcels is a FeatureCollection (RFC 7946).")
            if "crs" in members:
                self._check_crs()

    def _check_crs(self) -> None:
        """Refuse coordinates that are not WGS 84; RFC 7946 has taken the member away."""
        value = next(json_items(self._file, "crs"), None)
        self._file.seek(0)
        properties = value.get("properties") if isinstance(value, Mapping) else None
        name = properties.get("name") if isinstance(properties, Mapping) else None
        if value is not None and name not in _WGS84_NAMES:
            raise RejectedInput.at(
                FILE,
                "The file names a coordinate reference system other than WGS 84, which GeoJSON no "
                "longer can (RFC 7946, section 4). Write it in WGS 84, or as GeoPackage.",
                code="unsupported-crs",
            )

    def has_field(self, name: str) -> bool:  # noqa: ARG002 - each feature has its own
        """Whether features may have a property of this name: each has its own."""
        return True

    def count(self) -> int:
        """Return how many features there are."""
        with _of_the_file():
            return json_length(self._file, "features")

    def features(self, fields: Sequence[str]) -> Iterator[Feature]:
        """Yield the features, one in memory at a time."""
        self._file.seek(0)
        with _of_the_file():
            for value in json_items(self._file, "features.item"):
                yield _feature(value, fields)

    def outline(self, feature: Feature, drawing: Drawing, *, pointer: str) -> Outline:
        """Return a feature's outline."""
        return outline_from_geojson(
            feature.geometry,
            pointer=pointer,
            repair=drawing.repair,
            area_limit_ha=drawing.area_limit_ha,
        )


def _feature(value: Any, fields: Sequence[str]) -> Feature:
    """Return a feature with its wanted properties; one named ``id`` may be the feature's own."""
    whole = value if isinstance(value, Mapping) and value.get("type") == "Feature" else {}
    properties = whole.get("properties")
    known = dict(properties) if isinstance(properties, Mapping) else {}
    if "id" in whole:
        known.setdefault("id", whole["id"])
    return Feature(
        name="",
        attributes={name: known[name] for name in fields if name in known},
        geometry=whole.get("geometry"),
    )


@contextmanager
def _of_the_file() -> Iterator[None]:
    """Say of the file what the reader of JSON says of a body."""
    try:
        yield
    except RejectedInput as error:
        if error.code == "malformed-json":
            raise unreadable("The file is not valid JSON.") from error
        raise RejectedInput.at(FILE, error.detail, code=error.code) from error
