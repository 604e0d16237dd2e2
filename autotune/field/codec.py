"""Between what the controller's memory holds and numbers.  Pure.

Three steps, each with its way back: words of a register table <-> raw value (``from_words``,
``to_words``); raw value <-> engineering unit (``to_eu``, ``representable``); current of an analogue
input -> quality (``judge_current``).  NaN and infinity pass in neither direction.
"""

import struct
import sys
from collections.abc import Sequence
from math import isfinite

from autotune.config.types import DataType, ModbusTag, Ne43, Order, RegisterTable, Tag
from autotune.errors import WriteForbidden
from autotune.field.link import RawValue, Reading
from autotune.loop.quality import Quality

INTEGER_RANGES: dict[DataType, tuple[int, int]] = {
    DataType.SINT: (-(2**7), 2**7 - 1),
    DataType.USINT: (0, 2**8 - 1),
    DataType.INT: (-(2**15), 2**15 - 1),
    DataType.UINT: (0, 2**16 - 1),
    DataType.DINT: (-(2**31), 2**31 - 1),
    DataType.UDINT: (0, 2**32 - 1),
    DataType.LINT: (-(2**63), 2**63 - 1),
    DataType.ULINT: (0, 2**64 - 1),
}
"""Least and greatest of each integer type (IEC 61131-3, elementary data types)."""

_BIG_ENDIAN_FORMATS = {
    DataType.INT: ">h",
    DataType.UINT: ">H",
    DataType.DINT: ">i",
    DataType.UDINT: ">I",
    DataType.LINT: ">q",
    DataType.ULINT: ">Q",
    DataType.REAL: ">f",
    DataType.LREAL: ">d",
}
_WIDTHS = {kind: struct.calcsize(layout) // 2 for kind, layout in _BIG_ENDIAN_FORMATS.items()}
_GREATEST = {DataType.REAL: (2.0 - 2.0**-23) * 2.0**127, DataType.LREAL: sys.float_info.max}
_BIT_TABLES = (RegisterTable.COIL, RegisterTable.DISCRETE)
_FAILURE_LOW_PCT, _FAILURE_HIGH_PCT = -2.5, 106.25  # 3.6 and 21 mA
_MEASURING_LOW_PCT, _MEASURING_HIGH_PCT = -1.25, 103.125  # 3.8 and 20.5 mA


def held_type(tag: Tag) -> DataType:
    """The type of the tag's raw value; a coil, a discrete input or a bit of a register is a ``BOOL``.

    An OPC UA node whose type the file leaves open counts as ``LREAL``.
    """
    if isinstance(tag, ModbusTag):
        return DataType.BOOL if tag.table in _BIT_TABLES or tag.bit is not None else tag.type
    return tag.type or DataType.LREAL


def width(tag: ModbusTag) -> int:
    """How many addresses of its table the tag takes: bits of a bit table, registers otherwise."""
    return 1 if held_type(tag) is DataType.BOOL else _WIDTHS.get(tag.type, 1)


def from_words(tag: ModbusTag, words: Sequence[int]) -> RawValue | None:
    """The raw value in registers as read from the wire; ``None`` where they hold no number of the tag's type.

    No number are NaN, infinity, and an 8-bit type whose register holds more than 8 bits and a sign.
    """
    octets = _in_order(tag, struct.pack(f">{len(words)}H", *words))
    if tag.bit is not None:
        return bool(int.from_bytes(octets, "big") >> tag.bit & 1)
    if tag.type is DataType.BOOL:
        return any(octets)
    if tag.type in (DataType.SINT, DataType.USINT):
        return _from_short(tag.type, int.from_bytes(octets, "big"))
    raw: int | float = struct.unpack(_BIG_ENDIAN_FORMATS[tag.type], octets)[0]
    return raw if isfinite(raw) else None


def to_words(tag: ModbusTag, raw: RawValue) -> tuple[int, ...]:
    """The registers that hold ``raw``, in the order of their addresses.

    A ``REAL`` takes the nearest number it can hold; a ``SINT`` is written with its sign in the upper byte.
    Raises ``WriteForbidden`` for what ``check_raw`` refuses, and for a bit, which shares its register.
    """
    check_raw(tag, raw)
    if tag.bit is not None:
        raise WriteForbidden("a bit shares its register with others: only a masked write can set it")
    if tag.type in (DataType.BOOL, DataType.SINT, DataType.USINT):
        octets = (int(raw) & 0xFFFF).to_bytes(2, "big")
    else:
        octets = struct.pack(_BIG_ENDIAN_FORMATS[tag.type], raw)
    return struct.unpack(f">{len(octets) // 2}H", _in_order(tag, octets))


def mask_bit(tag: ModbusTag) -> int:
    """The bit of the tag's register as it lies on the wire, as a mask of 16 bits.

    Raises ``ValueError`` when the tag is no bit of a register.
    """
    if tag.bit is None:
        raise ValueError("the tag is a whole register")
    return int.from_bytes(_in_order(tag, (1 << tag.bit).to_bytes(2, "big")), "big")


def check_raw(tag: Tag, raw: RawValue) -> None:
    """Raise ``WriteForbidden`` unless the tag's type can hold ``raw``: kind, range, and finite."""
    kind = held_type(tag)
    if kind is DataType.BOOL:
        if not isinstance(raw, bool):
            raise WriteForbidden(f"a BOOL holds true or false, not {raw!r}")
    elif kind in INTEGER_RANGES:
        low, high = INTEGER_RANGES[kind]
        if isinstance(raw, bool) or not isinstance(raw, int):
            raise WriteForbidden(f"a {kind.value} holds whole numbers, not {raw!r}")
        if not low <= raw <= high:
            raise WriteForbidden(f"a {kind.value} holds {low} .. {high}, not {raw!r}")
    elif isinstance(raw, bool) or nearest_held(kind, raw) is None:
        raise WriteForbidden(f"a {kind.value} holds finite numbers of its range, not {raw!r}")


def nearest_held(kind: DataType, exact: float) -> float | None:
    """The floating-point number of ``kind`` next to ``exact``; ``None`` for NaN, infinity and overflow."""
    try:
        held: float = struct.unpack(">f", struct.pack(">f", exact))[0] if kind is DataType.REAL else float(exact)
    except OverflowError:
        return None
    return held if isfinite(held) else None


def to_eu(tag: Tag, raw: RawValue) -> float:
    """Raw value to engineering unit, ``raw * scale + offset``; a ``BOOL`` is 0 or 1 and is not scaled."""
    return float(raw) if held_type(tag) is DataType.BOOL else raw * tag.scale + tag.offset


def representable(tag: Tag, reading_eu: float) -> RawValue:
    """The raw value that the tag can hold nearest to ``reading_eu`` (engineering unit).

    What was read comes back as the identical raw value, as long as scale and offset leave its last
    digit within the 53 bits of a double.  Raises ``WriteForbidden`` for NaN, infinity, what lies
    outside the type's range, and anything but 0 and 1 for a ``BOOL``.
    """
    kind = held_type(tag)
    if kind is DataType.BOOL:
        if reading_eu not in (0.0, 1.0):
            raise WriteForbidden(f"a BOOL holds 0 or 1, not {reading_eu!r}")
        return bool(reading_eu)
    exact = (reading_eu - tag.offset) / tag.scale
    if not isfinite(exact):
        raise WriteForbidden(f"{reading_eu!r} is no finite number of a {kind.value}")
    if kind in INTEGER_RANGES:
        whole = round(exact)
        check_raw(tag, whole)
        return whole
    held = nearest_held(kind, exact)
    if held is None:
        raise WriteForbidden(f"{reading_eu!r} lies outside what a {kind.value} can hold")
    return held


def nearest_within(tag: Tag, bound_eu: float) -> RawValue:
    """Like ``representable`` for a finite bound, but what lies outside the type is moved to the type's end."""
    kind = held_type(tag)
    exact = (bound_eu - tag.offset) / tag.scale
    if kind is DataType.BOOL:
        return bound_eu >= 1.0
    if kind in INTEGER_RANGES:
        low, high = INTEGER_RANGES[kind]
        return round(min(max(exact, low), high))
    greatest = _GREATEST[kind]
    return nearest_held(kind, min(max(exact, -greatest), greatest)) or 0.0


def judge_current(ne43: Ne43, raw: RawValue) -> Quality:
    """Quality of an analogue input by its current.

    After NAMUR NE 43: measuring from 3.8 to 20.5 mA, failure at 3.6 mA and below and at 21 mA and above.
    """
    current_pct = 100.0 * (raw - ne43.raw_at_4_ma) / (ne43.raw_at_20_ma - ne43.raw_at_4_ma)
    if _MEASURING_LOW_PCT <= current_pct <= _MEASURING_HIGH_PCT:
        return Quality.GOOD
    return Quality.UNCERTAIN if _FAILURE_LOW_PCT < current_pct < _FAILURE_HIGH_PCT else Quality.BAD


def to_reading(tag: Tag, raw: RawValue | None) -> Reading:
    """A raw value with its quality; what is ``BAD`` carries no number."""
    if raw is None:
        return Reading(None, Quality.BAD)
    if isinstance(tag, ModbusTag) and tag.ne43 is not None:
        quality = judge_current(tag.ne43, raw)
        return Reading(None if quality is Quality.BAD else raw, quality)
    return Reading(raw, Quality.GOOD)


def _in_order(tag: ModbusTag, octets: bytes) -> bytes:
    """Between the wire's order of octets and most significant first; its own way back."""
    if tag.byte_order is Order.BIG and (tag.word_order is Order.BIG or len(octets) == 2):
        return octets
    words = [octets[at : at + 2] for at in range(0, len(octets), 2)]
    if tag.byte_order is Order.LITTLE:
        words = [word[::-1] for word in words]
    return b"".join(words if tag.word_order is Order.BIG else reversed(words))


def _from_short(kind: DataType, word: int) -> int | None:
    """An 8-bit value in a 16-bit register, whether its maker extended the sign or not."""
    low, high = INTEGER_RANGES[kind]
    if kind is DataType.SINT:
        if word >= 0xFF80:
            return word - 0x10000
        return None if word > 0xFF else word - 0x100 * (word > high)
    return word if low <= word <= high else None
