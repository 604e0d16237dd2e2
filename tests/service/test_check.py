"""A look at a loop in virtual time: what is wrong in the file is named by its neighbours, and nothing is written."""

import asyncio
import struct
from collections.abc import Mapping
from dataclasses import replace

import pytest

from autotune.config.types import DataType, LoopConfig, ModbusTag, OpcUaTag, Order
from autotune.field.codec import from_words, width
from autotune.field.link import RawValue
from autotune.loop.settings import BlockFields
from autotune.service.check import LoopCheck, check_loop
from autotune.service.readiness import Level
from tests.fakes.link import FakeLink, Fault, FaultKind
from tests.fakes.plant import WITH_GUARD, WITHOUT_GUARD, PlantInMemory
from tests.fakes.virtual_time import run_virtual
from tests.field.loops import holding, with_tags, without_tags


def look_at(loop: LoopConfig, plant: PlantInMemory, look_s: float = 1.5) -> LoopCheck:
    async def main() -> LoopCheck:
        await asyncio.sleep(1.0)
        link = plant.open_link(loop)
        try:
            return await check_loop(loop, link, plant.open_link, look_s)
        finally:
            await link.close()

    looked = run_virtual(main())
    assert [request for link in plant.links for request in link.requests("write")] == []
    return looked


def codes(looked: LoopCheck) -> set[str]:
    return {finding.code for finding in looked.findings}


def test_a_fit_loop_shows_its_readings_settings_and_how_quick_its_link_is() -> None:
    looked = look_at(WITH_GUARD, PlantInMemory(latency_s=0.02))
    assert looked.is_fit
    assert looked.sample is not None
    assert looked.sample.pv_pct == pytest.approx(50.0, abs=0.5)
    assert looked.settings == BlockFields(0.375, 1.5, 0.0)
    assert looked.round_trip_s == pytest.approx(0.02)
    assert looked.refresh_s == pytest.approx(0.1)


def test_the_time_of_the_controllers_inputs_is_no_part_of_the_round_trip() -> None:
    slow_inputs = replace(WITH_GUARD, controller=replace(WITH_GUARD.controller, io_time_s=0.5))
    assert look_at(slow_inputs, PlantInMemory(latency_s=0.02)).round_trip_s == pytest.approx(0.02)


def test_a_loop_without_settings_tags_is_looked_at_all_the_same() -> None:
    looked = look_at(without_tags(WITHOUT_GUARD, "gain", "integral", "derivative"), PlantInMemory())
    assert looked.settings is None
    assert looked.is_fit


def test_values_that_never_change_have_no_refresh() -> None:
    still = without_tags(WITHOUT_GUARD, "plc_clock_ms")
    plant = PlantInMemory(
        replace(PlantInMemory().loop.spec, transmitter=replace(PlantInMemory().loop.spec.transmitter, noise_pct=0.0))
    )
    assert look_at(still, plant).refresh_s is None


def test_a_controller_that_can_not_be_reached_is_one_finding() -> None:
    plant = PlantInMemory()
    opened = plant.open_link

    def open_link(loop: LoopConfig) -> FakeLink:
        link = opened(loop)
        link.is_reachable = False
        return link

    async def main() -> LoopCheck:
        return await check_loop(WITH_GUARD, open_link(WITH_GUARD), open_link, 1.0)

    looked = run_virtual(main())
    assert codes(looked) == {"LINK"}
    assert not looked.is_fit
    assert (looked.sample, looked.settings, looked.round_trip_s) == (None, None, None)


def test_a_connection_that_drops_in_the_middle_of_the_look_is_one_finding() -> None:
    plant = PlantInMemory()
    opened = plant.open_link

    def open_link(loop: LoopConfig) -> FakeLink:
        link = opened(loop)
        link.read_faults[8] = Fault(FaultKind.SILENT)
        return link

    async def main() -> LoopCheck:
        return await check_loop(WITH_GUARD, open_link(WITH_GUARD), open_link, 3.0)

    assert codes(run_virtual(main())) == {"LINK"}


class Registers:
    """A controller that is nothing but registers; a tag reads what lies where its file says it lies."""

    def __init__(self, loop: LoopConfig, readings: Mapping[str, RawValue]) -> None:
        self.words: dict[int, int] = {}
        self.links: list[FakeLink] = []
        for name, raw in readings.items():
            tag = loop.tag(name)
            assert isinstance(tag, ModbusTag)
            code = {DataType.REAL: ">f", DataType.UDINT: ">I", DataType.UINT: ">H"}[tag.type]
            packed = struct.pack(code, raw)
            for number in range(0, len(packed), 2):
                self.words[tag.address + number // 2] = int.from_bytes(packed[number : number + 2], "big")
            for beside in (tag.address - 1, tag.address + len(packed) // 2, tag.address + len(packed) // 2 + 1):
                self.words.setdefault(beside, 0)

    def open_link(self, loop: LoopConfig) -> FakeLink:
        link = FakeLink(loop)
        for name, tag in loop.tags:
            assert isinstance(tag, ModbusTag)
            held = [self.words.get(tag.address + number) for number in range(width(tag))]
            if None not in held:
                raw = from_words(tag, [word for word in held if word is not None])
                link.image[name] = float("nan") if raw is None else raw
        self.links.append(link)
        return link

    def look(self, loop: LoopConfig) -> LoopCheck:
        async def main() -> LoopCheck:
            link = self.open_link(loop)
            looked = await check_loop(loop, link, self.open_link, 0.5)
            await link.close()
            assert not any(one.is_connected for one in self.links)
            return looked

        return run_virtual(main())


APART = {"pv": holding(100, DataType.REAL), "sp": holding(110, DataType.REAL), "op": holding(120, DataType.REAL)}
LOOP = with_tags(without_tags(WITHOUT_GUARD, "plc_clock_ms", "boot_count"), dict(APART))
READINGS: dict[str, RawValue] = {
    "pv": 75.3, "sp": 72.6, "op": 45.3, "mode": 1, "gain": 0.375, "integral": 1.5, "derivative": 0.0,
}  # fmt: skip


def real(address: int, **changes: Order) -> ModbusTag:
    return replace(holding(address, DataType.REAL), **changes)  # type: ignore[arg-type]


def test_the_file_as_it_should_be_has_nothing_misread() -> None:
    assert Registers(LOOP, READINGS).look(LOOP).is_fit


@pytest.mark.parametrize("name", APART)
def test_a_wrong_word_order_is_named(name: str) -> None:
    wrong = with_tags(LOOP, {name: replace(APART[name], word_order=Order.LITTLE)})
    (finding,) = Registers(LOOP, READINGS).look(wrong).findings
    assert (finding.level, finding.code) == (Level.STOP, "TAG_MISREAD")
    assert f"write word_order = 'big' for {name}" in finding.remedy
    assert "can't be; read with word order 'big' or with the address one down it is plausible" in finding.text


def test_one_slip_that_explains_all_signals_goes_before_a_chance_fit() -> None:
    """At address 0 there is no address one down, so only the word order explains all of them."""
    beside = with_tags(LOOP, {"pv": real(0), "sp": real(2), "op": real(20), "mode": holding(30, DataType.UINT)})
    little = {name: real(at, word_order=Order.LITTLE) for name, at in (("pv", 0), ("sp", 2), ("op", 20))}
    looked = Registers(beside, READINGS).look(with_tags(beside, little))
    assert [finding.code for finding in looked.findings] == ["TAG_MISREAD"] * 3
    assert all("read with word order 'big' it is plausible" in finding.text for finding in looked.findings)


@pytest.mark.parametrize("name", APART)
@pytest.mark.parametrize(("shift", "way"), [(1, "one down"), (-1, "one up")])
def test_an_address_off_by_one_is_named(name: str, shift: int, way: str) -> None:
    wrong = with_tags(LOOP, {name: real(APART[name].address + shift)})
    (finding,) = Registers(LOOP, READINGS).look(wrong).findings
    assert finding.code == "TAG_MISREAD"
    assert way in finding.text


def test_a_register_that_does_not_exist_is_named() -> None:
    (finding,) = Registers(LOOP, READINGS).look(with_tags(LOOP, {"sp": real(700)})).findings
    assert finding.code == "REGISTER_MISSING"
    assert "'sp'" in finding.text


def test_a_number_outside_its_span_that_no_neighbour_explains_is_told_as_such() -> None:
    (finding,) = Registers(LOOP, {**READINGS, "pv": 900.0}).look(LOOP).findings
    assert finding.code == "OUTSIDE_SPAN"
    assert "PV reads 900 degC" in finding.text


def test_a_measurement_that_is_no_number_is_left_to_the_judgement_of_readings() -> None:
    looked = Registers(LOOP, {**READINGS, "pv": float("nan")}).look(LOOP)
    assert "PV_QUALITY" in codes(looked)


def test_signals_that_are_no_modbus_tags_have_no_neighbours_to_read() -> None:
    loop = with_tags(WITHOUT_GUARD, {name: OpcUaTag(f"ns=2;s={name}") for name in ("pv", "sp", "op")})
    plant = PlantInMemory()
    plant.loop.block.sp_pct = 130.0
    looked = look_at(loop, plant)
    assert "SP_OUT_OF_SPAN" in codes(looked)
    assert "OUTSIDE_SPAN" not in codes(looked)
