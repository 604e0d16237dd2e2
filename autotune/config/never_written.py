"""What the site never lets write: addresses and nodes, and which tags would touch them."""

from collections.abc import Iterable, Iterator, Sequence

from autotune.config.complaints import Flaw, shown
from autotune.config.node_names import parse_node_id
from autotune.config.node_places import NodePlace
from autotune.config.places import READ_ONLY_TABLES, Place, width_of, wire_address
from autotune.config.schema import ControllerTable
from autotune.config.schema_site import NeverWrittenTable
from autotune.config.types import AddressRange


def barred_range(told: NeverWrittenTable, controller: ControllerTable) -> AddressRange | Flaw:
    """The range on the wire, or what is wrong with it."""
    if told.node is not None:
        return Flaw(("node",), f"controller {told.controller} speaks Modbus", "write table, first and last instead")
    table, first, last = told.table, told.first, told.last
    if table is None or first is None or last is None:
        missing = next(key for key in ("table", "first", "last") if getattr(told, key) is None)
        about = NeverWrittenTable.model_fields[missing].description
        return Flaw((missing,), "missing", f"add {missing}: {about}")
    if table in READ_ONLY_TABLES:
        return Flaw(("first",), f"{table.value} can't be written anyway", "name coil or holding")
    (low, low_fault), (high, high_fault) = (wire_address(end, table, controller) for end in (first, last))
    if fault := low_fault or high_fault:
        return Flaw(("first",), *fault)
    if low > high:
        return Flaw(("first",), f"first {first} is above last {last}", "write the lower address first")
    return AddressRange(table, low, high)


def barred_node(told: NeverWrittenTable) -> str | Flaw:
    """The node's standard text, or what is wrong with it."""
    for key in ("table", "first", "last"):
        if getattr(told, key) is not None:
            return Flaw((key,), f"controller {told.controller} speaks OPC UA", "write node instead")
    if told.node is None:
        return Flaw(("node",), "missing", "add node: the node id that is never written")
    try:
        return str(parse_node_id(told.node))
    except ValueError as fault:
        return Flaw(("node",), f"{shown(told.node)} {fault}", 'write a node id such as "ns=2;s=NAME"')


def barred_flaws(placed: Iterable[Place], barred: Sequence[AddressRange]) -> Iterator[Flaw]:
    """Tags to be written that have a register in a barred range."""
    for place in placed:
        last = place.tag.address + width_of(place.tag) - 1
        for one in barred:
            is_touched = place.tag.table is one.table and place.tag.address <= one.last and last >= one.first
            if place.is_written and is_touched:
                fault = f"{place.name} lies where the site's limits allow no write"
                yield Flaw((*place.loc, "address"), fault, "correct the address or the range")


def node_barred_flaws(placed: Iterable[NodePlace], barred: Sequence[str]) -> Iterator[Flaw]:
    """Tags to be written whose node is barred; where a path leads shows only when connected, and is judged then."""
    for place in placed:
        if place.is_written and place.tag.node_id in barred:
            fault = f"{place.name} is a node that the site's limits never let write"
            yield Flaw((*place.loc, "node"), fault, "correct the node or the site's limits")
