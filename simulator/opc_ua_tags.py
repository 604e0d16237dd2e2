"""The address space of the plant's OPC UA server: a folder per plant unit, an object per loop, a variable per tag.

Tags, their access and their meaning are those of the register map; here stands only what OPC UA adds: data
types, ranges, engineering units and enumerations.  NodeIds are strings such as ``TIC-204.pv``.
"""

import struct
from dataclasses import dataclass
from math import inf

from asyncua import ua
from asyncua.server.server import Server
from asyncua.ua.object_ids import ObjectIds

from simulator.block import Mode
from simulator.guard import GuardState
from simulator.loop import Loop
from simulator.plc import Plc
from simulator.registers import Register, loop_registers

NAMESPACE = "urn:soft-plant:loops"
UNIT_NAMESPACE = "http://www.opcfoundation.org/UA/units/un/cefact"
COMMON_CODES = {
    "%": "P1",
    "degC": "CEL",
    "K": "KEL",
    "bar": "BAR",
    "kPa": "KPA",
    "Pa": "PAL",
    "m3/h": "MQH",
    "mm": "MMT",
    "l": "LTR",
    "s": "SEC",
    "rpm": "RPM",
}
"""UN/ECE Recommendation 20; a unit that isn't listed gets the id -1."""
BOOLEANS = ("guard_alarm", "enable", "stop", "test_active", "block_saturated")
ENUMERATIONS: dict[str, tuple[str, tuple[str, ...]]] = {
    "mode": ("LoopMode", tuple(mode.name for mode in Mode)),
    "guard_state": ("GuardState", tuple(state.name.lower().replace("_", " ") for state in GuardState)),
}
"""Tag to the name of its data type and its words, counted from 0."""
VARIANT_TYPES = {
    "REAL": ua.VariantType.Float,
    "UDINT": ua.VariantType.UInt32,
    "UINT": ua.VariantType.UInt16,
    "WORD": ua.VariantType.UInt16,
}


@dataclass(frozen=True, slots=True)
class Tag:
    """One variable: whose it is, how it is typed, and who may write it in principle."""

    loop: Loop
    register: Register
    type: ua.VariantType
    node_id: ua.NodeId

    @property
    def name(self) -> str:
        """The tag's name within its loop."""
        return self.register.name

    @property
    def is_writable(self) -> bool:
        """Whether this plant takes writes of it at all."""
        return self.register.is_writable and self.name not in self.loop.spec.read_only

    @property
    def range(self) -> tuple[float, float] | None:
        """Low and high end in the tag's unit, of analog tags only."""
        if self.register.unit == "EU":
            return self.loop.spec.pv_low_eu, self.loop.spec.pv_high_eu
        return (0.0, 100.0) if self.register.unit == "%" else None

    @property
    def unit(self) -> str:
        """The unit as the rig writes it."""
        return self.loop.spec.pv_unit if self.register.unit == "EU" else self.register.unit


def loop_tags(loop: Loop, namespace: int) -> list[Tag]:
    """The tags of one loop."""
    return [
        Tag(loop, register, _variant_type(loop, register), named(f"{loop.spec.name}.{register.name}", namespace))
        for register in loop_registers(loop)
        if register.mirrors is None
    ]


def named(identifier: str, namespace: int) -> ua.NodeId:
    """A NodeId with a text."""
    return ua.NodeId(ua.String(identifier), ua.Int16(namespace))


def numbered(identifier: int) -> ua.NodeId:
    """A NodeId of OPC UA's own namespace."""
    return ua.NodeId(ua.Int32(identifier))


def to_status(code: int) -> ua.StatusCode:
    """A status code by its number."""
    return ua.StatusCode(ua.UInt32(code))


def to_variant(reading: float, variant_type: ua.VariantType) -> ua.Variant:
    """A reading in the given type.  A Float too large for single precision becomes an infinity."""
    if variant_type is ua.VariantType.Boolean:
        return ua.Variant(bool(reading), variant_type)
    if variant_type is ua.VariantType.Float:
        try:
            reading = struct.unpack("<f", struct.pack("<f", reading))[0]
        except OverflowError:
            reading = inf if reading > 0.0 else -inf
        return ua.Variant(reading, variant_type)
    return ua.Variant(float(reading) if variant_type is ua.VariantType.Double else int(reading), variant_type)


def unit_id(unit: str) -> int:
    """The id of a unit: the characters of its common code as a big-endian number (OPC 10000-8, EUInformation)."""
    return int.from_bytes(COMMON_CODES[unit].encode("ascii"), "big") if unit in COMMON_CODES else -1


async def add_plant(server: Server, plc: Plc) -> list[Tag]:
    """Put the whole plant into the address space of an initialised server; returns all tags."""
    namespace = await server.register_namespace(NAMESPACE)
    enumerations = {tag: await _add_enumeration(server, namespace, *ENUMERATIONS[tag]) for tag in ENUMERATIONS}
    items: list[ua.AddNodesItem] = []
    tags: list[Tag] = []
    for unit in dict.fromkeys(loop.spec.unit for loop in plc.loops.values()):
        items.append(_object(numbered(ObjectIds.ObjectsFolder), f"unit/{unit}", unit, unit, namespace, is_folder=True))
    for name, loop in plc.loops.items():
        folder = named(f"unit/{loop.spec.unit}", namespace)
        items.append(_object(folder, name, name, loop.spec.service, namespace, is_folder=False))
        for tag in loop_tags(loop, namespace):
            tags.append(tag)
            items.extend(_variable(tag, enumerations.get(tag.name), plc.scan_s))
    for result in await server.iserver.isession.add_nodes(items):
        result.StatusCode.check()
    return tags


def _variant_type(loop: Loop, register: Register) -> ua.VariantType:
    if register.name in BOOLEANS or register.name in loop.watch:
        return ua.VariantType.Boolean
    return ua.VariantType.Int32 if register.name in ENUMERATIONS else VARIANT_TYPES[register.type]


async def _add_enumeration(server: Server, namespace: int, name: str, words: tuple[str, ...]) -> ua.NodeId:
    parent = server.get_node(numbered(ObjectIds.Enumeration))
    enumeration = await parent.add_data_type(named(name, namespace), ua.QualifiedName(name, namespace))
    await enumeration.add_property(
        named(f"{name}.EnumStrings", namespace),
        ua.QualifiedName("EnumStrings"),
        [ua.LocalizedText(word) for word in words],
    )
    return enumeration.nodeid


def _object(
    parent: ua.NodeId, identifier: str, name: str, description: str, namespace: int, *, is_folder: bool
) -> ua.AddNodesItem:
    item = ua.AddNodesItem()
    item.ParentNodeId = parent
    item.ReferenceTypeId = numbered(ObjectIds.Organizes)
    item.RequestedNewNodeId = named(identifier, namespace)
    item.BrowseName = ua.QualifiedName(name, namespace)
    item.NodeClass = ua.NodeClass.Object
    item.TypeDefinition = numbered(ObjectIds.FolderType if is_folder else ObjectIds.BaseObjectType)
    item.NodeAttributes = ua.ObjectAttributes(
        DisplayName=ua.LocalizedText(name), Description=ua.LocalizedText(description), EventNotifier=0
    )
    return item


def _variable(tag: Tag, enumeration: ua.NodeId | None, scan_s: float) -> list[ua.AddNodesItem]:
    namespace = tag.node_id.NamespaceIndex
    access = ua.AccessLevel.CurrentRead.mask | (ua.AccessLevel.CurrentWrite.mask if tag.is_writable else 0)
    item = _variable_item(
        named(tag.loop.spec.name, namespace),
        ObjectIds.HasComponent,
        tag.node_id,
        ua.QualifiedName(tag.name, namespace),
        ObjectIds.BaseDataVariableType if tag.range is None else ObjectIds.AnalogUnitRangeType,
    )
    item.NodeAttributes = ua.VariableAttributes(
        DisplayName=ua.LocalizedText(tag.name),
        Description=ua.LocalizedText(tag.register.meaning),
        Value=to_variant(0.0, tag.type),
        DataType=enumeration or numbered(tag.type.value),
        ValueRank=ua.ValueRank.Scalar,
        AccessLevel=access,
        UserAccessLevel=access,
        MinimumSamplingInterval=1000.0 * scan_s,
    )
    if tag.range is None:
        return [item]
    low, high = tag.range
    unit = ua.EUInformation(UNIT_NAMESPACE, unit_id(tag.unit), ua.LocalizedText(tag.unit), ua.LocalizedText(tag.unit))
    return [
        item,
        _property(tag.node_id, "EURange", ua.Range(low, high), ObjectIds.Range),
        _property(tag.node_id, "EngineeringUnits", unit, ObjectIds.EUInformation),
    ]


def _property(owner: ua.NodeId, name: str, content: ua.Range | ua.EUInformation, data_type: int) -> ua.AddNodesItem:
    node_id = named(f"{owner.Identifier!s}.{name}", owner.NamespaceIndex)
    item = _variable_item(owner, ObjectIds.HasProperty, node_id, ua.QualifiedName(name), ObjectIds.PropertyType)
    item.NodeAttributes = ua.VariableAttributes(
        DisplayName=ua.LocalizedText(name),
        Value=ua.Variant(content, ua.VariantType.ExtensionObject),
        DataType=numbered(data_type),
        ValueRank=ua.ValueRank.Scalar,
        AccessLevel=ua.AccessLevel.CurrentRead.mask,
        UserAccessLevel=ua.AccessLevel.CurrentRead.mask,
    )
    return item


def _variable_item(
    parent: ua.NodeId, reference: int, node_id: ua.NodeId, name: ua.QualifiedName, definition: int
) -> ua.AddNodesItem:
    item = ua.AddNodesItem()
    item.ParentNodeId = parent
    item.ReferenceTypeId = numbered(reference)
    item.RequestedNewNodeId = node_id
    item.BrowseName = name
    item.NodeClass = ua.NodeClass.Variable
    item.TypeDefinition = numbered(definition)
    return item
