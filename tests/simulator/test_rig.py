"""Rig files: the bundled ones load, and every mistake is told with file, key and remedy."""

from pathlib import Path

import pytest

from simulator.block import Mode
from simulator.rig import BUNDLED, RigError, find_rig, load_rig

SOUND = (BUNDLED / "fast-loop.toml").read_text(encoding="utf-8")


def load(tmp_path: Path, text: str) -> None:
    file = tmp_path / "mine.toml"
    file.write_text(text, encoding="utf-8")
    load_rig(str(file))


@pytest.mark.parametrize("name", sorted(file.stem for file in BUNDLED.glob("*.toml")))
def test_the_bundled_rigs_load_by_name_and_by_path(name: str) -> None:
    assert load_rig(name) == load_rig(str(BUNDLED / f"{name}.toml"))


def test_the_juice_skid_is_the_plant_of_the_demo() -> None:
    rig = load_rig("juice-skid")
    assert [spec.name for spec in rig.loops] == ["TIC-204", "PIC-110", "FIC-101", "LIC-102", "TIC-310", "TIC-311"]
    assert [spec.mode for spec in rig.loops] == [Mode.AUTO] * 5 + [Mode.CAS]
    assert rig.scan_s == 0.05


def test_a_rig_may_be_based_on_another() -> None:
    little, big = load_rig("fast-loop-little"), load_rig("fast-loop")
    assert (little.word_order, big.word_order) == ("little", "big")
    assert little.loops == big.loops


def test_a_rig_that_does_not_exist_names_the_bundled_ones() -> None:
    with pytest.raises(RigError, match=r"nowhere: no such rig.*fast-loop, fast-loop-little, juice-skid"):
        find_rig("nowhere")


@pytest.mark.parametrize(
    ("old", "new", "complaint"),
    [
        ("plc_scan_s = 0.02", "", "plc_scan_s: is missing; write it"),
        ("plc_scan_s = 0.02", "plc_scan_s = 0.0205", "plc_scan_s: 0.0205 is no whole number of milliseconds"),
        ("plc_scan_s = 0.02", 'plc_scan_s = "fast"', "plc_scan_s: 'fast' won't do; write a number from"),
        ("plc_scan_s = 0.02", "plc_scan_s = nan", "plc_scan_s: nan won't do"),
        ("plc_scan_s = 0.02", "plc_scan_s = true", "plc_scan_s: True won't do"),
        ("seed = 1", "seed = 1.5", "seed: 1.5 won't do; write a whole number"),
        ("seed = 1", "sede = 1", "sede: isn't a key of a rig; remove it or mend its spelling"),
        ("seed = 1", 'word_order = "middle"', "word_order: 'middle' won't do; write one of: big, little"),
        ("seed = 1", 'op_write_in_auto = "maybe"', "op_write_in_auto: 'maybe' won't do"),
        ('name = "TIC-1"', "name = 5", "loop 5: name: 5 won't do; write a text in quotes"),
        ("pv_high_eu = 100.0\npv_unit", "pv_high_eu = 0.0\npv_unit", "loop TIC-1: pv_high_eu: 0.0 isn't above"),
        ("sp_eu = 50.0", "sp_eu = 150.0", "loop TIC-1: sp_eu: 150.0 won't do"),
        ("op_pct = 45.0", "op_pct = -1.0", "loop TIC-1: op_pct: -1.0 won't do"),
        ("op_pct = 45.0", 'op_pct = 45.0\nmode = "RUN"', "loop TIC-1: mode: 'RUN' won't do; write one of: MAN, AUTO"),
        ("op_pct = 45.0", 'op_pct = 45.0\nmode = "CAS"', "loop TIC-1: mode: CAS without a master"),
        ("op_pct = 45.0", 'op_pct = 45.0\nread_only = ["pv"]', "loop TIC-1: read_only: ['pv'] won't do"),
        ("op_pct = 45.0", 'op_pct = 45.0\ncascade_master = "X"', "cascade_master: isn't an earlier loop"),
        ("op_pct = 45.0", 'op_pct = 45.0\ninput_from = "X"', "input_from: isn't a loop of this rig"),
        ("lags_s = [0.6, 0.05]", "lags_s = [0.6, -1.0]", "loop TIC-1: process.gain: lags must be positive"),
        ("lags_s = [0.6, 0.05]", 'lags_s = ["a"]', "process.lags_s: ['a'] won't do; write a list of numbers"),
        ("lags_s = [0.6, 0.05]", "quadratic = [1.0]", "process.quadratic: 1 numbers won't do"),
        ("lags_s = [0.6, 0.05]", "integrating = 1", "process.integrating: 1 won't do; write true or false"),
        ("process = {", "process = 7 #", "loop TIC-1: process: isn't a table; write [loop.process]"),
        ("noise_pct = 0.02", "noise_pct = -0.02", "transmitter.noise_pct: -0.02 won't do"),
        ("op_low_pct = 10.0", "op_low_pct = -10.0", "guard.op_low_pct: -10.0 won't do; write a number from 0 to 100"),
        ("pv_low_eu = 20.0", "pv_low_eu = 90.0", "a low limit isn't below its high limit"),
        ("pump_running = 1", "gain = 1", "watch.gain: won't do as a name"),
        ("pump_running = 1", '"pump running" = 1', "watch.pump running: won't do as a name"),
        ("pump_running = 1", "pump_running = 70000", "watch.pump_running: 70000 won't do"),
        (
            "pump_running = 1",
            ", ".join(f"entry_{n} = 0" for n in range(10)),
            "entry_9: is one too many; write at most 10",
        ),
        ("gain = 0.4", "gain = -0.4", "block.gain: the gain must not be negative"),
        ("gain = 0.4", 'gain = 0.4\nform = "fancy"', "TOML"),
        ("integral = 1.5", "integral = 1.5\nscan_s = 0.03", "block.scan_s: 0.03 is no multiple of plc_scan_s 0.02"),
        ("integral = 1.5", "integral = 1.5\nop_low_pct = 99.0", "op_pct: 45.0 won't do"),
        ("integral = 1.5", "integral = 1.5\nop_high_pct = -1.0", "op_high_pct: isn't above op_low_pct"),
        ("[[loop]]", "[loop]", "loop: no loop found; write at least one [[loop]]"),
        ('title = "One fast loop"', "title =", "can't be read as TOML"),
        ('title = "One fast loop"', 'based_on = "gone.toml"', "doesn't exist; name a rig file beside this one"),
        ('title = "One fast loop"', 'based_on = "mine.toml"', "goes in a circle"),
    ],
)
def test_each_mistake_is_told_with_file_key_and_remedy(tmp_path: Path, old: str, new: str, complaint: str) -> None:
    assert old in SOUND
    with pytest.raises(RigError) as fault:
        load(tmp_path, SOUND.replace(old, new, 1))
    assert str(fault.value).startswith(str(tmp_path / "mine.toml"))
    assert complaint in str(fault.value)
    assert ";" in str(fault.value) or "TOML" in str(fault.value)


def test_two_loops_of_one_name_are_refused(tmp_path: Path) -> None:
    with pytest.raises(RigError, match="two loops have the same name; rename one"):
        load(tmp_path, SOUND + SOUND[SOUND.index("[[loop]]") :])
