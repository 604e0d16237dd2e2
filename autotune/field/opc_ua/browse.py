"""What an OPC UA server holds, seen from one of its nodes."""

from collections.abc import Sequence
from dataclasses import dataclass

from asyncua import ua

from autotune.config.types import OpcUaEndpoint, OpcUaTag
from autotune.errors import LinkRefused
from autotune.field.facts import NodeFact
from autotune.field.opc_ua.describe import describe
from autotune.field.opc_ua.nodes import find_nodes
from autotune.field.opc_ua.opening import Opening
from autotune.field.opc_ua.session import Session

_OBJECTS = ua.NodeId.from_string("i=85")
_HIERARCHICAL = ua.NodeId.from_string("i=33")
_HAS_PROPERTY = ua.NodeId.from_string("i=46")
_OBJECTS_AND_VARIABLES = ua.NodeClass.Object.value | ua.NodeClass.Variable.value
_NODES_PER_BROWSE = 50
_DEEPEST = 12


@dataclass(frozen=True, slots=True)
class SeenNode:
    """A node below the one where the look began: ``parent`` is its place in the list, -1 at the top.

    ``fact`` is there for variables alone.
    """

    node_id: str
    name: str
    parent: int
    depth: int
    fact: NodeFact | None


async def look_at_server(endpoint: OpcUaEndpoint, under: str = "", nodes_at_most: int = 20_000) -> tuple[SeenNode, ...]:
    """All objects and variables below ``under`` (a node id or a path; empty: the folder Objects), parents first.

    What belongs to OPC UA itself is left out.  Raises ``LinkTimeout``, ``LinkClosed`` or ``LinkRefused``.
    """
    session = await Opening(endpoint).open()
    try:
        start = await _start(session, under)
        seen, ids = await _browse(session, start, nodes_at_most)
        return await _with_facts(session, seen, ids)
    finally:
        await session.close()


async def _start(session: Session, under: str) -> ua.NodeId:
    if not under:
        return _OBJECTS
    tag = OpcUaTag("", path=under) if under.startswith("/") else OpcUaTag(under)
    (found,) = (await find_nodes(session, {"under": tag})).values()
    if found.node_id is None:
        raise LinkRefused(f"{under}: {found.fault}")
    return found.node_id


async def _browse(session: Session, start: ua.NodeId, nodes_at_most: int) -> tuple[list[SeenNode], list[ua.NodeId]]:
    """Level by level, so that one request asks for many nodes; then in the order of a tree."""
    children: dict[int, list[int]] = {-1: []}
    seen: list[SeenNode] = []
    ids: list[ua.NodeId] = []
    known = {start}
    level: list[tuple[int, ua.NodeId]] = [(-1, start)]
    for depth in range(_DEEPEST):
        answers = await _children(session, [node_id for _, node_id in level])
        parents, level = level, []
        for (parent, _), references in zip(parents, answers, strict=True):
            for one in references:
                node_id = ua.NodeId(one.NodeId.Identifier, one.NodeId.NamespaceIndex)
                if node_id in known or len(seen) >= nodes_at_most:
                    continue
                known.add(node_id)
                place = len(seen)
                is_variable = one.NodeClass == ua.NodeClass.Variable
                fact = NodeFact("", node_id.to_string()) if is_variable else None
                seen.append(SeenNode(node_id.to_string(), str(one.BrowseName.Name), parent, depth, fact))
                ids.append(node_id)
                children.setdefault(parent, []).append(place)
                level.append((place, node_id))
        if not level:
            break
    order = _as_tree(children)
    new_place = {old: new for new, old in enumerate(order)}
    ordered = [
        SeenNode(one.node_id, one.name, new_place.get(one.parent, -1), one.depth, one.fact)
        for one in (seen[place] for place in order)
    ]
    return ordered, [ids[place] for place in order]


def _as_tree(children: dict[int, list[int]]) -> list[int]:
    order: list[int] = []
    waiting = list(reversed(children[-1]))
    while waiting:
        place = waiting.pop()
        order.append(place)
        waiting += reversed(children.get(place, []))
    return order


async def _children(session: Session, parents: Sequence[ua.NodeId]) -> list[list[ua.ReferenceDescription]]:
    found: list[list[ua.ReferenceDescription]] = []
    for at in range(0, len(parents), _NODES_PER_BROWSE):
        params = ua.BrowseParameters(
            NodesToBrowse=[
                ua.BrowseDescription(
                    NodeId=parent,
                    BrowseDirection=ua.BrowseDirection.Forward,
                    ReferenceTypeId=_HIERARCHICAL,
                    IncludeSubtypes=True,
                    NodeClassMask=ua.UInt32(_OBJECTS_AND_VARIABLES),
                    ResultMask=ua.UInt32(ua.BrowseResultMask.All.value),
                )
                for parent in parents[at : at + _NODES_PER_BROWSE]
            ]
        )
        answers, _ = await session.ask_timed(session.client.uaclient.browse(params))
        found += [await _whole(session, answer) for answer in answers]
    return [[one for one in references if _is_of_the_plant(one)] for references in found]


async def _whole(session: Session, answer: ua.BrowseResult) -> list[ua.ReferenceDescription]:
    """All references of one node; a server may give them in parts."""
    references = list(answer.References or [])
    more = answer.ContinuationPoint
    while more:
        params = ua.BrowseNextParameters(ContinuationPoints=[more])
        (part,), _ = await session.ask_timed(session.client.uaclient.browse_next(params))
        references += part.References or []
        more = part.ContinuationPoint
    return references


def _is_of_the_plant(reference: ua.ReferenceDescription) -> bool:
    return bool(reference.NodeId.NamespaceIndex) and reference.ReferenceTypeId != _HAS_PROPERTY


async def _with_facts(session: Session, seen: Sequence[SeenNode], ids: Sequence[ua.NodeId]) -> tuple[SeenNode, ...]:
    variables = {one.node_id: (node_id, one.node_id) for one, node_id in zip(seen, ids, strict=True) if one.fact}
    facts = {fact.name: fact for fact in await describe(session, variables)}
    return tuple(SeenNode(one.node_id, one.name, one.parent, one.depth, facts.get(one.node_id)) for one in seen)
