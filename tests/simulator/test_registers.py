"""The register map: codec, access, mirrors and atomic writes."""

import struct
from collections.abc import Callable
from dataclasses import replace
from math import inf, isnan, nan

import pytest
from hypothesis import given
from hypothesis import strategies as st

from simulator.loop import LoopSpec, WriteRefused
from simulator.plc import Plc
from simulator.registers import (
    REGISTERS,
    AddressRefused,
    Registers,
    from_words,
    loop_registers,
    map_lines,
    to_counts,
    to_words,
)
from simulator.rig import load_rig
from simulator.transmitter import TransmitterFault

AT = {register.name: register.offset for register in REGISTERS}


def plant(word_order: str = "big", change: Callable[[LoopSpec], LoopSpec] = lambda spec: spec) -> tuple[Plc, Registers]:
    rig = load_rig("juice-skid")
    plc = replace(rig, loops=tuple(change(spec) for spec in rig.loops)).build()
    return plc, Registers(plc, word_order=word_order)


def real(words: list[int]) -> float:
    return float(struct.unpack(">f", struct.pack(">HH", *words))[0])


def real_words(reading: float) -> list[int]:
    return list(struct.unpack(">HH", struct.pack(">f", reading)))


@given(reading=st.floats(width=32, allow_nan=False))
def test_a_real_is_ieee_754_single_precision_high_word_first(reading: float) -> None:
    words = to_words(reading, "REAL", False)
    assert words == list(struct.unpack(">HH", struct.pack(">f", reading)))
    assert from_words(words, "REAL", False) == reading
    assert to_words(reading, "REAL", True) == words[::-1]
    assert from_words(words[::-1], "REAL", True) == reading


@given(number=st.integers(0, 2**32 - 1))
def test_an_unsigned_double_integer_takes_two_words_in_either_order(number: int) -> None:
    words = to_words(number, "UDINT", False)
    assert words == list(struct.unpack(">HH", struct.pack(">I", number)))
    assert from_words(words, "UDINT", False) == number
    assert from_words(to_words(number, "UDINT", True), "UDINT", True) == number


def test_what_single_precision_cannot_hold_shows_as_infinity_and_no_number_as_no_number() -> None:
    assert from_words(to_words(1e39, "REAL", False), "REAL", False) == inf
    assert from_words(to_words(-1e39, "REAL", False), "REAL", False) == -inf
    assert isnan(from_words(to_words(nan, "REAL", False), "REAL", False))


@pytest.mark.parametrize(
    ("reading", "scale", "counts"),
    [(78.0, 100.0, 7800), (-0.005, 1000.0, -5), (1e9, 1.0, 32767), (-1e9, 1.0, -32767), (nan, 1.0, -32768)],
)
def test_int_mirrors_are_scaled_clipped_and_tell_when_there_is_no_reading(
    reading: float, scale: float, counts: int
) -> None:
    assert to_counts(reading, scale) == counts


def test_no_two_entries_of_a_loop_overlap_and_all_lie_inside_its_block() -> None:
    plc, _ = plant()
    for loop in plc.loops.values():
        taken = [word for entry in loop_registers(loop) for word in range(entry.offset, entry.offset + entry.size)]
        assert len(taken) == len(set(taken))
        assert max(taken) < 100


def test_a_loop_at_rest_reads_as_engineered() -> None:
    plc, registers = plant()
    words = registers.read(0, 100)
    loop = plc.loops["TIC-204"]
    assert real(words[0:2]) == pytest.approx(loop.pv_eu, rel=1e-6)
    assert real(words[2:4]) == 78.0
    assert real(words[4:6]) == pytest.approx(45.0, abs=0.2)
    assert words[AT["mode"]] == 1
    assert words[AT["boot_count"]] == 1
    assert real(words[20:22]) == 2.0
    assert real(words[40:42]) == pytest.approx(0.8)
    assert real(words[42:44]) == 9.0
    assert words[50:52] == [1, 1]
    assert words[61] == 7800
    assert words[26:30] == [0, 0, 0, 0]


def test_the_second_loop_begins_a_hundred_registers_on_and_a_read_may_span_both() -> None:
    _, registers = plant()
    both = registers.read(90, 20)
    assert both[10:] == registers.read(100, 10)
    assert real(both[12:14]) == 3.0


@pytest.mark.parametrize(
    ("tag", "offset", "number"),
    [("sp", 2, 70.0), ("op", 4, 40.0), ("gain", 40, 1.25), ("integral", 42, 20.0), ("derivative", 44, 0.5)],
)
def test_each_writable_real_and_its_mirror_follow_each_other(tag: str, offset: int, number: float) -> None:
    plc, registers = plant()
    registers.write(AT["mode"], [0])
    registers.write(offset, real_words(number))
    assert plc.loops["TIC-204"].readings()[tag] == pytest.approx(number)
    mirror = AT[f"{tag}_counts"]
    assert registers.read(mirror, 1) == [round(100 * number)]
    registers.write(mirror, [round(200 * number) if tag != "sp" else 7500])
    expected = 2 * number if tag != "sp" else 75.0
    assert real(registers.read(offset, 2)) == pytest.approx(expected)


def test_low_word_first_swaps_reals_and_double_integers_only() -> None:
    plc, big = plant("big")
    little = Registers(plc, word_order="little")
    assert little.read(2, 2) == big.read(2, 2)[::-1]
    assert little.read(6, 1) == big.read(6, 1)
    little.write(AT["holder_request"], [0x5678, 0x1234])
    assert plc.loops["TIC-204"].mailbox.holder_request == 0x12345678
    little.write(2, real_words(71.0)[::-1])
    assert plc.loops["TIC-204"].sp_eu == pytest.approx(71.0)


def test_the_mailbox_is_taken_in_one_write() -> None:
    plc, registers = plant()
    registers.write(30, [0x1234, 0x5678, 42, 7, *real_words(55.5)])
    mailbox = plc.loops["TIC-204"].mailbox
    assert (mailbox.holder_request, mailbox.heartbeat, mailbox.sequence) == (0x12345678, 42, 7)
    assert mailbox.op_request == 55.5
    assert registers.read(30, 6) == [0x1234, 0x5678, 42, 7, *real_words(55.5)]


def test_half_of_a_real_can_be_written_and_the_other_half_stays() -> None:
    plc, registers = plant()
    high, low = real_words(70.3)
    registers.write(2, [high])
    registers.write(3, [low])
    assert plc.loops["TIC-204"].sp_eu == pytest.approx(70.3, rel=1e-6)


@pytest.mark.parametrize(
    "entry", [entry for entry in REGISTERS if not entry.is_writable], ids=lambda entry: str(entry.name)
)
def test_read_only_registers_refuse_every_write(entry: object) -> None:
    _, registers = plant()
    offset = entry.offset  # type: ignore[attr-defined]  # a Register
    with pytest.raises(AddressRefused, match="read-only"):
        registers.write(offset, [0])


@pytest.mark.parametrize("address", [26, 36, 46, 59, 66, 99, 600, 65535])
def test_registers_between_the_entries_or_beyond_the_last_loop_refuse_writes(address: int) -> None:
    _, registers = plant()
    with pytest.raises(AddressRefused, match="exist"):
        registers.write(address, [1])


def test_watch_entries_are_the_plants_and_cannot_be_written() -> None:
    _, registers = plant()
    with pytest.raises(AddressRefused, match="read-only"):
        registers.write(50, [0])


def test_reads_beyond_the_last_loop_are_refused() -> None:
    _, registers = plant()
    assert len(registers.read(500, 100)) == 100
    with pytest.raises(AddressRefused):
        registers.read(500, 101)
    with pytest.raises(AddressRefused):
        registers.read_bits(600, 1)


def test_a_write_is_taken_as_a_whole_or_not_at_all() -> None:
    plc, registers = plant()
    before = registers.read(0, 100)
    with pytest.raises(WriteRefused):
        registers.write(40, [*real_words(2.0), *real_words(-5.0)])
    with pytest.raises(AddressRefused):
        registers.write(44, [*real_words(1.0), 7])
    assert registers.read(0, 100) == before
    assert plc.loops["TIC-204"].block.settings.gain == 0.8


@pytest.mark.parametrize(
    ("address", "words"),
    [
        (2, real_words(121.0)),
        (2, real_words(nan)),
        (4, real_words(nan)),
        (4, real_words(inf)),
        (6, [3]),
        (6, [2]),  # no cascade master here
        (40, real_words(nan)),
        (40, real_words(-1.0)),
        (42, real_words(inf)),
    ],
)
def test_numbers_that_a_tag_cannot_take_are_refused(address: int, words: list[int]) -> None:
    _, registers = plant()
    before = registers.read(0, 100)
    with pytest.raises(WriteRefused) as refusal:
        registers.write(address, words)
    assert not refusal.value.is_read_only
    assert registers.read(0, 100) == before


def test_an_output_beyond_the_clamps_is_clamped() -> None:
    plc, registers = plant()
    registers.write(AT["mode"], [0])
    registers.write(AT["op"], real_words(140.0))
    assert plc.loops["TIC-204"].block.op_pct == 100.0
    assert registers.read(AT["status"], 1) == [0b010]
    assert registers.read(AT["block_saturated"], 1) == [1]
    registers.write(AT["op"], real_words(-3.0))
    assert registers.read(AT["status"], 1) == [0b100]


def test_an_output_written_in_automatic_is_ignored_or_refused_as_the_rig_says() -> None:
    plc, registers = plant()
    before = registers.read(4, 2)
    registers.write(4, real_words(12.0))
    assert registers.read(4, 2) == before
    plc, registers = plant(change=lambda spec: replace(spec, is_op_refused_in_auto=True))
    with pytest.raises(WriteRefused, match="MAN only"):
        registers.write(4, real_words(12.0))
    registers.write(AT["mode"], [0])
    registers.write(4, real_words(12.0))
    assert plc.loops["TIC-204"].block.op_pct == 12.0


def test_a_setting_that_this_plant_locks_can_be_read_but_not_written() -> None:
    plc, registers = plant(change=lambda spec: replace(spec, read_only=("gain", "integral")))
    for address, words in ((40, real_words(1.0)), (42, real_words(1.0)), (63, [100]), (64, [100])):
        with pytest.raises(AddressRefused, match="read-only"):
            registers.write(address, words)
    with pytest.raises(WriteRefused) as refusal:
        plc.loops["TIC-204"].write("gain", 1.0)
    assert refusal.value.is_read_only
    registers.write(44, real_words(0.5))
    assert real(registers.read(40, 2)) == pytest.approx(0.8)
    assert not any("gain" in line and " rw " in line for line in map_lines(plc))


def test_tags_that_nobody_writes_are_refused_by_name_as_well() -> None:
    plc, _ = plant()
    with pytest.raises(WriteRefused) as refusal:
        plc.loops["TIC-204"].write("pv", 1.0)
    assert refusal.value.is_read_only
    with pytest.raises(WriteRefused, match="between 0 and"):
        plc.loops["TIC-204"].write("heartbeat", 70000.0)


def test_discretes_show_the_loops_conditions_and_its_watch_entries() -> None:
    plc, registers = plant()
    assert registers.read_bits(0, 12) == [False] * 10 + [True, True]
    loop = plc.loops["TIC-204"]
    loop.watch["pump_running"] = 0
    loop.is_stop_pressed = True
    loop.press_enable()
    loop.transmitter.fault = TransmitterFault.NAN
    plc.scan(0.05)
    plc.scan(0.1)
    assert registers.read_bits(0, 12) == [True, True, True, *[False] * 7, True, False]
    assert registers.read_bits(98, 15)[12] is True  # PIC-110's pump_running is discrete 110


def test_spare_coils_can_be_written_and_read_back_and_no_others() -> None:
    _, registers = plant()
    registers.write_bits(91, [True, False, True])
    registers.write_bits(190, [True])
    assert registers.read_bits(90, 5) == [False, True, False, True, False]
    assert registers.read_bits(190, 1) == [True]
    for address in (0, 89, 100):
        with pytest.raises(AddressRefused, match="can't be written"):
            registers.write_bits(address, [True])


def test_the_printed_map_names_every_entry_of_every_loop() -> None:
    plc, _ = plant()
    lines = map_lines(plc)
    assert len([line for line in lines if line.startswith("LIC-102")]) == len(REGISTERS) + 6 + 2
    assert any("334" in line and "op_request" in line for line in lines)
    assert any("x 1000" in line and "pv_counts" in line for line in lines)
