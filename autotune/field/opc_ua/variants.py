"""Between variants on the wire and raw values.  Pure.

A node's variant type is learned from the node and kept: a number goes out in exactly the type that the
node holds, since servers refuse any other.
"""

import struct
from collections.abc import Mapping
from math import isfinite

from asyncua import ua
from asyncua.ua.status_codes import StatusCodes

from autotune.config.types import DataType
from autotune.errors import WriteForbidden
from autotune.field.codec import INTEGER_RANGES, nearest_held
from autotune.field.link import RawValue, Reading
from autotune.field.opc_ua.status import in_words, to_quality
from autotune.loop.quality import Quality

HELD_TYPES: Mapping[ua.VariantType, DataType] = {
    ua.VariantType.Boolean: DataType.BOOL,
    ua.VariantType.SByte: DataType.SINT,
    ua.VariantType.Byte: DataType.USINT,
    ua.VariantType.Int16: DataType.INT,
    ua.VariantType.UInt16: DataType.UINT,
    ua.VariantType.Int32: DataType.DINT,
    ua.VariantType.UInt32: DataType.UDINT,
    ua.VariantType.Int64: DataType.LINT,
    ua.VariantType.UInt64: DataType.ULINT,
    ua.VariantType.Float: DataType.REAL,
    ua.VariantType.Double: DataType.LREAL,
}
"""The IEC 61131-3 type of each variant that is a number; an enumeration travels as Int32."""

_VARIANT_TYPES = {held: variant for variant, held in HELD_TYPES.items()}


def held_type_of(answer: ua.DataValue) -> DataType | None:
    """The type of the number in an answer; ``None`` where it holds none."""
    variant = answer.Value
    if variant is None or variant.is_array or variant.Value is None:
        return None
    return HELD_TYPES.get(variant.VariantType)


def to_reading(answer: ua.DataValue, source_s: float | None = None) -> Reading:
    """One answer as a reading: a bad status, no number, an array or a text carry none, and say why."""
    code = StatusCodes.Good if answer.StatusCode is None else answer.StatusCode.value
    quality = to_quality(code)
    if quality is Quality.BAD:
        return Reading(None, Quality.BAD, reason=in_words(code))
    if answer.Value is None or held_type_of(answer) is None:
        return Reading(None, Quality.BAD, reason=_no_number(answer.Value))
    raw: RawValue = answer.Value.Value
    if not isfinite(raw):
        return Reading(None, Quality.BAD, reason=f"holds {raw}, which is no number")
    return Reading(raw, quality, source_s, "" if quality is Quality.GOOD else in_words(code))


def to_answer(held: DataType, raw: RawValue) -> ua.DataValue:
    """The bare value to write, without status or stamps, in exactly the node's type.

    Raises ``WriteForbidden`` for NaN, infinity, what the type can't hold, and a fraction in a whole number.
    """
    return ua.DataValue(ua.Variant(as_held(held, raw), _VARIANT_TYPES[held]), StatusCode=None)


def as_held(held: DataType, raw: RawValue) -> RawValue:
    """The number as a node of this type holds it.  Raises ``WriteForbidden`` where it can't."""
    if held is DataType.BOOL:
        if raw not in (0, 1):
            raise WriteForbidden(f"the node holds true or false, not {raw!r}")
        return bool(raw)
    if held in INTEGER_RANGES:
        low, high = INTEGER_RANGES[held]
        if isinstance(raw, bool) or not low <= raw <= high:
            raise WriteForbidden(f"the node holds {low} .. {high} ({held.value}), not {raw!r}")
        if raw != int(raw):
            hint = f'add type = "{held.value}" to the tag, so that it is rounded'
            raise WriteForbidden(f"the node holds whole numbers ({held.value}), not {raw!r}; {hint}")
        return int(raw)
    nearest = None if isinstance(raw, bool) else _nearest(held, raw)
    if nearest is None:
        raise WriteForbidden(f"the node holds finite numbers of a {held.value}, not {raw!r}")
    return nearest


def _nearest(held: DataType, raw: RawValue) -> float | None:
    try:
        return nearest_held(held, raw)
    except struct.error:
        return None


def _no_number(variant: ua.Variant | None) -> str:
    if variant is None or variant.Value is None:
        return "holds no value yet"
    if variant.is_array:
        return f"holds a list of {variant.VariantType.name}, not one number; name one of its elements' nodes"
    return f"holds a {variant.VariantType.name}, which is no number"
