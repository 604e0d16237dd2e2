"""The register map of the soft plant: the one place that knows addresses.

The loop number k (in the order of the rig, from 0) owns the holding registers 100 k .. 100 k + 99; the
input registers (FC 4) mirror them.  Addresses count from 0 on the wire.  ``REGISTERS`` is the map and
``python -m simulator RIG --map`` prints it for a rig.

- REAL is IEEE 754 single, UDINT unsigned 32 bit, both in two registers, high word first (``word_order =
  "little"`` in the rig: low word first).  UINT, INT and WORD take one register.
- INT mirrors hold counts = reading x scale (scales in the rig), clipped to -32767 .. 32767; -32768 means
  no reading.  Writing a mirror writes its REAL and the reverse.
- Addresses between the entries read 0.  Bits are in the discretes and coils, see ``BITS`` below.
- A write is taken as a whole or not at all.  Exception 2 (illegal data address): a register that is
  read-only, between the entries, or beyond the last loop.  Exception 3 (illegal data value): a number that the
  tag can't take.  An output written outside MAN is ignored or, with ``op_write_in_auto = "refused"``,
  answered by exception 3.
- Writing half of a two-register tag keeps the other half.
- Discretes (FC 2) and coils (FC 1) of loop k begin at 100 k as well; both show the same bits.  Only the
  coils 90 .. 99, which nothing in the plant reads, can be written (FC 5 and 15).
"""

import struct
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import isfinite

from simulator.loop import Loop, WriteRefused
from simulator.plc import Plc

BLOCK_SIZE = 100
WATCH_OFFSET = 50
WATCH_AT_MOST = 10
WATCH_BIT_OFFSET = 10
SPARE_COILS = range(90, 100)
NO_READING_COUNTS = -32768


@dataclass(frozen=True, slots=True)
class Register:
    """One entry of the map; ``mirrors`` names the tag that an INT mirror shows."""

    name: str
    offset: int
    type: str
    is_writable: bool
    unit: str
    meaning: str
    mirrors: str | None = None

    @property
    def size(self) -> int:
        """How many registers it takes."""
        return 2 if self.type in ("REAL", "UDINT") else 1


REGISTERS: tuple[Register, ...] = (
    Register("pv", 0, "REAL", False, "EU", "process value of the last scan, NaN when the transmitter gives none"),
    Register("sp", 2, "REAL", True, "EU", "setpoint, within the span"),
    Register("op", 4, "REAL", True, "%", "output; a write acts in MAN only"),
    Register("mode", 6, "UINT", True, "", "0 MAN, 1 AUTO, 2 CAS (only with a cascade master)"),
    Register("status", 7, "WORD", False, "", "bit 0 PV failed, bit 1 output at high clamp, bit 2 at low clamp"),
    Register("plc_clock_ms", 8, "UDINT", False, "ms", "clock of the scan that sampled PV, modulo 2^32"),
    Register("boot_count", 10, "UINT", False, "", "changes with every start of the PLC"),
    Register("heartbeat_echo", 11, "UINT", False, "", "heartbeat as seen by the last scan"),
    Register("guard_state", 12, "UINT", False, "", "0 idle, 1 armed, 2 gave back"),
    Register("guard_alarm", 13, "UINT", False, "", "1 after the guard gave the loop back"),
    Register("holder", 14, "UDINT", False, "", "token of who holds the loop, 0 when free"),
    Register("op_effect_ms", 16, "UDINT", False, "ms", "clock of the scan in which the last request took effect"),
    Register("op_effect_count", 18, "UDINT", False, "", "how many requests took effect since the start"),
    Register("guard_timeout_s", 20, "REAL", False, "s", "longest time without a new heartbeat"),
    Register("enable", 22, "UINT", False, "", "1 while the permission given at the plant's panel lasts"),
    Register("stop", 23, "UINT", False, "", "1 while stop is pressed at the plant's panel"),
    Register("test_active", 24, "UINT", False, "", "1 while the guard is armed"),
    Register("block_saturated", 25, "UINT", False, "", "1 while the output stands at a clamp"),
    Register("holder_request", 30, "UDINT", True, "", "token that asks for the loop, 0 releases it"),
    Register("heartbeat", 32, "UINT", True, "", "to be changed within guard_timeout_s"),
    Register("sequence", 33, "UINT", True, "", "number of the output request, growing modulo 2^16"),
    Register("op_request", 34, "REAL", True, "%", "output asked for; passed on when armed, newer and in limits"),
    Register("gain", 40, "REAL", True, "block", "gain or proportional band, in the block's unit"),
    Register("integral", 42, "REAL", True, "block", "integral, in the block's unit"),
    Register("derivative", 44, "REAL", True, "block", "derivative, in the block's unit"),
    Register("pv_counts", 60, "INT", False, "counts", "mirror of pv", "pv"),
    Register("sp_counts", 61, "INT", True, "counts", "mirror of sp", "sp"),
    Register("op_counts", 62, "INT", True, "counts", "mirror of op", "op"),
    Register("gain_counts", 63, "INT", True, "counts", "mirror of gain", "gain"),
    Register("integral_counts", 64, "INT", True, "counts", "mirror of integral", "integral"),
    Register("derivative_counts", 65, "INT", True, "counts", "mirror of derivative", "derivative"),
)

BITS: tuple[tuple[int, str, str], ...] = (
    (0, "pv_failed", "PV failed"),
    (1, "enable", "permission given at the plant's panel"),
    (2, "stop", "stop pressed at the plant's panel"),
    (3, "guard_alarm", "the guard gave the loop back"),
    (4, "test_active", "the guard is armed"),
    (5, "block_saturated", "the output stands at a clamp"),
)
"""Offset, name and meaning of the discretes; the watch entries follow from ``WATCH_BIT_OFFSET``."""


class AddressRefused(Exception):
    """An address that doesn't exist or may not be written: Modbus exception 2."""


class Registers:
    """All register blocks of one plant.  Reads show the last scan; writes act at once, as in a PLC's memory."""

    def __init__(self, plc: Plc, *, word_order: str) -> None:
        self._plc = plc
        self._loops = tuple(plc.loops.values())
        self._maps = tuple(loop_registers(loop) for loop in self._loops)
        self._is_low_word_first = word_order == "little"
        self._spare_coils = [False] * (len(SPARE_COILS) * len(self._loops))

    def read(self, address: int, count: int) -> list[int]:
        """``count`` registers from ``address``.  Raises ``AddressRefused`` beyond the last loop."""
        self._check_range(address, count)
        first, last = address // BLOCK_SIZE, (address + count - 1) // BLOCK_SIZE
        words = [word for number in range(first, last + 1) for word in self._image(number)]
        begin = address - first * BLOCK_SIZE
        return words[begin : begin + count]

    def write(self, address: int, words: Sequence[int]) -> None:
        """Write registers, all or none.  Raises ``AddressRefused`` or ``WriteRefused`` before anything changes."""
        self._check_range(address, len(words))
        writes: list[tuple[Loop, str, float]] = []
        for number in range(address // BLOCK_SIZE, (address + len(words) - 1) // BLOCK_SIZE + 1):
            begin = number * BLOCK_SIZE
            image = self._image(number)
            touched = range(max(address, begin) - begin, min(address + len(words), begin + BLOCK_SIZE) - begin)
            for offset in touched:
                image[offset] = words[begin + offset - address]
            writes.extend(self._writes_of_block(number, touched, image))
        for loop, tag, reading in writes:
            loop.check_write(tag, reading)
        for loop, tag, reading in writes:
            loop.write(tag, reading)

    def read_bits(self, address: int, count: int) -> list[bool]:
        """``count`` discretes from ``address``.  Raises ``AddressRefused`` beyond the last loop."""
        self._check_range(address, count)
        first, last = address // BLOCK_SIZE, (address + count - 1) // BLOCK_SIZE
        bits = [bit for number in range(first, last + 1) for bit in self._bit_image(number)]
        begin = address - first * BLOCK_SIZE
        return bits[begin : begin + count]

    def write_bits(self, address: int, bits: Sequence[bool]) -> None:
        """Write spare coils, all or none.  Raises ``AddressRefused`` for any other."""
        self._check_range(address, len(bits))
        if any((address + step) % BLOCK_SIZE not in SPARE_COILS for step in range(len(bits))):
            raise AddressRefused(f"coils from {address} can't be written; the spare ones are {SPARE_COILS}")
        for step, bit in enumerate(bits):
            number, offset = divmod(address + step, BLOCK_SIZE)
            self._spare_coils[number * len(SPARE_COILS) + offset - SPARE_COILS.start] = bit

    def _check_range(self, address: int, count: int) -> None:
        if address < 0 or address + count > BLOCK_SIZE * len(self._loops):
            raise AddressRefused(f"registers {address}..{address + count - 1} don't exist")

    def _writes_of_block(self, number: int, touched: range, image: list[int]) -> list[tuple[Loop, str, float]]:
        writes = []
        mapped: set[int] = set()
        loop = self._loops[number]
        scales = dict(loop.spec.int_scales)
        for register in self._maps[number]:
            words = range(register.offset, register.offset + register.size)
            if words.stop <= touched.start or touched.stop <= words.start:
                continue
            tag = register.mirrors or register.name
            if not register.is_writable or tag in loop.spec.read_only:
                raise AddressRefused(f"{register.name} of {loop.spec.name} is read-only")
            mapped.update(words)
            reading = from_words(image[words.start : words.stop], register.type, self._is_low_word_first)
            writes.append((loop, tag, reading / scales[tag] if register.mirrors else reading))
        if not mapped.issuperset(touched):
            raise AddressRefused(f"offsets {touched} of {loop.spec.name} hold registers that don't exist")
        return writes

    def _image(self, number: int) -> list[int]:
        loop = self._loops[number]
        readings = loop.readings() | {"plc_clock_ms": self._plc.clock_ms, "boot_count": self._plc.boot_count}
        scales = dict(loop.spec.int_scales)
        image = [0] * BLOCK_SIZE
        for register in self._maps[number]:
            if register.mirrors:
                words = [to_counts(readings[register.mirrors], scales[register.mirrors]) & 0xFFFF]
            else:
                words = to_words(readings[register.name], register.type, self._is_low_word_first)
            image[register.offset : register.offset + register.size] = words
        return image

    def _bit_image(self, number: int) -> list[bool]:
        loop = self._loops[number]
        readings: Mapping[str, float] = loop.readings() | {"pv_failed": loop.transmitter.is_failed}
        image = [False] * BLOCK_SIZE
        for offset, name, _ in BITS:
            image[offset] = bool(readings[name])
        for offset, name in enumerate(loop.watch, WATCH_BIT_OFFSET):
            image[offset] = bool(readings[name])
        begin = number * len(SPARE_COILS)
        image[SPARE_COILS.start : SPARE_COILS.stop] = self._spare_coils[begin : begin + len(SPARE_COILS)]
        return image


def loop_registers(loop: Loop) -> tuple[Register, ...]:
    """The map of one loop: the common entries and its own watch entries."""
    watch = (
        Register(name, WATCH_OFFSET + number, "UINT", False, "", "watch entry")
        for number, name in enumerate(loop.watch)
    )
    return (*REGISTERS, *watch)


def map_lines(plc: Plc) -> list[str]:
    """The map of a rig as a table, one line per entry."""
    lines = [f"{'loop':<10} {'address':>7}  {'type':<5} {'access':<6} {'unit':<7} {'name':<24} meaning"]
    for number, loop in enumerate(plc.loops.values()):
        for register in sorted(loop_registers(loop), key=lambda register: register.offset):
            is_writable = register.is_writable and (register.mirrors or register.name) not in loop.spec.read_only
            unit = loop.spec.pv_unit if register.unit == "EU" else register.unit
            meaning = register.meaning
            if register.mirrors:
                meaning += f" x {dict(loop.spec.int_scales)[register.mirrors]:g}"
            address, access = number * BLOCK_SIZE + register.offset, "rw" if is_writable else "r"
            head = f"{loop.spec.name:<10} {address:>7}  {register.type:<5} {access:<6}"
            lines.append(f"{head} {unit:<7} {register.name:<24} {meaning}")
        watch = ((offset, name, "watch entry") for offset, name in enumerate(loop.watch, WATCH_BIT_OFFSET))
        lines.extend(
            f"{loop.spec.name:<10} {number * BLOCK_SIZE + offset:>7}  {'BOOL':<5} {'r':<6} {'':<7} {name:<24} {meaning}"
            for offset, name, meaning in (*BITS, *watch)
        )
    return lines


def to_words(reading: float, type_name: str, is_low_word_first: bool) -> list[int]:
    """One reading as registers.  A REAL too large for single precision becomes an infinity."""
    if type_name == "REAL":
        try:
            raw = struct.pack(">f", reading)
        except OverflowError:
            raw = struct.pack(">f", float("inf") if reading > 0.0 else float("-inf"))
        words = list(struct.unpack(">HH", raw))
    elif type_name == "UDINT":
        words = [int(reading) >> 16 & 0xFFFF, int(reading) & 0xFFFF]
    else:
        return [int(reading) & 0xFFFF]
    return words[::-1] if is_low_word_first else words


def from_words(words: Sequence[int], type_name: str, is_low_word_first: bool) -> float:
    """Registers as a reading; the inverse of ``to_words``."""
    if len(words) == 1:
        return words[0] - 0x10000 if type_name == "INT" and words[0] & 0x8000 else words[0]
    high, low = reversed(words) if is_low_word_first else words
    if type_name == "UDINT":
        return high << 16 | low
    return float(struct.unpack(">f", struct.pack(">HH", high, low))[0])


def to_counts(reading: float, scale: float) -> int:
    """A reading as the counts of an INT mirror, clipped; ``NO_READING_COUNTS`` when there is none."""
    if not isfinite(reading):
        return NO_READING_COUNTS
    return min(max(round(reading * scale), -32767), 32767)


__all__ = ["AddressRefused", "Register", "Registers", "WriteRefused", "loop_registers", "map_lines"]
