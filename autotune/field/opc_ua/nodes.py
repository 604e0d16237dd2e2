"""From node names in a file to nodes of the server that is connected now, and what these nodes hold."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from asyncua import ua
from asyncua.ua.attribute_ids import AttributeIds

from autotune.config.node_names import NodeName, PathStep, parse_node_id, parse_path
from autotune.config.types import DataType, OpcUaTag
from autotune.errors import LinkRefused
from autotune.field.opc_ua.session import Session
from autotune.field.opc_ua.status import in_words
from autotune.field.opc_ua.variants import held_type_of

NODES_PER_REQUEST = 100
"""Many servers answer no more than this in one request; a loop's own reading stays below."""

_OBJECTS = ua.NodeId.from_string("i=85")
_NAMESPACES = ua.NodeId.from_string("i=2255")
_HIERARCHICAL = ua.NodeId.from_string("i=33")
_LAST_BUILT_IN = 11  # Boolean .. Double are the data types 1 .. 11 of namespace 0


@dataclass(frozen=True, slots=True)
class FoundNode:
    """One tag's node in the server: ``held`` is ``None`` while unknown; without ``node_id`` there is a ``fault``."""

    node_id: ua.NodeId | None
    name: str
    held: DataType | None = None
    fault: str = ""


async def find_nodes(session: Session, tags: Mapping[str, OpcUaTag]) -> dict[str, FoundNode]:
    """Each tag's node, and the type of what it holds.

    A node that can't be found has a ``fault`` and no id; only the wire raises: ``LinkTimeout``,
    ``LinkClosed`` or ``LinkRefused``.
    """
    namespaces = await read_namespaces(session) if any(_asks_for_uri(tag) for tag in tags.values()) else ()
    found = {name: _by_id(tag, namespaces) for name, tag in tags.items() if not tag.path}
    by_path = {name: tag for name, tag in tags.items() if tag.path}
    found |= await _by_paths(session, by_path, namespaces)
    return await _with_types(session, {name: found[name] for name in tags})


async def read_namespaces(session: Session) -> tuple[str, ...]:
    """The URIs of the server's namespaces, by index."""
    (answer,) = await read_attributes(session, [(_NAMESPACES, AttributeIds.Value)])
    uris = None if answer.Value is None else answer.Value.Value
    if not isinstance(uris, list):
        raise LinkRefused("the server does not tell its namespaces; name nodes by ns= instead of nsu= or a path")
    return tuple(str(uri) for uri in uris)


async def read_attributes(session: Session, wanted: Sequence[tuple[ua.NodeId, AttributeIds]]) -> list[ua.DataValue]:
    """Any attributes of any nodes, in the order asked for, in requests that every server takes."""
    answers: list[ua.DataValue] = []
    for at in range(0, len(wanted), NODES_PER_REQUEST):
        params = ua.ReadParameters(
            TimestampsToReturn=ua.TimestampsToReturn.Neither,
            NodesToRead=[
                ua.ReadValueId(NodeId=node_id, AttributeId=attribute)
                for node_id, attribute in wanted[at : at + NODES_PER_REQUEST]
            ],
        )
        part, _ = await session.ask_timed(session.client.uaclient.read(params))
        answers += part
    if len(answers) != len(wanted):
        raise LinkRefused(f"the server answered {len(answers)} of {len(wanted)} attributes; its OPC UA is faulty")
    return answers


def to_node_id(name: NodeName, namespaces: Sequence[str]) -> ua.NodeId:
    """The library's node id.  Raises ``ValueError`` for a namespace that the server doesn't have."""
    index = _index_of(name.uri, namespaces) if name.uri else name.index
    return ua.NodeId.from_string(str(NodeName(name.identifier, index)))


def _index_of(namespace: str, namespaces: Sequence[str]) -> int:
    if namespace not in namespaces:
        listed = ", ".join(uri for uri in namespaces[1:]) or "none of its own"
        raise ValueError(f"the server has no namespace {namespace}; it has: {listed}")
    return namespaces.index(namespace)


def _asks_for_uri(tag: OpcUaTag) -> bool:
    return bool(tag.namespace) or tag.node_id.startswith("nsu=")


def _by_id(tag: OpcUaTag, namespaces: Sequence[str]) -> FoundNode:
    try:
        return FoundNode(to_node_id(parse_node_id(tag.node_id), namespaces), tag.node_id)
    except ValueError as fault:
        return FoundNode(None, tag.node_id, fault=str(fault))


async def _by_paths(session: Session, tags: Mapping[str, OpcUaTag], namespaces: Sequence[str]) -> dict[str, FoundNode]:
    found: dict[str, FoundNode] = {}
    paths: dict[str, ua.BrowsePath] = {}
    for name, tag in tags.items():
        try:
            paths[name] = _to_browse_path(parse_path(tag.path), tag.namespace, namespaces)
        except ValueError as fault:
            found[name] = FoundNode(None, tag.path, fault=str(fault))
    names = list(paths)
    for at in range(0, len(names), NODES_PER_REQUEST):
        part = names[at : at + NODES_PER_REQUEST]
        request = session.client.uaclient.translate_browsepaths_to_nodeids([paths[name] for name in part])
        answers, _ = await session.ask_timed(request)
        found |= {name: _at_path(tags[name].path, answer) for name, answer in zip(part, answers, strict=True)}
    return found


def _to_browse_path(steps: Sequence[PathStep], namespace: str, namespaces: Sequence[str]) -> ua.BrowsePath:
    own_index = _index_of(namespace, namespaces) if namespace else 0
    elements = [
        ua.RelativePathElement(
            ReferenceTypeId=_HIERARCHICAL,
            IsInverse=False,  # type: ignore[arg-type]  # the library types it as a class of its own
            IncludeSubtypes=True,  # type: ignore[arg-type]  # the same
            TargetName=ua.QualifiedName(step.name, own_index if step.index is None else step.index),
        )
        for step in steps
    ]
    return ua.BrowsePath(StartingNode=_OBJECTS, RelativePath=ua.RelativePath(Elements=elements))


def _at_path(path: str, answer: ua.BrowsePathResult) -> FoundNode:
    if answer.StatusCode.is_bad() or not answer.Targets:
        return FoundNode(None, path, fault=f"nothing lies at {path}: {in_words(answer.StatusCode.value)}")
    if len(answer.Targets) > 1:
        return FoundNode(None, path, fault=f"{len(answer.Targets)} nodes lie at {path}; name the node by its id")
    target = answer.Targets[0].TargetId
    return FoundNode(ua.NodeId(target.Identifier, target.NamespaceIndex), path)


async def _with_types(session: Session, found: Mapping[str, FoundNode]) -> dict[str, FoundNode]:
    """What each node holds: the type of its present value, or its declared one where that is built in."""
    known = {name: node for name, node in found.items() if node.node_id is not None}
    wanted = [
        (node.node_id, attribute)
        for node in known.values()
        if node.node_id is not None
        for attribute in (AttributeIds.Value, AttributeIds.DataType)
    ]
    answers = iter(await read_attributes(session, wanted))
    typed = dict(found)
    for (name, node), present, declared in zip(known.items(), answers, answers, strict=False):
        held = held_type_of(present) or built_in_type(declared)
        typed[name] = FoundNode(node.node_id, node.name, held, _reading_fault(present))
    return typed


def _reading_fault(present: ua.DataValue) -> str:
    code = None if present.StatusCode is None else present.StatusCode
    return "" if code is None or not code.is_bad() else in_words(code.value)


def built_in_type(declared: ua.DataValue) -> DataType | None:
    """The type of a number that a DataType attribute tells, where it is one of the standard's own."""
    data_type = None if declared.Value is None else declared.Value.Value
    if not isinstance(data_type, ua.NodeId) or data_type.NamespaceIndex != 0:
        return None
    number = data_type.Identifier
    if not (isinstance(number, int) and 1 <= number <= _LAST_BUILT_IN):
        return None
    return held_type_of(ua.DataValue(ua.Variant(0, ua.VariantType(number))))
