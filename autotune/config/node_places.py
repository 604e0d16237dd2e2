"""Where tags lie in an OPC UA server: node ids and paths, what we write, and what must not be told twice."""

import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from autotune.config.complaints import Flaw, Loc, shown
from autotune.config.node_names import parse_node_id, parse_path
from autotune.config.places import suiting_flaws, told_tags, written_tags
from autotune.config.schema import LoopTable
from autotune.config.schema_opc_ua import OpcUaControllerTable
from autotune.config.schema_settings import BlockTable
from autotune.config.schema_tags import TagsTable, TagTable
from autotune.config.types import OpcUaTag

_LARGEST_PORT = 65535
_PLACEHOLDER = "{loop}"
_MODBUS_KEYS = ("address", "table", "bit", "word_order", "byte_order", "ne43")
_NODE_REMEDY = (
    'write it as the server\'s own tools show it: "ns=2;s=NAME", "ns=2;i=NUMBER", g= or b=, or nsu=URI; instead of ns='
)
_PATH_REMEDY = 'write the names below Objects, "/Skid/TIC-204/pv"; & before a sign such as . or :'


@dataclass(frozen=True, slots=True)
class NodePlace:
    """One tag as placed: its name, the way to it in the loop's table, and whether we write it."""

    name: str
    loc: Loc
    tag: OpcUaTag
    is_written: bool

    @property
    def where(self) -> str:
        """The node as words that are the same for the same place."""
        tag = self.tag
        return f"{tag.path} in {tag.namespace or 'the namespaces told'}" if tag.path else tag.node_id


def node_places_of(loop: LoopTable, block: BlockTable | None) -> tuple[list[NodePlace], list[Flaw]]:
    """All tags of a loop in an OPC UA server, and what is wrong with them."""
    written = written_tags(loop, block)
    placed: list[NodePlace] = []
    flaws = list(_foreign_flaws(loop))
    seen: dict[str, str] = {}
    for name, loc, told in told_tags(loop):
        tag, flaw = _placed_tag(loc, told, loop.tags, loop.name)
        flaws += _foreign_tag_flaws(loc, told)
        if flaw is not None:
            flaws.append(flaw)
        if tag is None:
            continue
        flaws += suiting_flaws(name, loc, tag)
        if tag.scale == 0:
            flaws.append(Flaw((*loc, "scale"), "0 makes every reading the same", "write engineering units per raw"))
        place = NodePlace(name, loc, tag, name in written)
        if place.where in seen:
            fault = f"the same node as {seen[place.where]}"
            flaws.append(Flaw((*loc, _key(told)), fault, "correct one of them"))
        seen.setdefault(place.where, name if name.startswith("watch.") else f"tags.{name}")
        placed.append(place)
    return placed, flaws


def node_overlaps_between(
    loops: Iterable[tuple[str, tuple[object, ...], list[NodePlace]]],
) -> Iterator[tuple[str, Flaw]]:
    """Nodes that two loops of one server write: (loop, flaw).  A master's output may be the slave's setpoint."""
    seen: dict[tuple[object, ...], tuple[str, NodePlace]] = {}
    for loop, endpoint, placed in loops:
        for place in placed:
            if not place.is_written:
                continue
            other_loop, other = seen.setdefault((endpoint, place.where), (loop, place))
            if other_loop != loop and {place.name, other.name} != {"op", "sp"}:
                fault = f"the same node as loop[{other_loop}].tags.{other.name}, and both are written"
                yield loop, Flaw(place.loc, fault, "correct the node of one of them")


def opc_ua_flaws(controller: OpcUaControllerTable) -> Iterator[Flaw]:
    """What the rules of single keys can't see: the port in the address, and keys that don't go together."""
    port = re.search(r":(\d+)(?:/|$)", controller.url.removeprefix("opc.tcp://"))
    if port is not None and not 1 <= int(port[1]) <= _LARGEST_PORT:
        yield Flaw(("url",), f"there is no port {port[1]}", f"write a port from 1 to {_LARGEST_PORT}, usually 4840")
    if controller.security.value == "none":
        for key in ("security_policy", "server_thumbprint", "server_name"):
            if getattr(controller, key) is not None:
                yield Flaw((key,), 'told, but security = "none"', 'take it out, or write security = "sign and encrypt"')
        for key in ("user", "user_certificate"):
            if getattr(controller, key) is not None:
                fault = 'would cross the network unprotected with security = "none"'
                yield Flaw(
                    (key,), fault, 'write security = "sign and encrypt", or let the server allow nameless sessions'
                )
    for one, other in (("user", "password_from"), ("user_certificate", "user_key")):
        if (getattr(controller, one) is None) != (getattr(controller, other) is None):
            missing = one if getattr(controller, one) is None else other
            about = OpcUaControllerTable.model_fields[missing].description
            yield Flaw((missing,), "missing", f"add {missing}: {about}")
    if controller.user is not None and controller.user_certificate is not None:
        yield Flaw(("user",), "told beside user_certificate", "come either with a name or with a certificate")


def _placed_tag(loc: Loc, told: TagTable, shared: TagsTable, loop: str) -> tuple[OpcUaTag | None, Flaw | None]:
    kind = told.type or shared.type
    scaled = {"type": kind, "scale": told.scale, "offset": told.offset}
    if told.node is not None and told.path is not None:
        return None, Flaw((*loc, "path"), "told beside node", "keep one of the two")
    if told.node is not None:
        text = told.node.replace(_PLACEHOLDER, loop)
        try:
            return OpcUaTag(str(parse_node_id(text)), **scaled), None  # type: ignore[arg-type]  # each as its field
        except ValueError as fault:
            return None, Flaw((*loc, "node"), f"{shown(text)} {fault}", _NODE_REMEDY)
    if told.path is None:
        return None, Flaw((*loc, "node"), "missing", f"add node: {TagTable.model_fields['node'].description}")
    text, namespace = told.path.replace(_PLACEHOLDER, loop), told.namespace or shared.namespace or ""
    try:
        steps = parse_path(text)
    except ValueError as fault:
        return None, Flaw((*loc, "path"), f"{shown(text)} {fault}", _PATH_REMEDY)
    if not namespace and any(step.index is None for step in steps):
        remedy = 'add namespace = "URI" here or in [loop.tags], or an index before each name: "/2:Skid/2:pv"'
        return None, Flaw((*loc, "namespace"), "missing: the path's names belong to no namespace", remedy)
    return OpcUaTag("", path=text, namespace=namespace, **scaled), None  # type: ignore[arg-type]  # each as its field


def _foreign_flaws(loop: LoopTable) -> Iterator[Flaw]:
    if loop.tags.table is not None:
        yield Flaw(("tags", "table"), "belongs to Modbus, and the controller speaks OPC UA", "take it out")
    if loop.address_offset:
        yield Flaw(("address_offset",), "belongs to Modbus, and the controller speaks OPC UA", "take it out")


def _foreign_tag_flaws(loc: Loc, told: TagTable) -> Iterator[Flaw]:
    for key in _MODBUS_KEYS:
        if getattr(told, key) is not None:
            yield Flaw((*loc, key), "belongs to Modbus, and the controller speaks OPC UA", "take it out")


def _key(told: TagTable) -> str:
    return "node" if told.node is not None else "path"
