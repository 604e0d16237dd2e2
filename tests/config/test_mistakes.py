"""Every mistake that a file can hold gets a line that names the file, the key and the remedy."""
# ruff: noqa: E501 - the table reads as rows

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from autotune.config.bundled import bundled_path
from autotune.config.load import load
from autotune.errors import Complaint, ConfigError

EXAMPLE, SITE = "example-modbus.toml", "site-limits.toml"


@dataclass(frozen=True, slots=True)
class Mistake:
    """Texts replaced in the example (or in the site's limits), and what the complaint has to hold."""

    title: str
    changes: tuple[tuple[str, str], ...]
    key: str
    fault: str
    remedy: str
    changed: str = EXAMPLE
    complained_of: str = ""


def mistake(
    title: str,
    old: str,
    new: str,
    key: str,
    fault: str,
    remedy: str,
    *,
    changed: str = EXAMPLE,
    complained_of: str = "",
) -> Mistake:
    return Mistake(title, ((old, new),), key, fault, remedy, changed, complained_of)


T, F = "loop[TIC-204]", "loop[FIC-101]"

MISTAKES = (
    # Keys and types
    mistake("an unknown key", "device_id = 1 ", "devise_id = 1 ", "controller.plc1.devise_id", "unknown key", "`device_id`"),
    mistake("a required key left out", "device_id = 1 ", "# ", "controller.plc1.device_id", "missing", "1 to 255"),
    mistake("an unknown key at the top", "data_dir =", "data_folder =", "data_folder", "unknown key", "data_dir"),
    mistake("no version", "schema_version = 1 ", "# ", "schema_version", "missing", "add schema_version: 1"),
    mistake("a later version", "schema_version = 1 ", "schema_version = 2 ", "schema_version", "2 is not one of 1", "as 1"),
    mistake("a key without its unit", "step_up_pct = 15.0", "step_up = 15.0", f"{T}.limits.step_up", "unknown key", "did you mean `step_up_pct`"),
    mistake("text for a number", "scan_s = 0.5 ", 'scan_s = "fast" ', f"{T}.scan_s", '"fast" is no number', "how often we read the loop, s"),
    mistake("a number in quotes", "port = 502", 'port = "502"', "controller.plc1.port", '"502" is no whole number', "TCP port"),
    mistake("true for a number", "dead_time_s = 15.0", "dead_time_s = true", f"{T}.limits.dead_time_s", "true is no number", "dead time"),
    mistake("a number for a text", 'unit = "pasteuriser"', "unit = 7", f"{T}.unit", "7 is no text in quotes", "plant unit"),
    mistake("a part of a register count", "registers_per_read = 125", "registers_per_read = 12.5", "controller.plc1.registers_per_read", "12.5 is no whole number", "1 to 125"),
    mistake("not a number", "pv_high_eu = 88.0", "pv_high_eu = nan", f"{T}.limits.pv_high_eu", "nan", "write pv_high_eu as PV that ends a test"),
    mistake("infinity", "test_within_s = 1800.0", "test_within_s = inf", f"{T}.limits.test_within_s", "inf", "longest test, s"),
    mistake("a negative time", "blanking_s = 1.0", "blanking_s = -1.0", f"{T}.relay.blanking_s", "at least 0", "between two switches, s"),
    mistake("a step of nothing", "step_up_pct = 8.0", "step_up_pct = 0.0", f"{T}.relay.step_up_pct", "above 0", "% of span"),
    mistake("more than a hundred percent", "op_high_pct = 90.0", "op_high_pct = 900.0", f"{T}.limits.op_high_pct", "at most 100", "% of span"),
    mistake("a word that is no choice", 'action = "reverse" ', 'action = "backward" ', f"{T}.action", "'reverse' or 'direct'", "PV up, OP down"),
    mistake("an empty text", 'service = "juice flow by the pump\'s drive"', 'service = ""', f"{F}.service", '"" is empty', "plain words"),
    mistake("a name with a space", 'name = "FIC-101"', 'name = "FIC 101"', 'loop["FIC 101"].name', "doesn't belong", "tag name"),
    mistake("a table where a list belongs", "[[loop.watch]]\nname = \"drive", "[loop.watch]\nname = \"drive", f"{F}.watch", "is no list", "[[loop.watch]]"),
    mistake("a single table for all loops", "[[loop]]", "[loop]", "(file)", "not TOML", "mend the line"),
    # Controllers
    mistake("no addressing", 'addressing = "from 1" ', "# ", "controller.plc1.addressing", "missing", '"from 0"'),
    mistake("an unknown addressing", 'addressing = "from 1" ', 'addressing = "one" ', "controller.plc1.addressing", "'from 0' or 'from 1'", "counts addresses"),
    mistake("no word order", 'word_order = "big" ', "# ", "controller.plc1.word_order", "missing", "high word first"),
    mistake("the address of every device", "device_id = 1 ", "device_id = 0 ", "controller.plc1.device_id", "at least 1", "every device"),
    mistake("a host with a space", 'host = "192.168.10.21"', 'host = "192.168. 10.21"', "controller.plc1.host", "doesn't belong", "IP address"),
    mistake("a port beyond", "port = 502 ", "port = 65536 ", "controller.plc1.port", "at most 65535", "TCP port"),
    mistake("another protocol", 'protocol = "modbus"', 'protocol = "profibus"', "controller.plc1.protocol", "'modbus'", "Modbus/TCP"),
    mistake("neither clock tags nor a PLC scan", "plc_scan_s = 0.05 ", "# ", "controller.plc1.plc_scan_s", "missing, and FIC-101 has not all of", "the PLC's own scan, s"),
    mistake("the same controller twice", "[block.ideal-seconds]", '[controller.twin]\nprotocol = "modbus"\nhost = "192.168.10.21"\ndevice_id = 1\naddressing = "from 0"\nword_order = "big"\n[block.ideal-seconds]', "controller.twin.host", "the same host, port and device_id", "keep one"),
    # References
    mistake("a controller that isn't there", 'controller = "plc1"                     # all', 'controller = "plc2"                     # all', "defaults.controller", 'there is no controller "plc2"', "`plc1`"),
    mistake("a block that isn't there", 'block = "band-minutes"', 'block = "band-minute"', f"{F}.block", "there is no block", "did you mean `band-minutes`"),
    mistake("the same loop twice", 'name = "FIC-101"', 'name = "TIC-204"', f"{T}.name", "told twice", "another name"),
    mistake("the same watch twice", 'name = "header-pressure"', 'name = "juice-pump-running"', f"{T}.watch[juice-pump-running].name", "told twice", "another name"),
    # Blocks
    mistake("no unit of the integral", 'integral_kind = "time in s" ', "# ", "block.ideal-seconds.integral_kind", "missing", "with its unit"),
    mistake("an unknown unit of the integral", 'integral_kind = "time in s" ', 'integral_kind = "hours" ', "block.ideal-seconds.integral_kind", "'time in s'", "with its unit"),
    mistake("no unit of the derivative", 'derivative_kind = "time in s" ', "# ", "block.ideal-seconds.derivative_kind", "missing", '"time in min"'),
    mistake("a derivative of a block without", "has_derivative = false ", 'has_derivative = false\nderivative_kind = "time in s"', "block.band-minutes.derivative_kind", "has_derivative = false", "take one of the two out"),
    mistake("a range upside down", "gain_range = { low = 0.01, high = 100.0", "gain_range = { low = 100.0, high = 0.01", "block.ideal-seconds.gain_range.low", "not below", "swap"),
    Mistake("a proportional band from 0", (('gain_kind = "gain" ', 'gain_kind = "proportional band" '), ("gain_range = { low = 0.01", "gain_range = { low = 0.0")), "block.ideal-seconds.gain_range.low", "has no gain", "above 0"),
    mistake("gain per execution without execution", 'integral_kind = "repeats per min"', 'integral_kind = "gain per execution"', "block.band-minutes.integral_kind", "needs the block's execution", "scan_s"),
    mistake("two labels for three fields", 'panel_labels = ["GAIN", "TI", "TD"]', 'panel_labels = ["GAIN", "TI"]', "block.ideal-seconds.panel_labels", "too few", "three labels"),
    # Tags
    mistake("no address", "op = { address = 5 }", "op = { }", f"{T}.tags.op.address", "missing", "addressing"),
    mistake("no output tag", "op = { address = 5 }", "# ", f"{T}.tags.op", "missing", "output of the block"),
    mistake("an unknown tag", "stop = { address = 24", "stopp = { address = 24", f"{T}.tags.stopp", "unknown key", "did you mean `stop`"),
    mistake("no type", 'mode = { table = "holding", address = 304, type = "UINT" }', 'mode = { table = "holding", address = 304 }', f"{F}.tags.mode.type", "missing", "UINT"),
    mistake("no table", 'pv = { table = "input", address = 301', "pv = { address = 301", f"{F}.tags.pv.table", "missing", "coil, discrete, input or holding"),
    mistake("table and number in one", "pv = { address = 1 }", "pv = { address = 40001 }", f"{T}.tags.pv.address", "table and number in one", "address = 1 with"),
    mistake("an input register's long number", 'pv = { table = "input", address = 301', 'pv = { table = "input", address = 300301', f"{F}.tags.pv.address", "table and number in one", "address = 301"),
    mistake("address 0 when counting from 1", 'pv = { table = "input", address = 301', 'pv = { table = "input", address = 0', f"{F}.tags.pv.address", "outside 1 .. 65536", 'addressing = "from 1"'),
    mistake("an address beyond the last", 'pv = { table = "input", address = 301', 'pv = { table = "input", address = 70000', f"{F}.tags.pv.address", "outside 1 .. 65536", 'addressing = "from 1"'),
    mistake("a value that does not fit at the end", 'address = 301, type = "DINT"', 'address = 65536, type = "DINT"', f"{F}.tags.sp.address", "does not fit", "65535"),
    mistake("an offset beyond the last address", "address_offset = 100", "address_offset = 65535", f"{T}.tags.sp.address", "with address_offset 65535", "count as told"),
    mistake("a bit of a REAL", "op = { address = 5 }", "op = { address = 5, bit = 3 }", f"{T}.tags.op.bit", "a REAL has no single bit", "take `bit` out"),
    mistake("a REAL in a coil", "op = { address = 5 }", 'op = { address = 5, table = "coil" }', f"{T}.tags.op.type", "a REAL can't lie in a coil", "holding or input"),
    mistake("a BOOL in a register without its bit", 'type = "BOOL", bit = 3', 'type = "BOOL"', f"{F}.watch[drive-in-remote].tag.bit", "missing", "0 to 15"),
    mistake("a bit beyond the register", 'type = "BOOL", bit = 3', 'type = "BOOL", bit = 16', f"{F}.watch[drive-in-remote].tag.bit", "at most 15", "0 (least significant) to 15"),
    mistake("a bit of a bit", 'table = "discrete", address = 12, type = "BOOL"', 'table = "discrete", address = 12, type = "BOOL", bit = 0', f"{T}.watch[juice-pump-running].tag.bit", "one bit already", "take `bit` out"),
    mistake("a single bit that is written", 'mode = { table = "holding", address = 304, type = "UINT" }', 'mode = { table = "holding", address = 304, type = "BOOL", bit = 0 }', f"{F}.tags.mode.bit", "neighbours", "a coil or a whole register"),
    mistake("a written tag that can only be read", 'mode = { table = "holding", address = 304', 'mode = { table = "input", address = 304', f"{F}.tags.mode.table", "can only be read", "holding or coil"),
    mistake("an output that can only be read", 'op = { table = "holding", address = 303', 'op = { table = "input", address = 303', f"{F}.tags.op.table", "can only be read", "holding or coil"),
    mistake("overlapping tags", "sp = { address = 3 }", "sp = { address = 4 }", f"{T}.tags.op.address", "lies on the same holding", "correct the address"),
    mistake("overlapping tags of two loops", 'op = { table = "holding", address = 303', 'op = { table = "holding", address = 105', f"{F}.tags.op.address", "loop[TIC-204].tags.op", "correct the address"),
    mistake("a token of 16 bits", 'holder_request = { address = 31, type = "UDINT" }', 'holder_request = { address = 31, type = "UINT" }', f"{T}.tags.holder_request.type", "UINT does not suit", "write UDINT"),
    mistake("a setpoint that is a BOOL", 'sp = { table = "holding", address = 301, type = "DINT", scale = 0.1', 'sp = { table = "coil", address = 301, type = "BOOL", scale = 0.1', f"{F}.tags.sp.type", "BOOL does not suit", "REAL"),
    mistake("a scaled mode", 'mode = { table = "holding", address = 304, type = "UINT" }', 'mode = { table = "holding", address = 304, type = "UINT", scale = 0.1 }', f"{F}.tags.mode.scale", "a code or a count", "take `scale`"),
    mistake("a scale of nothing", "scale = 0.01, offset = 0.0", "scale = 0, offset = 0.0", f"{F}.tags.op.scale", "every reading the same", "engineering units per raw count"),
    mistake("live zero of a REAL", 'address = 20, type = "INT", scale', 'address = 20, type = "REAL", scale', f"{T}.watch[header-pressure].tag.ne43", "needs raw counts", "raw register"),
    mistake("4 mA that reads as 20 mA", "raw_at_20_ma = 32000", "raw_at_20_ma = 6400", f"{T}.watch[header-pressure].tag.ne43", "read the same", "two raw readings"),
    # Modes and guard
    mistake("two modes with one code", "CAS = 2 ", "CAS = 1 ", f"{T}.mode_codes.CAS", "already the code of AUTO", "its own code"),
    mistake("no code of manual", "MAN = 1 ", "# ", f"{F}.mode_codes.MAN", "missing", "code of manual"),
    Mistake("only manual", (("AUTO = 2  ", "# "), ("CAS = 3  ", "# "), ("REMOTE = 4  ", "# ")), f"{F}.mode_codes.AUTO", "no mode but manual", "the code of automatic"),
    mistake("a mode asked for but never read", "CAS = 3  ", "# ", f"{F}.mode_request_codes.CAS", "not read back", "add CAS to [loop.mode_codes]"),
    mistake("no guard and no consent", 'without_guard = "with consent"          # only', '# ', f"{F}.guard", "missing", 'without_guard = "with consent"'),
    mistake("a guard without its tags", "heartbeat_echo = {", "# {", f"{T}.tags.heartbeat_echo", "[loop.guard] is there", "add the tag heartbeat_echo"),
    mistake("guard tags with a gap", "op_request = { address = 35 }", "op_request = { address = 36 }", f"{T}.tags.op_request.address", "does not follow sequence", "side by side"),
    mistake("a guard faster than three scans", "timeout_s = 5.0 ", "timeout_s = 1.0 ", f"{T}.guard.timeout_s", "shorter than 3 scans", "longer timeout"),
    mistake("a request that outlasts the guard", "request_timeout_s = 0.5 ", "request_timeout_s = 5.0 ", f"{T}.guard.timeout_s", "not below the guard's 5 s", "shorten request_timeout_s"),
    mistake("guard codes that are the same", "armed = 1 ", "armed = 0 ", f"{T}.guard", "the same code", "different codes"),
    # Limits
    mistake("a PV range upside down", "pv_low_eu = 70.0", "pv_low_eu = 90.0", f"{T}.limits.pv_low_eu", "not below pv_high_eu", "lower limit as low"),
    mistake("an OP range upside down", "op_low_pct = 20.0", "op_low_pct = 95.0", f"{F}.limits.op_low_pct", "not below op_high_pct", "lowest OP as low"),
    mistake("a span upside down", "pv_high_eu = 6000.0", "pv_high_eu = -6000.0", f"{F}.span.pv_low_eu", "not below pv_high_eu", "reading at 0 %"),
    mistake("a PV limit outside the span", "pv_high_eu = 5500.0", "pv_high_eu = 6500.0", f"{F}.limits.pv_high_eu", "6500 l/h is outside the span", "inside it"),
    mistake("a relay step beyond the limit", "step_up_pct = 8.0", "step_up_pct = 16.0", f"{T}.relay.step_up_pct", "more than the limit of 15 %", "limits.step_up_pct"),
    mistake("a step beyond the site's", "step_down_pct = 15.0", "step_down_pct = 25.0", f"{T}.limits.step_down_pct", "the site's step_at_most_pct of 20 %", "can't be widened here"),
    mistake("a step without room", "op_low_pct = 20.0", "op_low_pct = 85.0", f"{F}.limits.step_up_pct", "no room", "smaller step"),
    mistake("an OP range outside the site's", "op_low_pct = 5.0 ", "op_low_pct = 92.0 ", f"{T}.limits.op_low_pct", "nothing is left", "inside the site's", changed=SITE, complained_of=EXAMPLE),
    mistake("hysteresis beyond the wanted swing", "hysteresis_pct = 0.3", "hysteresis_pct = 1.5", f"{T}.relay.hysteresis_pct", "not below wanted_swing_pct", "less hysteresis"),
    Mistake("hysteresis beyond the PV range", (("hysteresis_pct = 0.3", "hysteresis_pct = 9.0"), ("wanted_swing_pct = 1.5", "wanted_swing_pct = 10.0")), f"{T}.relay.hysteresis_pct", "fills the permitted PV range", "less hysteresis"),
    mistake("blanking longer than a switch", "blanking_s = 1.0", "blanking_s = 120.0", f"{T}.relay.blanking_s", "not below limits.switch_within_s", "shorter time"),
    mistake("a switch longer than the test", "switch_within_s = 30.0", "switch_within_s = 300.0", f"{F}.limits.switch_within_s", "not below test_within_s", "several switches"),
    mistake("a baseline longer than the test", "hold_s = 20.0", "hold_s = 290.0", f"{F}.baseline.hold_s", "take 300 s of test_within_s", "shorter look"),
    mistake("a baseline of two scans", "hold_s = 20.0", "hold_s = 0.4", f"{F}.baseline.hold_s", "fewer than 3 scans", "longer time"),
    mistake("a scan too slow for the loop", "scan_s = 0.2 ", "scan_s = 4.0 ", f"{F}.scan_s", "too slow for switch_within_s", "ten times"),
    mistake("a request that outlasts ten scans", "scan_s = 0.2 ", "scan_s = 0.04 ", f"{F}.scan_s", "more than 10 scans", "scan more slowly"),
    mistake("too few cycles", "cycles_at_most = 12", "cycles_at_most = 3", f"{T}.limits.cycles_at_most", "fewer than", "allow more cycles"),
    mistake("a watch upside down", "low_eu = 2.0 ", "low_eu = 5.0 ", f"{T}.watch[header-pressure].low_eu", "above high_eu", "lower bound"),
    # Whose loop it is
    mistake("a loop that is critical", 'protects = "none"', 'protects = "critical"', "defaults.protects", "a safety function depends", "take the loop out"),
    mistake("a loop shared with a safety function", 'protects = "none"', 'protects = "shared"', "defaults.protects", "a safety function depends", "take the loop out"),
    mistake("an actuator that goes up and down", 'actuator = "continuous"', 'actuator = "raise_lower"', "defaults.actuator", "does not suit a relay test", 'only actuator = "continuous"'),
    mistake("an actuator that is on or off", 'actuator = "continuous"', 'actuator = "on_off"', "defaults.actuator", "does not suit a relay test", 'only actuator = "continuous"'),
    # Settings
    mistake("a proof without the right to write", 'write_settings = "in manual" ', 'write_settings = "never" ', f"{T}.prove_writable", 'while write_settings = "never"', "take the key out"),
    mistake("settings to write without their tags", 'write_settings = "never" ', 'write_settings = "in manual" ', f"{F}.tags.gain", "missing among the settings", "add the tag gain"),
    mistake("no tag for the derivative", "derivative = { address = 45 }", "# ", f"{T}.tags.derivative", "the block has a derivative", "has_derivative = false"),
    mistake("a tag of a derivative that isn't there", 'block = "ideal-seconds" ', 'block = "band-minutes" ', f"{T}.tags.derivative", "has no derivative", "take the tag out"),
    mistake("a site's range beyond the last address", "last = 9500", "last = 70000", "never_written[no. 1].first", "outside 1 .. 65536", "count as told", changed=SITE),
    mistake("settings limits upside down", "low = 2.0, high = 1800.0", "low = 1800.0, high = 2.0", f"{T}.settings_limits.integral.low", "not below high", "swap"),
    Mistake("a signed gain of either sign", (('sign = "action flag"', 'sign = "signed gain"'), ("low = 0.1, high = 10.0", "low = -0.1, high = 10.0")), f"{T}.settings_limits.gain.low", "either sign", "own side of 0"),
    Mistake("a band with a floor of 0", (('gain_kind = "gain" ', 'gain_kind = "proportional band" '), ("low = 0.1, high = 10.0", "low = 0.0, high = 10.0")), f"{T}.settings_limits.gain.low", "endless gain", "above 0"),
    Mistake("limits of a derivative that isn't there", (("[loop.mode_request_codes]", "[loop.settings_limits]\nderivative = { low = 0.0 }\n[loop.mode_request_codes]"),), f"{F}.settings_limits.derivative", "has no derivative", "take the table out"),
    mistake("a factor that allows nothing", "high = 10.0, factor_at_most = 3.0", "high = 10.0, factor_at_most = 1.0", f"{T}.settings_limits.gain.factor_at_most", "above 1", "largest factor"),
    # Against the site's limits
    mistake("a factor beyond the site's", "high = 10.0, factor_at_most = 3.0", "high = 10.0, factor_at_most = 6.0", f"{T}.settings_limits.gain.factor_at_most", "the site's factor_at_most 5", "smaller factor"),
    mistake("a ceiling above the site's", "low = 0.1, high = 10.0", "low = 0.1, high = 50.0", f"{T}.settings_limits.gain.high", "above the site's ceiling 20", "or less"),
    mistake("a floor below the site's", "low = 0.1, high = 10.0", "low = 0.01, high = 10.0", f"{T}.settings_limits.gain.low", "below the site's floor 0.05", "or more"),
    mistake("writing in automatic", 'write_settings = "in manual" ', 'write_settings = "in automatic" ', f"{T}.write_settings", "more than the site allows", 'write "in manual"'),
    mistake("a test longer than the site's", "test_within_s = 1800.0", "test_within_s = 9000.0", f"{T}.limits.test_within_s", "more than the site's 7200 s", "shorter test"),
    mistake("more tests at a time than the site's", "concurrent_tests_at_most = 1 ", "concurrent_tests_at_most = 2 ", "concurrent_tests_at_most", "more than the site's 1", "write at most 1"),
    mistake("no guard where the site wants one", 'without_guard = "with consent"', 'without_guard = "refused"', f"{F}.without_guard", "refuse tests without a guard", "add the guard", changed=SITE, complained_of=EXAMPLE),
    mistake("an output where nothing may be written", "first = 9001", "first = 303", f"{F}.tags.op.address", "allow no write", "correct the address", changed=SITE, complained_of=EXAMPLE),
    mistake("a site's range upside down", "last = 9500", "last = 9000", "never_written[no. 1].first", "above last", "lower address first", changed=SITE),
    mistake("a site's range of what is read only", 'table = "holding" ', 'table = "input" ', "never_written[no. 1].first", "can't be written anyway", "coil or holding", changed=SITE),
    mistake("a site's range of an unknown controller", 'controller = "plc1"', 'controller = "plc9"', "never_written[no. 1].controller", "there is no controller", "`plc1`", changed=SITE),
    mistake("a site's limits of an unknown block", "[settings_limits.band-minutes]", "[settings_limits.band-minuts]", "settings_limits.band-minuts", "there is no block", "`band-minutes`", changed=SITE),
    mistake("a site's OP range upside down", "op_low_pct = 5.0", "op_low_pct = 96.0", "op_low_pct", "not below op_high_pct", "swap", changed=SITE),
    mistake("an unknown key of the site's", "step_at_most_pct", "steps_at_most_pct", "steps_at_most_pct", "unknown key", "`step_at_most_pct`", changed=SITE),
)  # fmt: skip


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """The example and the site's limits, ready to be changed."""
    for name in (EXAMPLE, SITE):
        (tmp_path / name).write_text(bundled_path(name).read_text("utf-8"), "utf-8")
    return tmp_path


def complaints_of(path: Path) -> tuple[Complaint, ...]:
    with pytest.raises(ConfigError) as caught:
        load(path)
    return caught.value.complaints


@pytest.mark.parametrize("wrong", MISTAKES, ids=lambda wrong: wrong.title.replace(" ", "-"))
def test_a_mistake_is_named_with_file_key_and_remedy(wrong: Mistake, folder: Path) -> None:
    changed = folder / wrong.changed
    text = changed.read_text("utf-8")
    for old, new in wrong.changes:
        assert old in text
        text = text.replace(old, new, 1)
    changed.write_text(text, "utf-8")

    complaints = complaints_of(folder / EXAMPLE)

    named = folder / (wrong.complained_of or wrong.changed)
    found = [one for one in complaints if one.file == str(named) and one.key == wrong.key and wrong.fault in one.fault]
    assert found, "\n".join(map(str, complaints))
    assert wrong.remedy in found[0].remedy, found[0]
    assert all("\n" not in str(one) for one in complaints)


def test_the_table_holds_at_least_45_different_mistakes() -> None:
    assert len({(one.key, one.fault) for one in MISTAKES}) >= 45
    assert len({one.title for one in MISTAKES}) == len(MISTAKES)


def test_all_mistakes_are_told_at_once(folder: Path) -> None:
    path = folder / EXAMPLE
    text = path.read_text("utf-8")
    for old, new in (
        ("device_id = 1 ", "devise_id = 1 "),
        ("pv_low_eu = 70.0", "pv_low_eu = 90.0"),
        ("MAN = 1 ", "# "),
    ):
        text = text.replace(old, new, 1)
    path.write_text(text, "utf-8")
    keys = {one.key for one in complaints_of(path)}
    assert {"controller.plc1.devise_id", f"{T}.limits.pv_low_eu", f"{F}.mode_codes.MAN"} <= keys


def test_beside_an_unknown_key_the_rest_of_the_loop_is_judged_too(folder: Path) -> None:
    path = folder / EXAMPLE
    text = path.read_text("utf-8").replace("pv_low_eu = 70.0", "pv_low_eu = 90.0")
    path.write_text(text.replace("blanking_s = 1.0", "blankin_s = 1.0"), "utf-8")
    assert [one.key for one in complaints_of(path)] == [f"{T}.relay.blankin_s", f"{T}.limits.pv_low_eu"]


def test_a_mistake_in_the_defaults_is_told_once_and_at_its_place(folder: Path) -> None:
    path = folder / EXAMPLE
    path.write_text(path.read_text("utf-8").replace('actuator = "continuous"', 'actuators = "continuous"'), "utf-8")
    complaints = complaints_of(path)
    assert [one.key for one in complaints if one.fault == "unknown key"] == ["defaults.actuators"]


Writer = Callable[[Path], Path]


def written(name: str, content: bytes) -> Writer:
    def write(folder: Path) -> Path:
        (folder / name).write_bytes(content)
        return folder / name

    return write


UNREADABLE: tuple[tuple[str, Writer, str, str], ...] = (
    ("no file", lambda folder: folder / "nothing.toml", "no such file", "check the name"),
    ("a folder", lambda folder: folder, "a folder", "name the .toml file"),
    ("a name with a zero byte", lambda folder: folder / "a\0b.toml", "can't be read", "check the name"),
    ("not UTF-8", written("latin.toml", b'schema_version = 1\ndata_dir = "caf\xe9"\n'), "line 2", "save the file as UTF-8"),
    ("not TOML", written("broken.toml", b"schema_version = 1\ndata_dir = autotune\n"), "at line 2, column 12", "quotes"),
    ("a key twice", written("twice.toml", b"schema_version = 1\nschema_version = 1\n"), "line 2", "mend the line"),
    ("nested too deeply", written("deep.toml", b"a = " + b"[" * 20_000), "nested too deeply", "the example"),
    ("a number too long", written("long.toml", b"schema_version = " + b"9" * 5000), "not TOML", "mend the line"),
    ("too large", written("large.toml", b"#" * 2_000_001), "larger than", "include"),
    ("empty", written("empty.toml", b""), "missing", "add schema_version"),
)  # fmt: skip


@pytest.mark.parametrize(("title", "write", "fault", "remedy"), UNREADABLE, ids=[row[0] for row in UNREADABLE])
def test_a_file_that_cant_be_read_is_named(title: str, write: Writer, fault: str, remedy: str, tmp_path: Path) -> None:
    path = write(tmp_path)
    (complaint, *_) = complaints_of(path)
    assert complaint.file == str(path).replace("\0", "?"), title
    assert fault in complaint.fault
    assert remedy in complaint.remedy


def test_a_file_without_loops_asks_for_one(tmp_path: Path) -> None:
    path = written("bare.toml", b"schema_version = 1\n")(tmp_path)
    assert [(one.key, one.fault) for one in complaints_of(path)] == [("loop", "missing")]


INCLUDES: tuple[tuple[str, str, str, str], ...] = (
    ("itself", 'include = ["main.toml"]', "include[no. 1]", "in a circle"),
    ("an absolute path", 'include = ["/etc/loops.toml"]', "include[no. 1]", "an absolute path"),
    ("no list", 'include = "loops.toml"', "include", "is not what belongs here"),
    ("numbers", "include = [1]", "include", "is not what belongs here"),
    ("a missing file", 'include = ["gone.toml"]', "(file)", "no such file"),
    ("a circle of two", 'include = ["back.toml"]', "include[no. 1]", "in a circle"),
    ("a file with keys of the main file", 'include = ["top.toml"]', "data_dir", "unknown key"),
    ("a file without version", 'include = ["old.toml"]', "schema_version", "missing"),
    ("a block told again", 'include = ["block.toml"]\n[block.one]\nform = "ideal"', "block.one", "already described in"),
    ("defaults told again", 'include = ["defaults.toml"]\n[defaults]\nscan_s = 1', "defaults", "already told in"),
    ("a controller that is no table", "[controller]\nplc1 = 1", "controller.plc1", "is no table"),
    ("controllers that are no table", "controller = 1", "controller", "1 is no table"),
    ("loops that are no tables", "loop = 3", "loop", "3 is not what belongs here"),
)  # fmt: skip


@pytest.mark.parametrize(("title", "lines", "key", "fault"), INCLUDES, ids=[row[0] for row in INCLUDES])
def test_a_wrong_include_or_table_is_named(title: str, lines: str, key: str, fault: str, tmp_path: Path) -> None:
    others = {
        "back.toml": 'schema_version = 1\ninclude = ["main.toml"]\n',
        "top.toml": 'schema_version = 1\ndata_dir = "elsewhere"\n',
        "old.toml": "",
        "block.toml": 'schema_version = 1\n[block.one]\nform = "ideal"\n',
        "defaults.toml": "schema_version = 1\n[defaults]\nscan_s = 2\n",
    }
    for name, text in others.items():
        (tmp_path / name).write_text(text, "utf-8")
    (tmp_path / "main.toml").write_text(f"schema_version = 1\n{lines}\n", "utf-8")
    complaints = complaints_of(tmp_path / "main.toml")
    assert any(one.key == key and fault in one.fault for one in complaints), title


def test_more_files_than_anybody_needs_are_refused(tmp_path: Path) -> None:
    many = [f"part-{number}.toml" for number in range(101)]
    for name in many:
        (tmp_path / name).write_text("schema_version = 1\n", "utf-8")
    (tmp_path / "main.toml").write_text(f"schema_version = 1\ninclude = {many}\n", "utf-8")
    complaints = complaints_of(tmp_path / "main.toml")
    assert [one.key for one in complaints if one.fault == "more than 100 files"] == [
        "include[no. 100]",
        "include[no. 101]",
    ]


def test_a_missing_file_of_site_limits_is_named(folder: Path) -> None:
    (folder / SITE).unlink()
    (complaint,) = complaints_of(folder / EXAMPLE)
    assert (complaint.file, complaint.fault) == (str(folder / SITE), "no such file")


@pytest.mark.parametrize("key", ["controller.plc2.port", "controller", "loop.TIC-999.scan_s", "block.x.form"])
def test_an_override_that_names_nothing_is_named(key: str) -> None:
    with pytest.raises(ConfigError, match="names nothing in the files"):
        load(bundled_path(EXAMPLE), {key: 1})


def test_an_override_is_judged_like_the_file() -> None:
    with pytest.raises(ConfigError, match=r"controller\.plc1\.port: 70000 is out of range"):
        load(bundled_path(EXAMPLE), {"controller.plc1.port": 70_000})
