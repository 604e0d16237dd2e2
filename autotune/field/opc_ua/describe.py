"""Nodes as their server describes them: type, rank, rights, range, unit and the words of an enumeration."""

from collections.abc import Mapping, Sequence
from typing import Any

from asyncua import ua
from asyncua.ua.attribute_ids import AttributeIds

from autotune.config.types import DataType
from autotune.field.facts import NodeFact
from autotune.field.opc_ua.nodes import NODES_PER_REQUEST, built_in_type, read_attributes
from autotune.field.opc_ua.session import Session
from autotune.field.opc_ua.status import in_words
from autotune.field.opc_ua.variants import held_type_of

_HAS_PROPERTY = ua.NodeId.from_string("i=46")
_SCALAR = -1  # OPC 10000-3, 5.6.2: value rank
_READ, _WRITE = 1, 2  # OPC 10000-3, 8.57: bits of an access level
_ATTRIBUTES = (
    AttributeIds.Value,
    AttributeIds.DataType,
    AttributeIds.ValueRank,
    AttributeIds.AccessLevel,
    AttributeIds.UserAccessLevel,
)


async def describe(session: Session, nodes: Mapping[str, tuple[ua.NodeId, str]]) -> tuple[NodeFact, ...]:
    """A fact for each node, told as name to node id and the words for where it lies; in the same order."""
    ids = [node_id for node_id, _ in nodes.values()]
    answers = await read_attributes(session, [(node_id, one) for node_id in ids for one in _ATTRIBUTES])
    rows = [answers[at : at + len(_ATTRIBUTES)] for at in range(0, len(answers), len(_ATTRIBUTES))]
    ranges = await _properties(session, ids, "EURange")
    units = await _properties(session, ids, "EngineeringUnits")
    types = [_content(row[1]) for row in rows]
    words = await _enumerations(session, [one for one in types if isinstance(one, ua.NodeId)])
    return tuple(
        _to_fact(name, where, row, ranges.get(node_id), units.get(node_id), words.get(_content(row[1]), ()))
        for (name, (node_id, where)), row in zip(nodes.items(), rows, strict=True)
    )


def _to_fact(
    name: str, where: str, row: Sequence[ua.DataValue], eu_range: Any, unit: Any, words: tuple[tuple[int, str], ...]
) -> NodeFact:
    present, declared, rank, access, own_access = row
    status = present.StatusCode
    is_unknown = status is not None and status.is_bad()
    rights = _content(own_access) if isinstance(_content(own_access), int) else _content(access)
    is_ranged = isinstance(eu_range, ua.Range) and eu_range.Low < eu_range.High
    is_measured = isinstance(unit, ua.EUInformation)
    return NodeFact(
        name,
        where,
        held=held_type_of(present) or built_in_type(declared) or (DataType.DINT if words else None),
        is_scalar=None if not isinstance(_content(rank), int) else _content(rank) == _SCALAR,
        is_readable=None if not isinstance(rights, int) else bool(rights & _READ),
        is_writable=None if not isinstance(rights, int) else bool(rights & _WRITE),
        low_eu=float(eu_range.Low) if is_ranged else None,
        high_eu=float(eu_range.High) if is_ranged else None,
        unit=(unit.DisplayName.Text or "") if is_measured else "",
        unit_id=int(unit.UnitId) if is_measured else None,
        words=words,
        fault=in_words(status.value) if status is not None and is_unknown else "",
    )


async def _properties(session: Session, owners: Sequence[ua.NodeId], name: str) -> dict[ua.NodeId, Any]:
    """What the property of this standard name holds, for those owners that have it."""
    element = ua.RelativePathElement(
        ReferenceTypeId=_HAS_PROPERTY,
        IsInverse=False,  # type: ignore[arg-type]  # the library types it as a class of its own
        IncludeSubtypes=True,  # type: ignore[arg-type]  # the same
        TargetName=ua.QualifiedName(name),
    )
    found: dict[ua.NodeId, ua.NodeId] = {}
    for at in range(0, len(owners), NODES_PER_REQUEST):
        part = owners[at : at + NODES_PER_REQUEST]
        paths = [ua.BrowsePath(StartingNode=one, RelativePath=ua.RelativePath(Elements=[element])) for one in part]
        answers, _ = await session.ask_timed(session.client.uaclient.translate_browsepaths_to_nodeids(paths))
        for owner, answer in zip(part, answers, strict=True):
            if answer.Targets and not answer.StatusCode.is_bad():
                target = answer.Targets[0].TargetId
                found[owner] = ua.NodeId(target.Identifier, target.NamespaceIndex)
    contents = await read_attributes(session, [(one, AttributeIds.Value) for one in found.values()])
    return {owner: _content(content) for owner, content in zip(found, contents, strict=True)}


async def _enumerations(session: Session, types: Sequence[ua.NodeId]) -> dict[ua.NodeId, tuple[tuple[int, str], ...]]:
    own = [one for one in dict.fromkeys(types) if one.NamespaceIndex or built_in_type_of(one) is None]
    texts = await _properties(session, own, "EnumStrings")
    told = await _properties(session, own, "EnumValues")
    words = {
        owner: tuple(enumerate(str(text.Text) for text in content))
        for owner, content in texts.items()
        if isinstance(content, list) and all(isinstance(text, ua.LocalizedText) for text in content)
    }
    return words | {
        owner: tuple((int(one.Value), str(one.DisplayName.Text)) for one in content)
        for owner, content in told.items()
        if isinstance(content, list) and all(isinstance(one, ua.EnumValueType) for one in content)
    }


def built_in_type_of(data_type: ua.NodeId) -> DataType | None:
    """The type that a data type of the standard's own stands for."""
    return built_in_type(ua.DataValue(ua.Variant(data_type, ua.VariantType.NodeId)))


def _content(answer: ua.DataValue) -> Any:
    bad = answer.StatusCode is not None and answer.StatusCode.is_bad()
    return None if bad or answer.Value is None else answer.Value.Value
