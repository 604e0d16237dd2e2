"""Which requests go on the wire: tags coalesced into the fewest reads, and writes that touch nothing else.  Pure.

Limits after MODBUS Application Protocol V1.1b3, section 6: 125 registers or 2000 bits in a read, 123 or
1968 in a write.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

from autotune.config.types import ModbusEndpoint, ModbusTag, RegisterTable
from autotune.field.codec import mask_bit, to_words, width
from autotune.field.link import RawValue

BITS_PER_READ = 2000
BITS_PER_WRITE = 1968
REGISTERS_PER_READ = 125
REGISTERS_PER_WRITE = 123

_BITS_PER_REGISTER = 16  # on the wire, so that a gap of bits costs what a gap of registers does
_BIT_TABLES = (RegisterTable.COIL, RegisterTable.DISCRETE)


@dataclass(frozen=True, slots=True)
class ReadRequest:
    """``count`` addresses of one table from ``first`` on, for the tags called ``names``."""

    table: RegisterTable
    first: int
    count: int
    names: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class WriteRegisters:
    """Whole holding registers from ``first`` on."""

    first: int
    words: tuple[int, ...]
    names: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class WriteCoils:
    """Coils from ``first`` on."""

    first: int
    bits: tuple[bool, ...]
    names: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class MaskRegister:
    """One holding register: bits in ``and_mask`` stay, the others take ``or_mask``."""

    first: int
    and_mask: int
    or_mask: int
    names: tuple[str, ...]


WriteRequest = WriteRegisters | WriteCoils | MaskRegister


def plan_reads(endpoint: ModbusEndpoint, tags: Sequence[tuple[str, ModbusTag]]) -> tuple[ReadRequest, ...]:
    """The fewest requests that read every tag whole, table by table.

    A request reads over a gap of at most ``read_gap_registers`` addresses that nobody asked for.
    """
    return tuple(
        request
        for table in RegisterTable
        for request in _plan_table(endpoint, table, [(name, tag) for name, tag in tags if tag.table is table])
    )


def is_one_read(endpoint: ModbusEndpoint, tags: Sequence[tuple[str, ModbusTag]]) -> bool:
    """Whether one request reads all tags, so that they can stem from one scan of the controller."""
    return len(plan_reads(endpoint, tags)) <= 1


def plan_writes(
    endpoint: ModbusEndpoint, writes: Sequence[tuple[str, ModbusTag, RawValue]]
) -> tuple[WriteRequest, ...]:
    """Requests that keep the given order and write no address that isn't among ``writes``.

    Neighbours in the order that lie side by side go in one request, as many of them as it can take.
    Raises ``WriteForbidden`` when a tag can't hold its raw value, ``ValueError`` for a table that can't be
    written.
    """
    requests: list[WriteRequest] = []
    rest = list(writes)
    while rest:
        together = next(count for count in range(len(rest), 0, -1) if _is_one_write(endpoint, rest[:count]))
        requests.append(_one_write(rest[:together]))
        rest = rest[together:]
    return tuple(requests)


def _plan_table(
    endpoint: ModbusEndpoint, table: RegisterTable, tags: Sequence[tuple[str, ModbusTag]]
) -> list[ReadRequest]:
    """From the lowest address up, each request takes all it can: no other cut needs fewer requests."""
    is_bits = table in _BIT_TABLES
    longest = BITS_PER_READ if is_bits else min(endpoint.registers_per_read, REGISTERS_PER_READ)
    gap = endpoint.read_gap_registers * (_BITS_PER_REGISTER if is_bits else 1)
    requests: list[ReadRequest] = []
    for name, tag in sorted(tags, key=lambda entry: (entry[1].address, width(entry[1]))):
        end = tag.address + width(tag)
        if requests:
            last = requests[-1]
            whole = max(end, last.first + last.count) - last.first
            if tag.address <= last.first + last.count + gap and whole <= longest:
                requests[-1] = ReadRequest(table, last.first, whole, (*last.names, name))
                continue
        requests.append(ReadRequest(table, tag.address, width(tag), (name,)))
    return requests


def _is_one_write(endpoint: ModbusEndpoint, writes: Sequence[tuple[str, ModbusTag, RawValue]]) -> bool:
    if len(writes) == 1:
        return True
    tags = sorted((tag for _, tag, _ in writes), key=lambda tag: tag.address)
    if any(tag.table is not tags[0].table or tag.bit is not None for tag in tags):
        return False
    if any(left.address + width(left) != right.address for left, right in pairwise(tags)):
        return False
    longest = (
        BITS_PER_WRITE
        if tags[0].table is RegisterTable.COIL
        else min(endpoint.registers_per_write, REGISTERS_PER_WRITE)
    )
    return tags[-1].address + width(tags[-1]) - tags[0].address <= longest


def _one_write(writes: Sequence[tuple[str, ModbusTag, RawValue]]) -> WriteRequest:
    by_address = sorted(writes, key=lambda entry: entry[1].address)
    names = tuple(name for name, _, _ in by_address)
    _, tag, raw = by_address[0]
    if tag.table is RegisterTable.COIL:
        return WriteCoils(tag.address, tuple(bool(bit) for _, _, bit in by_address), names)
    if tag.table is not RegisterTable.HOLDING:
        raise ValueError(f"a {tag.table.value} can't be written")
    if tag.bit is not None:
        mask = mask_bit(tag)
        return MaskRegister(tag.address, 0xFFFF & ~mask, mask if raw else 0, names)
    words = tuple(word for _, part, held in by_address for word in to_words(part, held))
    return WriteRegisters(tag.address, words, names)
