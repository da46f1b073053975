"""The quality layer of a profile of one's own: a layer of its own, or a built-in one.

A layer of its own has classes or bits. A built-in one is taken as it is, or with rules of
one's own in place of, or beside, those that it has.
"""

import re
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any, Final

from service.errors import Fault, pointer_of
from service.spectral.indices import INDICES
from service.spectral.quality import SCL, ClassLayer, ClassRule, Loss, QualityClass, QualityLayer
from service.spectral.quality_bits import QA_PIXEL, BitField, BitLayer, BitRule, Drop
from service.spectral.roles import BandRole

BUILT_IN_LAYERS: Final[Mapping[str, ClassLayer | BitLayer]] = {
    layer.id: layer for layer in (SCL, QA_PIXEL)
}
TYPES: Final = {"uint8": 8, "int8": 7, "uint16": 16, "int16": 15, "uint32": 32, "int32": 31}
"""Data types of a layer, and the bits of a number of 0 or more in them."""

_NAME: Final = re.compile(r"[a-z][a-z0-9_]{0,39}")
# Figures of a look are named by the rule, those of a measure by its id, in one list.
_TAKEN: Final = frozenset({"none", *INDICES, *BandRole})
_QUALITY: Final = "quality"
_USUAL_TYPE: Final = "uint8"
_LARGEST_CLASS: Final = 65_535


def checked_layer(sent: Mapping[str, Any] | None, faults: list[Fault]) -> QualityLayer | None:
    """Return the layer that a profile describes; None if it has none, or a faulty one.

    Parameters
    ----------
    sent
        The member ``quality``, its types already checked.
    faults
        What is wrong is added here.
    """
    if sent is None:
        return None
    found: list[Fault] = []
    layer = _layer(sent, found)
    faults += found
    return None if found else layer


def _note(faults: list[Fault], *where: str | int, detail: str) -> None:
    faults.append(Fault(pointer=pointer_of((_QUALITY, *where)), detail=detail))


def _layer(sent: Mapping[str, Any], faults: list[Fault]) -> QualityLayer | None:
    kinds = [name for name in ("layer", "classes", "bits") if sent.get(name) is not None]
    if len(kinds) != 1:
        _note(
            faults,
            detail="A quality layer is one of three: a built-in `layer`, or one of your own with "
            "`classes`, or with `bits`. Send one of these members.",
        )
        return None
    (kind,) = kinds
    _check_members(sent, kind, faults)
    _check_rule_ids(sent.get("rules") or {}, faults)
    if faults:
        return None
    if kind == "layer":
        return _with_rules(sent, faults)
    return (_class_layer if kind == "classes" else _bit_layer)(sent, faults)


def _check_members(sent: Mapping[str, Any], kind: str, faults: list[Fault]) -> None:
    own = ("name", "nodata", "rules")
    for member in own if kind != "layer" else ():
        if sent.get(member) in (None, {}):
            _note(faults, member, detail=f"A quality layer of your own has a member `{member}`.")
    for member in (*own[:2], "dtype") if kind == "layer" else ():
        if sent.get(member) is not None:
            _note(
                faults, member, detail="A built-in layer says this by itself; leave the member out."
            )
    if kind == "layer" and sent["layer"] not in BUILT_IN_LAYERS:
        names = ", ".join(BUILT_IN_LAYERS)
        _note(faults, "layer", detail=f"No built-in layer has this name; there are {names}.")
    name = sent.get("name")
    if name is not None and (not _NAME.fullmatch(name) or name in BUILT_IN_LAYERS):
        _note(
            faults,
            "name",
            detail="A layer's name has lower-case letters, digits and _, begins with a letter, is "
            f"at most 40 long and none of {', '.join(BUILT_IN_LAYERS)}.",
        )


def _check_rule_ids(rules: Mapping[str, Any], faults: list[Fault]) -> None:
    if any(not _NAME.fullmatch(rule) or rule in _TAKEN for rule in rules):
        _note(
            faults,
            "rules",
            detail="A rule's id has lower-case letters, digits and _, begins with a letter, is at "
            "most 40 long, and is no index, no band role and not `none`.",
        )


def _with_rules(sent: Mapping[str, Any], faults: list[Fault]) -> QualityLayer:
    layer = BUILT_IN_LAYERS[sent["layer"]]
    rules = sent.get("rules") or {}
    if isinstance(layer, ClassLayer):
        own = {id_: _class_rule(id_, rule, layer.classes, faults) for id_, rule in rules.items()}
        return replace(layer, rules={**layer.rules, **own})
    bits = {id_: _bit_rule(id_, rule, layer.fields, faults) for id_, rule in rules.items()}
    return replace(layer, rules={**layer.rules, **bits})


def _types(dtype: str) -> tuple[str, ...]:
    """Return a type and those that hold all its numbers: a stack has one type for all bands."""
    wider = (name for name, bits in TYPES.items() if bits >= TYPES[dtype] and name != dtype)
    return (dtype, *wider)


def _loss(name: str | None) -> Loss | None:
    return None if name is None else Loss(name)


def _too_large(
    number: int, dtype: str, faults: list[Fault], *where: str | int, bits: int = 0
) -> None:
    """Note a number, or a place of bits, that the type can't hold."""
    if number.bit_length() > TYPES[dtype] or bits > TYPES[dtype]:
        _note(
            faults,
            *where,
            detail=f"This does not fit into numbers of the type {dtype}; name the file's own type "
            "as `dtype`.",
        )


def _class_layer(sent: Mapping[str, Any], faults: list[Fault]) -> QualityLayer | None:
    dtype, nodata = sent.get("dtype") or _USUAL_TYPE, sent["nodata"]
    _too_large(nodata, dtype, faults, "nodata")
    if max(nodata, *(one["value"] for one in sent["classes"])) > _LARGEST_CLASS:
        detail = f"Numbers of classes, and `nodata` beside them, go up to {_LARGEST_CLASS:,} here."
        _note(faults, "classes", detail=detail)
        return None
    classes: dict[int, QualityClass] = {}
    for place, one in enumerate(sent["classes"]):
        value, loss = one["value"], _loss(one.get("loss"))
        _too_large(value, dtype, faults, "classes", place, "value")
        if value in classes:
            _note(faults, "classes", place, "value", detail="Another class has this number.")
        if value == nodata and loss is not Loss.NODATA:
            _note(
                faults,
                "classes",
                place,
                "loss",
                detail="The class of the number `nodata` is lost to nodata; say so, or leave the "
                "class out.",
            )
        classes[value] = QualityClass(value=value, name=one["name"], loss=loss)
    classes.setdefault(nodata, QualityClass(value=nodata, name="no data", loss=Loss.NODATA))
    return ClassLayer(
        id=sent["name"],
        dtypes=_types(dtype),
        outside=nodata,
        classes=classes,
        water=frozenset(one["value"] for one in sent["classes"] if one.get("water")),
        rules={id_: _class_rule(id_, rule, classes, faults) for id_, rule in sent["rules"].items()},
    )


def _class_rule(
    id_: str, sent: Mapping[str, Any], classes: Mapping[int, QualityClass], faults: list[Fault]
) -> ClassRule:
    where = ("rules", id_)
    keep = sent.get("keep")
    if not keep or sent.get("drop") is not None or sent.get("need") is not None:
        detail = "A rule for classes has one member, `keep`: the numbers of those that are usable."
        _note(faults, *where, detail=detail)
    for place, value in enumerate(keep or ()):
        known = classes.get(value)
        if known is None or known.loss is Loss.NODATA:
            detail = "No class of the layer has this number, or one without data; leave it out."
            _note(faults, *where, "keep", place, detail=detail)
    return ClassRule(id=id_, keep=frozenset(keep or ()))


def _bit_layer(sent: Mapping[str, Any], faults: list[Fault]) -> QualityLayer:
    dtype, nodata = sent.get("dtype") or _USUAL_TYPE, sent["nodata"]
    _too_large(nodata, dtype, faults, "nodata")
    fields = _fields(sent["bits"], dtype, faults)
    water = [one["name"] for one in sent["bits"] if one.get("water")]
    if len(water) > 1:
        _note(faults, "bits", detail="Only one field can tell of water.")
    return BitLayer(
        id=sent["name"],
        dtypes=_types(dtype),
        outside=nodata,
        silent=frozenset({nodata}),
        width=TYPES[dtype],
        fields=fields,
        fill=None,
        water=fields[water[0]] if water else None,
        rules={id_: _bit_rule(id_, rule, fields, faults) for id_, rule in sent["rules"].items()},
    )


def _fields(
    sent: Sequence[Mapping[str, Any]], dtype: str, faults: list[Fault]
) -> dict[str, BitField]:
    fields: dict[str, BitField] = {}
    for place, one in enumerate(sent):
        name, bit, width = one["name"], one["bit"], one["width"]
        if not _NAME.fullmatch(name) or name in fields:
            _note(
                faults,
                "bits",
                place,
                "name",
                detail="A field's name has lower-case letters, digits and _, begins with a letter, "
                "is at most 40 long, and is there once.",
            )
        _too_large(0, dtype, faults, "bits", place, "bit", bits=bit + width)
        fields[name] = BitField(name=name, bit=bit, width=width, loss=_loss(one.get("loss")))
    return fields


def _bit_rule(
    id_: str, sent: Mapping[str, Any], fields: Mapping[str, BitField], faults: list[Fault]
) -> BitRule:
    where = ("rules", id_)
    drop, need = sent.get("drop"), sent.get("need")
    if sent.get("keep") is not None or (drop is None and need is None):
        detail = (
            "A rule for bits has `drop`, the fields that must be zero or below `at_least`, and "
            "`need`, those that must not be zero; one of them at least."
        )
        _note(faults, *where, detail=detail)
    # Cells without data are dropped by every rule, and for that reason first.
    drops = [Drop(field=field) for field in fields.values() if field.loss is Loss.NODATA]
    known = f"The layer has no such field; it has {', '.join(fields)}."
    for place, entry in enumerate(drop or ()):
        field, at_least = fields.get(entry["field"]), entry["at_least"]
        if field is None:
            _note(faults, *where, "drop", place, "field", detail=known)
        elif at_least >= 1 << field.width:
            detail = "The field never is so high, so that this would drop nothing."
            _note(faults, *where, "drop", place, "at_least", detail=detail)
        else:
            drops.append(Drop(field=field, at_least=at_least))
    for place, name in enumerate(need or ()):
        if name not in fields:
            _note(faults, *where, "need", place, detail=known)
    needed = tuple(fields[name] for name in need or () if name in fields)
    return BitRule(id=id_, drop=tuple(drops), need=needed)
