"""Where tags lie on the wire: addresses, types, what we write, and what must not overlap."""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from itertools import pairwise

from autotune.config.complaints import Flaw, Loc
from autotune.config.schema import ControllerTable, LoopTable
from autotune.config.schema_settings import BlockTable
from autotune.config.schema_tags import TagsTable, TagTable
from autotune.config.types import DataType, ModbusTag, Ne43, OpcUaTag, Order, RegisterTable

GUARD_WRITES = ("holder_request", "heartbeat", "sequence", "op_request")
"""The tags that each scan of a guarded test writes in one request, in this order side by side."""

GUARD_NEEDS = (*GUARD_WRITES, "holder", "heartbeat_echo", "guard_state")
"""Without these a guard can't be asked, watched or trusted."""

CLOCK_TAGS = ("plc_clock_ms", "op_effect_ms", "op_effect_count")
"""All three together tell when the plant itself was sampled and moved."""

SETTINGS = ("gain", "integral", "derivative")
"""The fields of a PID block."""

_UINT, _UDINT, _BOOL = DataType.UINT, DataType.UDINT, DataType.BOOL
_COUNTER = (_UINT, _UDINT)
_CONTACT = (_BOOL, DataType.SINT, DataType.USINT, DataType.INT, _UINT, DataType.DINT, _UDINT)
SUITING_TYPES: dict[str, tuple[DataType, ...]] = {
    "mode": _CONTACT,
    "holder_request": (_UDINT,),
    "holder": (_UDINT,),
    "heartbeat": (_UINT,),
    "heartbeat_echo": (_UINT,),
    "sequence": (_UINT,),
    "guard_state": _CONTACT,
    "guard_alarm": _CONTACT,
    "enable": _CONTACT,
    "stop": _CONTACT,
    "test_active": _CONTACT,
    "plc_clock_ms": (_UDINT,),
    "op_effect_ms": (_UDINT,),
    "op_effect_count": _COUNTER,
    "boot_count": _COUNTER,
}
"""The types that a code, a count or a contact may have; every other tag is a measurement or a setting."""
READ_ONLY_TABLES = (RegisterTable.INPUT, RegisterTable.DISCRETE)
_BIT_TABLES = (RegisterTable.COIL, RegisterTable.DISCRETE)
_REFERENCE_DIGIT = {RegisterTable.DISCRETE: 1, RegisterTable.INPUT: 3, RegisterTable.HOLDING: 4}


@dataclass(frozen=True, slots=True)
class Place:
    """One tag as placed: its name, the way to it in the loop's table, and whether we write it."""

    name: str
    loc: Loc
    tag: ModbusTag
    is_written: bool


def places_of(loop: LoopTable, controller: ControllerTable, block: BlockTable | None) -> tuple[list[Place], list[Flaw]]:
    """All tags of a loop on the wire, and what is wrong with them."""
    written = written_tags(loop, block)
    placed: list[Place] = []
    flaws: list[Flaw] = []
    if loop.tags.namespace is not None:
        flaws.append(Flaw(("tags", "namespace"), "belongs to OPC UA, and the controller speaks Modbus", "take it out"))
    for name, loc, told in told_tags(loop):
        found = list(_shape_flaws(name, loc, told, loop.tags, controller, loop.address_offset))
        flaws += found
        if not found:
            tag = _tag(told, loop.tags, controller, loop.address_offset)
            flaws += _use_flaws(name, loc, tag, name in written)
            placed.append(Place(name, loc, tag, name in written))
    flaws += _overlaps_within(placed)
    flaws += _guard_order_flaws(placed)
    return placed, flaws


def written_tags(loop: LoopTable, block: BlockTable | None) -> frozenset[str]:
    """The tags that a test, a hand-back or a write of settings may write."""
    names = {"mode"} | (set(GUARD_WRITES) if loop.guard is not None else {"op"})
    if block is not None and block.sp_tracks_in_manual and loop.tags.sp is not None:
        names.add("sp")
    return frozenset(names | (set(SETTINGS) if loop.write_settings != "never" else set()))


def wire_address(
    address: int, table: RegisterTable, controller: ControllerTable, offset: int = 0
) -> tuple[int, tuple[str, str] | None]:
    """The address counted from 0, and fault with remedy where the file's can't be right."""
    first = 0 if controller.addressing == "from 0" else 1
    digit = _REFERENCE_DIGIT.get(table)
    if digit is not None and not controller.uses_addresses_above_9999:
        for leading in (digit * 10_000, digit * 100_000):
            if leading < address < leading + leading // digit:
                remedy = (
                    f'write address = {address - leading} with addressing = "from 1", '
                    "or uses_addresses_above_9999 = true when the device really has this address"
                )
                return address, (f"{address} looks like table and number in one ({table.value} {digit}xxxx)", remedy)
    wire = address - first + offset
    if not 0 <= wire <= 65535 or address < first:
        with_offset = f" with address_offset {offset}" if offset else ""
        fault = f"address {address}{with_offset} is outside {first} .. {65535 + first}"
        return wire, (fault, f'count as told, addressing = "{controller.addressing}"')
    return wire, None


def overlaps_between(loops: Iterable[tuple[str, tuple[object, ...], list[Place]]]) -> Iterator[tuple[str, Flaw]]:
    """Tags of different loops on the same device that can't both be right: (loop, flaw).

    Each loop comes as name, endpoint and places.  The same place may be read by many loops and written by
    one; a master's output may be the slave's setpoint.
    """
    seen: dict[tuple[object, ...], list[tuple[str, Place]]] = {}
    for loop, endpoint, placed in loops:
        for place in placed:
            for cell in _cells(place.tag):
                for other_loop, other in seen.setdefault((endpoint, place.tag.table, cell), []):
                    if other_loop != loop and not _may_share(place, other):
                        yield loop, _overlap(place, f"loop[{other_loop}].{_words(other)}", other)
                seen[endpoint, place.tag.table, cell].append((loop, place))


def suiting_flaws(name: str, loc: Loc, tag: ModbusTag | OpcUaTag) -> Iterator[Flaw]:
    """What speaks against a tag's type and scale for its use; a type that the file leaves open can't be judged."""
    allowed, kind = SUITING_TYPES.get(name), tag.type
    if allowed is not None and kind is not None and kind not in allowed:
        yield Flaw((*loc, "type"), f"{kind.value} does not suit {name}", f"write {type_words(name)}")
    elif allowed is None and kind is _BOOL and not name.startswith("watch."):
        yield Flaw((*loc, "type"), f"BOOL does not suit {name}", f"write {type_words(name)}")
    if allowed is not None and (tag.scale, tag.offset) != (1.0, 0.0):
        key = "scale" if tag.scale != 1.0 else "offset"
        yield Flaw((*loc, key), f"{name} is a code or a count, not a measurement", "take `scale` and `offset` out")


def told_tags(loop: LoopTable) -> Iterator[tuple[str, Loc, TagTable]]:
    """All tags of a loop as told: name, the way to it, and its table."""
    for name in TagsTable.model_fields:
        told = getattr(loop.tags, name)
        if isinstance(told, TagTable):
            yield name, ("tags", name), told
    for number, watch in enumerate(loop.watch):
        yield f"watch.{watch.name}", ("watch", number, "tag"), watch.tag


def _shape_flaws(
    name: str, loc: Loc, told: TagTable, shared: TagsTable, controller: ControllerTable, offset: int
) -> Iterator[Flaw]:
    for key in ("node", "path", "namespace"):
        if getattr(told, key) is not None:
            yield Flaw((*loc, key), "belongs to OPC UA, and the controller speaks Modbus", "write address instead")
    table, kind = told.table or shared.table, told.type or shared.type
    if told.address is None:
        about = TagTable.model_fields["address"].description
        yield Flaw((*loc, "address"), "missing", f"add address: {about}")
    if table is None:
        yield Flaw((*loc, "table"), "missing", "add table: coil, discrete, input or holding, here or in [loop.tags]")
    if kind is None:
        yield Flaw((*loc, "type"), "missing", f"add type: {type_words(name)}, here or in [loop.tags]")
    if table is None or kind is None or told.address is None:
        return
    yield from _type_flaws(loc, table, kind, told)
    wire, wrong = wire_address(told.address, table, controller, offset)
    if wrong is not None:
        yield Flaw((*loc, "address"), *wrong)
    elif wire + (kind.register_count if table not in _BIT_TABLES else 1) > 65536:
        yield Flaw((*loc, "address"), f"a {kind.value} does not fit at {told.address}", "end at 65535 on the wire")


def _type_flaws(loc: Loc, table: RegisterTable, kind: DataType, told: TagTable) -> Iterator[Flaw]:
    if table in _BIT_TABLES and kind is not _BOOL:
        yield Flaw((*loc, "type"), f"a {kind.value} can't lie in a {table.value}", "write holding or input, or BOOL")
    elif table in _BIT_TABLES and told.bit is not None:
        yield Flaw((*loc, "bit"), f"a {table.value} is one bit already", "take `bit` out")
    elif table not in _BIT_TABLES and kind is _BOOL and told.bit is None:
        yield Flaw((*loc, "bit"), "missing", f"add bit: 0 to 15, the bit of the {table.value} register")
    elif kind is not _BOOL and told.bit is not None:
        yield Flaw((*loc, "bit"), f"a {kind.value} has no single bit", 'take `bit` out, or write type = "BOOL"')
    if told.scale == 0:
        yield Flaw((*loc, "scale"), "0 makes every reading the same", "write engineering units per raw count")
    if told.ne43 is not None and not kind.is_whole:
        yield Flaw((*loc, "ne43"), f"needs raw counts, not a {kind.value}", "take `ne43` out or name the raw register")
    if told.ne43 is not None and told.ne43.raw_at_4_ma == told.ne43.raw_at_20_ma:
        yield Flaw((*loc, "ne43"), "4 and 20 mA read the same", "write the two raw readings")


def _tag(told: TagTable, shared: TagsTable, controller: ControllerTable, offset: int) -> ModbusTag:
    table, kind = told.table or shared.table, told.type or shared.type
    assert table is not None  # noqa: S101 - _shape_flaws was empty
    assert kind is not None  # noqa: S101
    assert told.address is not None  # noqa: S101
    return ModbusTag(
        table=table,
        address=wire_address(told.address, table, controller, offset)[0],
        type=kind,
        word_order=told.word_order or controller.word_order,
        byte_order=told.byte_order or controller.byte_order or Order.BIG,
        bit=told.bit,
        scale=told.scale,
        offset=told.offset,
        ne43=None if told.ne43 is None else Ne43(told.ne43.raw_at_4_ma, told.ne43.raw_at_20_ma),
    )


def _use_flaws(name: str, loc: Loc, tag: ModbusTag, is_written: bool) -> Iterator[Flaw]:
    yield from suiting_flaws(name, loc, tag)
    if is_written and tag.table in READ_ONLY_TABLES:
        yield Flaw(
            (*loc, "table"), f"{name} is written, but {tag.table.value} can only be read", "write holding or coil"
        )
    elif is_written and tag.bit is not None:
        remedy = "give it a coil or a whole register"
        yield Flaw((*loc, "bit"), "one bit of a register can't be written without touching its neighbours", remedy)


def _overlaps_within(placed: list[Place]) -> Iterator[Flaw]:
    seen: dict[tuple[RegisterTable, int], list[Place]] = {}
    for place in placed:
        for cell in _cells(place.tag):
            others = seen.setdefault((place.tag.table, cell), [])
            for other in others:
                if not _are_different_bits(place.tag, other.tag):
                    yield _overlap(place, _words(other), other)
            others.append(place)


def _guard_order_flaws(placed: list[Place]) -> Iterator[Flaw]:
    by_name = {place.name: place for place in placed}
    line = [by_name[name] for name in GUARD_WRITES if name in by_name]
    if len(line) < len(GUARD_WRITES):
        return
    for left, right in pairwise(line):
        if right.tag.table is not left.tag.table or right.tag.address != left.tag.address + width_of(left.tag):
            fault = f"{right.name} does not follow {left.name} without a gap"
            remedy = f"place {', '.join(GUARD_WRITES)} side by side in this order: they go in one request"
            yield Flaw((*right.loc, "address"), fault, remedy)


def _may_share(one: Place, other: Place) -> bool:
    if _are_different_bits(one.tag, other.tag):
        return True
    where = (one.tag.address, one.tag.type, one.tag.bit, one.tag.word_order, one.tag.byte_order)
    if where != (other.tag.address, other.tag.type, other.tag.bit, other.tag.word_order, other.tag.byte_order):
        return False
    return not (one.is_written and other.is_written) or {one.name, other.name} == {"op", "sp"}


def _are_different_bits(one: ModbusTag, other: ModbusTag) -> bool:
    return one.bit is not None and other.bit is not None and one.bit != other.bit


def _overlap(place: Place, other_words: str, other: Place) -> Flaw:
    fault = f"lies on the same {_where(other.tag)} as {other_words}"
    return Flaw((*place.loc, "address"), fault, "correct the address or the type of one of them")


def _where(tag: ModbusTag) -> str:
    last = tag.address + width_of(tag) - 1
    cells = f"{tag.address}" if last == tag.address else f"{tag.address} .. {last}"
    return f"{tag.table.value} {cells} (counted from 0)"


def _words(place: Place) -> str:
    return place.name if place.name.startswith("watch.") else f"tags.{place.name}"


def _cells(tag: ModbusTag) -> range:
    return range(tag.address, tag.address + width_of(tag))


def width_of(tag: ModbusTag) -> int:
    """How many addresses of its table the tag takes."""
    return 1 if tag.table in _BIT_TABLES else tag.type.register_count


def type_words(name: str) -> str:
    """The types that suit a tag, for a person."""
    allowed = SUITING_TYPES.get(name)
    return " or ".join(kind.value for kind in allowed) if allowed is not None else "a type such as REAL or INT"
