from collections.abc import Sequence
from dataclasses import replace
from itertools import combinations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.config.types import DataType, ModbusEndpoint, ModbusTag, RegisterTable
from autotune.errors import WriteForbidden
from autotune.field.codec import to_words, width
from autotune.field.link import RawValue
from autotune.field.modbus.requests import (
    MaskRegister,
    ReadRequest,
    WriteCoils,
    WriteRegisters,
    is_one_read,
    plan_reads,
    plan_writes,
)
from tests.field.loops import ENDPOINT, GUARDED, holding

BITS = (RegisterTable.COIL, RegisterTable.DISCRETE)
SIZED = {1: DataType.UINT, 2: DataType.REAL, 4: DataType.LREAL}
Named = Sequence[tuple[str, ModbusTag]]


def coil(address: int) -> ModbusTag:
    return ModbusTag(RegisterTable.COIL, address, DataType.BOOL)


@st.composite
def scattered(draw: st.DrawFn, tables: tuple[RegisterTable, ...] = tuple(RegisterTable), most: int = 6) -> Named:
    tags = draw(
        st.lists(
            st.builds(ModbusTag, st.sampled_from(tables), st.integers(0, 24), st.sampled_from(tuple(SIZED.values()))),
            min_size=1,
            max_size=most,
        )
    )
    return [(f"tag {number}", tag) for number, tag in enumerate(tags)]


def ends(tag: ModbusTag) -> tuple[int, int]:
    return tag.address, tag.address + width(tag)


def is_one_request(tags: Named, longest: int, gap: int) -> bool:
    """Brute force: every address between the ends is wanted or lies in a short enough gap."""
    first, last = min(ends(tag)[0] for _, tag in tags), max(ends(tag)[1] for _, tag in tags)
    wanted = {address for _, tag in tags for address in range(*ends(tag))}
    unwanted_run = longest_run = 0
    for address in range(first, last):
        unwanted_run = 0 if address in wanted else unwanted_run + 1
        longest_run = max(longest_run, unwanted_run)
    return last - first <= longest and longest_run <= gap


def fewest_requests(tags: Named, longest: int, gap: int) -> int:
    """Brute force over all ways to divide the tags of one table into requests."""
    if not tags:
        return 0
    first, *others = tags
    best = len(tags)
    for size in range(len(others) + 1):
        for companions in combinations(others, size):
            if is_one_request([first, *companions], longest, gap):
                rest = [tag for tag in others if tag not in companions]
                best = min(best, 1 + fewest_requests(rest, longest, gap))
    return best


@given(scattered((RegisterTable.HOLDING, RegisterTable.COIL), most=8), st.integers(4, 16), st.integers(0, 3))
def test_no_division_needs_fewer_reads(tags: Named, registers_per_read: int, gap: int) -> None:
    endpoint = replace(ENDPOINT, registers_per_read=registers_per_read, read_gap_registers=gap)
    planned = plan_reads(endpoint, tags)
    for table in RegisterTable:
        limits = (2000, 16 * gap) if table in BITS else (registers_per_read, gap)
        needed = fewest_requests([entry for entry in tags if entry[1].table is table], *limits)
        assert len([request for request in planned if request.table is table]) == needed


@given(scattered(), st.integers(4, 16), st.integers(0, 3))
def test_every_tag_lies_whole_in_exactly_one_read(tags: Named, registers_per_read: int, gap: int) -> None:
    endpoint = replace(ENDPOINT, registers_per_read=registers_per_read, read_gap_registers=gap)
    planned = plan_reads(endpoint, tags)
    assert sorted(name for request in planned for name in request.names) == sorted(name for name, _ in tags)
    for request in planned:
        members = [(name, tag) for name, tag in tags if name in request.names]
        assert all(tag.table is request.table for _, tag in members)
        assert request.first == min(tag.address for _, tag in members)
        assert request.first + request.count == max(ends(tag)[1] for _, tag in members)
        assert request.table in BITS or request.count <= registers_per_read


def test_a_read_never_exceeds_what_the_standard_allows_whatever_the_file_says() -> None:
    """ST-MB2: 125 registers, 2000 bits."""
    generous = replace(ENDPOINT, registers_per_read=1000, read_gap_registers=1000)
    registers = plan_reads(generous, [("a", holding(0, DataType.UINT)), ("b", holding(124, DataType.UINT))])
    assert registers == (ReadRequest(RegisterTable.HOLDING, 0, 125, ("a", "b")),)
    assert len(plan_reads(generous, [("a", holding(0, DataType.UINT)), ("b", holding(124, DataType.REAL))])) == 2
    assert plan_reads(generous, [("a", coil(0)), ("b", coil(1999))])[0].count == 2000
    assert len(plan_reads(generous, [("a", coil(0)), ("b", coil(2000))])) == 2


def test_a_whole_sample_of_a_guarded_loop_is_one_read() -> None:
    tags = [(name, tag) for name, tag in GUARDED.tags if isinstance(tag, ModbusTag) and tag.address < 25]
    assert is_one_read(ENDPOINT, tags)
    assert not is_one_read(replace(ENDPOINT, read_gap_registers=0), tags)
    assert is_one_read(ENDPOINT, [])


@st.composite
def settings_to_write(draw: st.DrawFn) -> list[tuple[str, ModbusTag, RawValue]]:
    """Tags of holding registers, bits and coils that don't overlap, in any order, with raw values."""
    taken: dict[RegisterTable, set[int]] = {RegisterTable.HOLDING: set(), RegisterTable.COIL: set()}
    writes: list[tuple[str, ModbusTag, RawValue]] = []
    for number in range(draw(st.integers(1, 7))):
        size = draw(st.sampled_from((0, 1, 1, 2, 4)))
        if size == 0:
            tag = coil(draw(st.integers(0, 12)))
            raw: RawValue = draw(st.booleans())
        elif size == 1 and draw(st.booleans()):
            tag = replace(holding(draw(st.integers(0, 20)), DataType.UINT), bit=draw(st.integers(0, 15)))
            raw = draw(st.booleans())
        else:
            tag = holding(draw(st.integers(0, 20)), SIZED[size])
            raw = draw(st.integers(0, 65535)) if size == 1 else draw(st.floats(-1e6, 1e6, width=32))
        span = set(range(*ends(tag)))
        if not span & taken[tag.table]:
            taken[tag.table] |= span
            writes.append((f"tag {number}", tag, raw))
    return writes


def touched(request: WriteRegisters | WriteCoils | MaskRegister) -> set[tuple[RegisterTable, int]]:
    match request:
        case WriteRegisters(first, words):
            return {(RegisterTable.HOLDING, first + at) for at in range(len(words))}
        case WriteCoils(first, bits):
            return {(RegisterTable.COIL, first + at) for at in range(len(bits))}
        case MaskRegister(first):
            return {(RegisterTable.HOLDING, first)}


def carry_out(
    request: WriteRegisters | WriteCoils | MaskRegister, memory: dict[tuple[RegisterTable, int], int]
) -> None:
    """What a controller does with one request, after V1.1b3 section 6."""
    match request:
        case WriteRegisters(first, words):
            memory.update({(RegisterTable.HOLDING, first + at): word for at, word in enumerate(words)})
        case WriteCoils(first, bits):
            memory.update({(RegisterTable.COIL, first + at): int(bit) for at, bit in enumerate(bits)})
        case MaskRegister(first, and_mask, or_mask):
            former = memory[(RegisterTable.HOLDING, first)]
            memory[(RegisterTable.HOLDING, first)] = (former & and_mask) | (or_mask & ~and_mask)


@given(settings_to_write(), st.integers(0, 0xFFFF))
def test_writes_change_exactly_what_was_asked_for(writes: list[tuple[str, ModbusTag, RawValue]], former: int) -> None:
    memory = {(table, address): former for table in RegisterTable for address in range(40)}
    wanted = dict(memory)
    for _, tag, raw in writes:
        if tag.table is RegisterTable.COIL:
            wanted[(tag.table, tag.address)] = int(raw)
        elif tag.bit is not None:
            wanted[(tag.table, tag.address)] = former & ~(1 << tag.bit) | int(raw) << tag.bit
        else:
            wanted |= {(tag.table, tag.address + at): word for at, word in enumerate(to_words(tag, raw))}
    for request in plan_writes(ENDPOINT, writes):
        carry_out(request, memory)
    assert memory == wanted


@given(settings_to_write())
def test_no_write_touches_an_address_that_was_not_asked_for(writes: list[tuple[str, ModbusTag, RawValue]]) -> None:
    """S10."""
    asked = {(tag.table, address) for _, tag, _ in writes for address in range(*ends(tag))}
    for request in plan_writes(ENDPOINT, writes):
        assert touched(request) <= asked


@given(settings_to_write())
def test_writes_keep_the_given_order_but_within_one_request(writes: list[tuple[str, ModbusTag, RawValue]]) -> None:
    planned = [set(request.names) for request in plan_writes(ENDPOINT, writes)]
    given_order = [name for name, _, _ in writes]
    for names in planned:
        assert set(given_order[: len(names)]) == names
        given_order = given_order[len(names) :]
    assert not given_order


def test_a_guarded_output_goes_in_one_request_in_the_order_of_its_addresses() -> None:
    names = ("holder_request", "heartbeat", "op_request", "sequence")
    raws: tuple[RawValue, ...] = (0xDEADBEEF, 7, 123.456, 9)
    writes = [
        (name, tag, raw)
        for name, raw in zip(names, raws, strict=True)
        if isinstance(tag := GUARDED.tag(name), ModbusTag)
    ]
    assert plan_writes(ENDPOINT, writes) == (
        WriteRegisters(
            30,
            (0xDEAD, 0xBEEF, 7, 9, 0x42F6, 0xE979),
            ("holder_request", "heartbeat", "sequence", "op_request"),
        ),
    )


def test_a_write_never_exceeds_what_the_standard_or_the_file_allows() -> None:
    """ST-MB2: 123 registers, 1968 bits."""

    def registers(count: int) -> list[tuple[str, ModbusTag, RawValue]]:
        return [(f"r{address}", holding(address, DataType.UINT), 1) for address in range(count)]

    def lengths(endpoint: ModbusEndpoint, writes: Sequence[tuple[str, ModbusTag, RawValue]]) -> list[int]:
        return [len(touched(request)) for request in plan_writes(endpoint, writes)]

    generous = replace(ENDPOINT, registers_per_write=1000)
    assert lengths(generous, registers(123)) == [123]
    assert lengths(generous, registers(124)) == [123, 1]
    assert lengths(replace(ENDPOINT, registers_per_write=2), registers(5)) == [2, 2, 1]


def test_coils_side_by_side_go_together_up_to_the_standards_limit() -> None:
    """ST-MB2: 1968 coils in a write."""
    writes: list[tuple[str, ModbusTag, RawValue]] = [(f"c{at}", coil(at), at % 3 == 0) for at in (2, 0, 1, 5)]
    first, second = plan_writes(ENDPOINT, writes)
    assert first == WriteCoils(0, (True, False, False), ("c0", "c1", "c2"))
    assert second == WriteCoils(5, (False,), ("c5",))


def test_tags_that_overlap_are_written_one_after_the_other() -> None:
    writes: list[tuple[str, ModbusTag, RawValue]] = [
        ("whole", holding(0, DataType.UDINT), 0x00010002),
        ("half", holding(1, DataType.UINT), 3),
    ]
    assert plan_writes(ENDPOINT, writes) == (WriteRegisters(0, (1, 2), ("whole",)), WriteRegisters(1, (3,), ("half",)))


def test_a_table_that_can_only_be_read_can_not_be_planned_for_writing() -> None:
    with pytest.raises(ValueError, match="input can't be written"):
        plan_writes(ENDPOINT, [("pv", ModbusTag(RegisterTable.INPUT, 0, DataType.UINT), 1)])


def test_a_number_that_a_register_can_not_hold_is_refused_before_anything_is_planned() -> None:
    with pytest.raises(WriteForbidden):
        plan_writes(ENDPOINT, [("a", holding(0, DataType.UINT), 1), ("b", holding(9, DataType.UINT), 70000)])
