"""The plant's OPC UA face: what it shows, what it takes and what it refuses, over real sockets."""

import asyncio
import json
import math
import struct
from collections.abc import AsyncIterator
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
import pytest_asyncio
from asyncua import ua
from asyncua.client.client import Client
from asyncua.ua.attribute_ids import AttributeIds
from asyncua.ua.object_ids import ObjectIds

from simulator.block import Mode
from simulator.opc_ua_security import Access, Account, Role
from simulator.opc_ua_tags import COMMON_CODES, NAMESPACE, UNIT_NAMESPACE, named, unit_id
from simulator.registers import BLOCK_SIZE, Registers, from_words, loop_registers
from tests.simulator.opc_ua import (
    FLOAT,
    INT32,
    UINT16,
    UINT32,
    Plant,
    connected,
    read,
    serving,
    write,
    write_data_values,
)
from tests.simulator.opc_ua import NAMESPACE as INDEX

pytestmark = [pytest.mark.socket, pytest.mark.asyncio(loop_scope="module")]
CHECKS = {
    check["id"]: check["expected"]
    for check in json.loads((Path(__file__).parents[1] / "reference" / "checks.json").read_text(encoding="utf-8"))
}
CODES = {name: int(code, 16) for name, code in CHECKS["ST-UA1"].items()}
GOOD = CODES["Good"]


@pytest_asyncio.fixture(scope="module", loop_scope="module")
async def served(tmp_path_factory: pytest.TempPathFactory) -> AsyncIterator[Plant]:
    access = Access(
        pki=tmp_path_factory.mktemp("pki"),
        accounts=(Account("shift", "juice", Role.OPERATE), Account("visitor", "look", Role.READ)),
        is_none_offered=True,
    )
    async with serving(access) as plant:
        yield plant


@pytest_asyncio.fixture(loop_scope="module")
async def plant(served: Plant) -> AsyncIterator[Plant]:
    yield served
    await served.heal()


@pytest_asyncio.fixture(loop_scope="module")
async def client(plant: Plant) -> AsyncIterator[Client]:
    async with connected(plant, "shift", "juice") as opened:
        yield opened


def single(number: float) -> float:
    return float(struct.unpack(">f", struct.pack(">f", number))[0])


async def test_every_tag_equals_the_register_map_in_the_same_scan(plant: Plant, client: Client) -> None:
    plant.plc.loops["TIC-204"].press_enable()
    plant.plc.loops["PIC-110"].mailbox.heartbeat = 12345
    for _ in range(7):
        await plant.scan()
    registers = Registers(plant.plc, word_order="big")
    for number, loop in enumerate(plant.plc.loops.values()):
        entries = [entry for entry in loop_registers(loop) if entry.mirrors is None]
        shown = await read(client, *(f"{loop.spec.name}.{entry.name}" for entry in entries))
        image = registers.read(number * BLOCK_SIZE, BLOCK_SIZE)
        for entry, data_value in zip(entries, shown, strict=True):
            words = image[entry.offset : entry.offset + entry.size]
            assert data_value.Value is not None
            assert data_value.Value.Value == from_words(words, entry.type, is_low_word_first=False), entry.name
            assert data_value.StatusCode == ua.StatusCode()


async def test_the_plant_is_browsed_by_unit_loop_and_tag(client: Client) -> None:
    assert await client.get_namespace_index(NAMESPACE) == INDEX
    node = await client.nodes.objects.get_child([f"{INDEX}:pasteuriser", f"{INDEX}:TIC-204", f"{INDEX}:pv"])
    assert node.nodeid.to_string() == f"ns={INDEX};s=TIC-204.pv"
    loop = await node.get_parent()
    assert loop is not None
    assert (await loop.read_description()).Text == "juice outlet temperature"
    names = {(await child.read_browse_name()).Name for child in await loop.get_children()}
    assert {"sp", "op", "mode", "gain", "holder", "plc_clock_ms", "op_effect_ms", "divert_valve_closed"} <= names


@pytest.mark.parametrize(
    ("tag", "low", "high", "code"),
    [
        ("TIC-204.pv", 0.0, 120.0, "CEL"),
        ("TIC-204.sp", 0.0, 120.0, "CEL"),
        ("PIC-110.pv", 0.0, 6.0, "BAR"),
        ("FIC-101.pv", 0.0, 8.0, "MQH"),
        ("LIC-102.sp", 0.0, 2000.0, "MMT"),
        ("TIC-204.op", 0.0, 100.0, "P1"),
        ("TIC-204.op_request", 0.0, 100.0, "P1"),
    ],
)
async def test_analog_tags_tell_range_and_unit(client: Client, tag: str, low: float, high: float, code: str) -> None:
    # Unit ids: OPC 10000-8, EUInformation, and the OPC Foundation's list of UN/ECE codes (ST-UA3).
    node = client.get_node(named(tag, INDEX))
    definition = await node.read_type_definition()
    assert definition is not None
    assert definition.Identifier == ObjectIds.AnalogUnitRangeType
    eu_range, unit = [
        await (await node.get_child(f"0:{name}")).read_value() for name in ("EURange", "EngineeringUnits")
    ]
    assert (eu_range.Low, eu_range.High) == (low, high)
    assert (unit.NamespaceUri, unit.UnitId) == (UNIT_NAMESPACE, CHECKS["ST-UA3"][code])


async def test_unit_ids_are_those_of_the_published_list_and_minus_one_for_others() -> None:
    assert {unit_id(unit) for unit in COMMON_CODES} == {CHECKS["ST-UA3"][code] for code in COMMON_CODES.values()}
    assert unit_id("furlong") == -1


@pytest.mark.parametrize(
    ("tag", "words"), [("mode", ["MAN", "AUTO", "CAS"]), ("guard_state", ["idle", "armed", "gave back"])]
)
async def test_enumerated_tags_tell_their_words(client: Client, tag: str, words: list[str]) -> None:
    data_type = client.get_node(await client.get_node(named(f"TIC-204.{tag}", INDEX)).read_data_type())
    strings = await (await data_type.get_child("0:EnumStrings")).read_value()
    assert [text.Text for text in strings] == words
    parent = await data_type.get_parent()
    assert parent is not None
    assert parent.nodeid.Identifier == ObjectIds.Enumeration


async def test_the_source_timestamp_is_the_instant_of_the_scan_and_stands_while_the_plc_is_in_stop(
    plant: Plant, client: Client
) -> None:
    await plant.scan()
    before = datetime.now(UTC)
    await plant.scan(age_s=5.0)
    pv, clock, gain = await read(client, "LIC-102.pv", "LIC-102.plc_clock_ms", "LIC-102.gain")
    assert pv.SourceTimestamp is not None
    assert abs(pv.SourceTimestamp.timestamp() - (before - timedelta(seconds=5.0)).timestamp()) < 1.0
    assert clock.SourceTimestamp == pv.SourceTimestamp
    assert gain.SourceTimestamp != pv.SourceTimestamp  # unchanged since
    await plant.fault("plc-stop")
    frozen = await read(client, "LIC-102.pv", "LIC-102.plc_clock_ms")
    await plant.scan()
    later = await read(client, "LIC-102.pv", "LIC-102.plc_clock_ms")
    assert [item.Value for item in later] == [item.Value for item in frozen]
    assert [item.SourceTimestamp for item in later] == [item.SourceTimestamp for item in frozen]


async def test_in_stop_a_heartbeat_is_taken_and_not_echoed(plant: Plant, client: Client) -> None:
    await plant.scan()
    await plant.fault("plc-stop")
    [echo] = await read(client, "FIC-101.heartbeat_echo")
    assert await write(client, ("FIC-101.heartbeat", 77, UINT16)) == [GOOD]
    await plant.scan()
    heartbeat, still = await read(client, "FIC-101.heartbeat", "FIC-101.heartbeat_echo")
    assert heartbeat.Value == ua.Variant(77, UINT16)
    assert still.Value == echo.Value


async def test_writes_act_on_the_loop_at_once_and_are_read_back(plant: Plant, client: Client) -> None:
    loop = plant.plc.loops["LIC-102"]
    writes: list[tuple[str, object, ua.VariantType]] = [
        ("LIC-102.mode", int(Mode.MAN), INT32),
        ("LIC-102.op", 51.5, FLOAT),
        ("LIC-102.sp", 990.0, FLOAT),
        ("LIC-102.gain", 1.75, FLOAT),
        ("LIC-102.holder_request", 2**32 - 1, UINT32),
        ("LIC-102.heartbeat", 65535, UINT16),
        ("LIC-102.op_request", 52.25, FLOAT),
        ("LIC-102.sequence", 9, UINT16),
    ]
    assert await write(client, *writes) == [GOOD] * len(writes)
    assert (loop.block.mode, loop.block.op_pct) == (Mode.MAN, 51.5)
    assert loop.sp_eu == pytest.approx(990.0)
    assert (loop.block.settings.gain, loop.mailbox.holder_request) == (1.75, 2**32 - 1)
    assert (loop.mailbox.heartbeat, loop.mailbox.op_request, loop.mailbox.sequence) == (65535, 52.25, 9)
    shown = await read(client, *(name for name, _, _ in writes))
    assert [item.Value for item in shown] == [ua.Variant(content, kind) for _, content, kind in writes]


@pytest.mark.parametrize(
    ("tag", "content", "kind", "code"),
    [
        ("TIC-204.pv", 1.0, FLOAT, "BadNotWritable"),
        ("TIC-204.guard_state", 0, INT32, "BadNotWritable"),
        ("TIC-204.enable", True, ua.VariantType.Boolean, "BadNotWritable"),
        ("TIC-204.sp", 120.5, FLOAT, "BadOutOfRange"),
        ("TIC-204.mode", 2, INT32, "BadOutOfRange"),
        ("TIC-204.gain", math.nan, FLOAT, "BadOutOfRange"),
        ("TIC-204.sp", 78.0, ua.VariantType.Double, "BadTypeMismatch"),
        ("TIC-204.mode", 0, ua.VariantType.UInt32, "BadTypeMismatch"),
        ("TIC-204.heartbeat", 1, ua.VariantType.Int64, "BadTypeMismatch"),
        ("TIC-204.sp", [78.0], FLOAT, "BadTypeMismatch"),
        ("TIC-204.nothing", 78.0, FLOAT, "BadNodeIdUnknown"),
    ],
)
async def test_a_refused_write_says_why_and_changes_nothing(
    plant: Plant, client: Client, tag: str, content: object, kind: ua.VariantType, code: str
) -> None:
    before = plant.plc.loops["TIC-204"].readings()
    assert await write(client, (tag, content, kind)) == [CODES[code]]
    assert plant.plc.loops["TIC-204"].readings() == before


async def test_only_whole_values_of_tags_can_be_written(plant: Plant, client: Client) -> None:
    part = ua.WriteValue(named("TIC-204.sp", INDEX), ua.UInt32(AttributeIds.Value), ua.String("0"))
    name = ua.WriteValue(named("TIC-204.sp", INDEX), ua.UInt32(AttributeIds.DisplayName))
    part.Value = ua.DataValue(ua.Variant(70.0, FLOAT))
    name.Value = ua.DataValue(ua.Variant(ua.LocalizedText("mine"), ua.VariantType.LocalizedText))
    span = ua.WriteValue(named("TIC-204.pv.EURange", INDEX), ua.UInt32(AttributeIds.Value))
    span.Value = ua.DataValue(ua.Variant(ua.Range(0.0, 1.0), ua.VariantType.ExtensionObject))
    before = plant.plc.loops["TIC-204"].readings()
    codes = [int(code.value) for code in await client.uaclient.write(ua.WriteParameters([part, name, span]))]
    # BadIndexRangeNoData: OPC 10000-6, StatusCode.csv
    assert codes == [0x80370000, CODES["BadNotWritable"], CODES["BadUserAccessDenied"]]
    assert plant.plc.loops["TIC-204"].readings() == before


@pytest.mark.parametrize("user", [None, "visitor"])
async def test_who_may_only_read_is_denied_every_write(plant: Plant, user: str | None) -> None:
    async with connected(plant, user, "look") as reader:
        [pv] = await read(reader, "TIC-204.pv")
        assert pv.Value is not None
        codes = await write(reader, ("TIC-204.sp", 77.0, FLOAT), ("TIC-204.pv", 1.0, FLOAT))
    assert codes == [CODES["BadUserAccessDenied"], CODES["BadNotWritable"]]


async def test_a_written_status_is_not_supported_and_a_stamp_only_when_told_so(plant: Plant, client: Client) -> None:
    variant = ua.Variant(1, UINT16)
    stamped = ua.DataValue(variant, SourceTimestamp=ua.DateTime.now(UTC))
    coloured = ua.DataValue(variant, ua.StatusCode(ua.UInt32(CODES["UncertainSubNormal"])))
    codes = await write_data_values(client, [("PIC-110.heartbeat", stamped), ("PIC-110.heartbeat", coloured)])
    assert codes == [GOOD, CODES["BadWriteNotSupported"]]
    await plant.fault("refuse-stamped-writes")
    codes = await write_data_values(
        client, [("PIC-110.heartbeat", stamped), ("PIC-110.heartbeat", ua.DataValue(variant))]
    )
    assert codes == [CODES["BadWriteNotSupported"], GOOD]


async def test_the_guard_lends_moves_and_gives_back_over_opc_ua(plant: Plant, client: Client) -> None:
    loop = plant.plc.loops["PIC-110"]
    loop.press_enable()
    await plant.scan()
    await write(client, ("PIC-110.holder_request", 4711, UINT32), ("PIC-110.heartbeat", 1, UINT16))
    await plant.scan()
    armed, holder = await read(client, "PIC-110.guard_state", "PIC-110.holder")
    assert (armed.Value, holder.Value) == (ua.Variant(1, INT32), ua.Variant(4711, UINT32))
    await write(client, ("PIC-110.mode", 0, INT32))
    # The number comes before the output in the request; the guard still sees both in one scan.
    sequence, request = ("PIC-110.sequence", 1, UINT16), ("PIC-110.op_request", 60.0, FLOAT)
    assert await write(client, sequence, request, ("PIC-110.heartbeat", 2, UINT16)) == [GOOD] * 3
    await plant.scan()
    op, count, effect, clock = await read(
        client, "PIC-110.op", "PIC-110.op_effect_count", "PIC-110.op_effect_ms", "PIC-110.plc_clock_ms"
    )
    assert (op.Value, count.Value) == (ua.Variant(60.0, FLOAT), ua.Variant(1, UINT32))
    assert effect.Value == clock.Value
    while loop.guard.is_test_active:  # nobody beats
        await plant.scan()
    state, mode, alarm = await read(client, "PIC-110.guard_state", "PIC-110.mode", "PIC-110.guard_alarm")
    assert (state.Value, mode.Value, alarm.Value) == (ua.Variant(2, INT32), ua.Variant(1, INT32), ua.Variant(True))


@pytest.mark.parametrize("refused", [("FIC-101.op_request", 60.0, ua.VariantType.Double), ("FIC-101.sp", -1.0, FLOAT)])
async def test_a_new_sequence_is_not_taken_when_its_request_was_refused_in_part(
    plant: Plant, client: Client, refused: tuple[str, object, ua.VariantType]
) -> None:
    mailbox = plant.plc.loops["FIC-101"].mailbox
    before = mailbox.sequence
    codes = await write(client, ("FIC-101.sequence", before + 1, UINT16), refused, ("TIC-311.sequence", 5, UINT16))
    assert codes[0] == 0x80AF0000  # BadInvalidState (OPC 10000-6, StatusCode.csv)
    assert codes[1] & 0x80000000
    assert codes[2] == GOOD  # another loop's
    assert mailbox.sequence == before


@pytest.mark.parametrize(
    ("quality", "code", "has_value"),
    [
        ("bad", "BadDeviceFailure", False),
        ("uncertain", "UncertainLastUsableValue", True),
        ("forced", "GoodLocalOverride", True),
        ("clamped", "GoodClamped", True),
    ],
)
async def test_a_tags_quality_can_be_set(
    plant: Plant, client: Client, quality: str, code: str, *, has_value: bool
) -> None:
    await plant.fault(f"quality TIC-204 pv {quality}")
    pv, sp = await read(client, "TIC-204.pv", "TIC-204.sp")
    assert pv.StatusCode is not None
    assert pv.StatusCode.value == CODES[code]
    assert pv.Value is not None
    assert (pv.Value.Value is not None) is has_value
    assert sp.StatusCode == ua.StatusCode()
    await plant.heal()
    [pv] = await read(client, "TIC-204.pv")
    assert pv.StatusCode == ua.StatusCode()


@pytest.mark.parametrize("fault", ["nan", "high", "low"])
async def test_a_failed_transmitter_is_a_sensor_failure_without_a_value(
    plant: Plant, client: Client, fault: str
) -> None:
    await plant.fault(f"transmitter TIC-204 {fault}")
    await plant.scan()
    [pv] = await read(client, "TIC-204.pv")
    assert pv.StatusCode is not None
    assert pv.StatusCode.value == CODES["BadSensorFailure"]
    assert pv.Value is not None
    assert pv.Value.Value is None
    await plant.heal()
    await plant.scan()
    [pv] = await read(client, "TIC-204.pv")
    assert pv.Value == ua.Variant(single(plant.plc.loops["TIC-204"].pv_eu), FLOAT)


async def test_frozen_stamps_stand_still_while_values_go_on(plant: Plant, client: Client) -> None:
    await plant.scan()
    [before] = await read(client, "TIC-204.plc_clock_ms")
    await plant.fault("freeze-stamps")
    await plant.scan()
    [after] = await read(client, "TIC-204.plc_clock_ms")
    assert after.SourceTimestamp == before.SourceTimestamp
    assert after.Value != before.Value


async def test_one_tag_can_be_refused_and_one_be_of_another_type_than_declared(plant: Plant, client: Client) -> None:
    await plant.fault("refuse-tag TIC-204 op_request")
    await plant.fault("wrong-type TIC-204 sp")
    codes = await write(client, ("TIC-204.op_request", 50.0, FLOAT), ("TIC-204.sp", 78.0, FLOAT))
    assert codes == [CODES["BadNotWritable"], CODES["BadTypeMismatch"]]
    [sp] = await read(client, "TIC-204.sp")
    assert sp.Value is not None
    assert sp.Value.VariantType is ua.VariantType.Double
    declared = await client.get_node(named("TIC-204.sp", INDEX)).read_data_type()
    assert declared.Identifier == ObjectIds.Float


async def test_a_closed_session_is_told_so_and_a_new_one_is_given(plant: Plant) -> None:
    async with connected(plant) as opened:
        await plant.fault("close-sessions")
        with pytest.raises(ua.uaerrors.BadSessionClosed):
            await read(opened, "TIC-204.pv")
    async with connected(plant) as again:
        assert len(await read(again, "TIC-204.pv")) == 1


async def test_connections_are_reset_by_the_same_fault_as_over_modbus(plant: Plant) -> None:
    async with connected(plant) as opened:
        lost = asyncio.Event()

        async def note(_reason: Exception) -> None:
            lost.set()

        opened.connection_lost_callback = note
        await plant.fault("close-connections")
        with pytest.raises(ConnectionError):
            await read(opened, "TIC-204.pv")
        await asyncio.wait_for(lost.wait(), 5.0)


async def read_until_lost(client: Client) -> None:
    while True:
        await read(client, "TIC-204.pv")


async def test_a_restarted_server_is_away_and_then_back_at_its_address(plant: Plant) -> None:
    url = plant.server.url
    async with connected(plant) as opened:
        await plant.fault("restart-server 0.5")
        with pytest.raises(ConnectionError):
            await read_until_lost(opened)
        with pytest.raises(ConnectionError):
            await Client(url).connect()
    await plant.server.wait_for_restart()
    assert plant.server.url == url
    async with connected(plant, "shift", "juice") as again:
        assert await write(again, ("TIC-204.heartbeat", 3, UINT16)) == [GOOD]


class CountingClient(Client):
    renewals = 0
    has_renewed_twice: asyncio.Event

    async def open_secure_channel(self, renew: bool = False) -> None:
        await super().open_secure_channel(renew)
        self.renewals += renew
        if self.renewals == 2:
            self.has_renewed_twice.set()


async def test_short_lived_channel_keys_are_renewed_and_reads_go_on(plant: Plant) -> None:
    await plant.fault("channel-lifetime 0.2")
    client = CountingClient(plant.server.url, watchdog_intervall=60.0)
    client.has_renewed_twice = asyncio.Event()
    async with client:
        assert client.secure_channel_timeout == 200
        await asyncio.wait_for(client.has_renewed_twice.wait(), 5.0)
        assert len(await read(client, "TIC-204.pv")) == 1


async def test_answers_and_requests_can_be_slow(plant: Plant, client: Client) -> None:
    clock = asyncio.get_running_loop().time
    await plant.fault("delay-answers 0.1")
    begun_s = clock()
    writing = asyncio.create_task(write(client, ("TIC-204.heartbeat", 41, UINT16)))
    with pytest.raises(TimeoutError):
        await asyncio.wait_for(asyncio.shield(writing), 0.05)
    assert plant.plc.loops["TIC-204"].mailbox.heartbeat == 41  # executed, and not yet answered
    assert await writing == [GOOD]
    assert clock() - begun_s >= 0.1
    await plant.heal()
    await plant.fault("delay-requests 0.1")
    begun_s = clock()
    await read(client, "TIC-204.pv")
    assert clock() - begun_s >= 0.1


@pytest.mark.parametrize(("fault", "heartbeat"), [("drop-answers 1", 52), ("drop-requests 1", 51)])
async def test_a_write_without_an_answer_was_applied_or_not(plant: Plant, fault: str, heartbeat: int) -> None:
    mailbox = plant.plc.loops["TIC-204"].mailbox
    mailbox.heartbeat = 51
    async with connected(plant, "shift", "juice") as opened:
        await plant.fault(fault)
        with pytest.raises(TimeoutError):
            await asyncio.wait_for(write(opened, ("TIC-204.heartbeat", 52, UINT16)), 0.1)
        await plant.fault("close-connections")
    assert mailbox.heartbeat == heartbeat


async def test_a_subscriber_is_told_what_changes(plant: Plant, client: Client) -> None:
    told: asyncio.Queue[tuple[str, object]] = asyncio.Queue()

    class Handler:
        def datachange_notification(self, node: object, content: object, _data: object) -> None:
            told.put_nowait((str(node), content))

    subscription = await client.create_subscription(10, Handler())
    await subscription.subscribe_data_change(client.get_node(named("TIC-204.sp", INDEX)))
    await asyncio.wait_for(told.get(), 5.0)
    await write(client, ("TIC-204.sp", 76.5, FLOAT))
    assert await asyncio.wait_for(told.get(), 5.0) == (f"ns={INDEX};s=TIC-204.sp", 76.5)
    await subscription.delete()


async def test_a_reading_too_large_for_a_float_is_an_infinity(plant: Plant, client: Client) -> None:
    plant.plc.loops["TIC-310"].mailbox.op_request = -1e300
    await plant.scan()
    [request] = await read(client, "TIC-310.op_request")
    assert request.Value == ua.Variant(-math.inf, FLOAT)
