"""CSV lists of Modbus tags to drafts of loops, there and back for hundreds of them."""

import csv
import io
import tomllib
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.config.bundled import bundled_path
from autotune.config.draft import LoopDraft, draft_text
from autotune.config.load import load
from autotune.config.tag_list import COLUMNS, read_tag_list
from autotune.config.tag_words import TAG_NAMES, split_name, tag_of
from autotune.config.types import DataType, ModbusTag, RegisterTable
from autotune.errors import ConfigError

LOOPS = 300
WIDTH = 20
ROWS = (
    # tag, words in the list, offset, type, scale
    ("pv", "PV", 0, "REAL", ""),
    ("sp", "Setpoint", 2, "FLOAT32", ""),
    ("op", "OUT", 4, "INT", "0.01"),
    ("mode", "Mode", 5, "UINT16", ""),
    ("gain", "Kp", 6, "float", ""),
    ("integral", "Ti", 8, "FLOAT", "60"),
    ("derivative", "Td", 10, "REAL", ""),
    ("plc_clock_ms", "PLC_Clock_ms", 12, "UDINT", ""),
    ("boot_count", "Boot_Count", 14, "WORD", ""),
)


def listed(loops: int, delimiter: str = ",") -> str:
    text = io.StringIO()
    writer = csv.writer(text, delimiter=delimiter)
    writer.writerow(COLUMNS[:6])
    for number in range(loops):
        for _, words, offset, kind, scale in ROWS:
            writer.writerow(
                (f"Area{number % 7}.TIC-{number}_{words}", "holding", number * WIDTH + offset, kind, scale, "degC")
            )
        writer.writerow((f"TIC-{number}.HH_Alarm", "coil", number, "BOOL", "", ""))
    return text.getvalue()


REST = """
schema_version = 1
[controller.plc1]
protocol = "modbus"
host = "127.0.0.1"
device_id = 1
addressing = "from 0"
word_order = "big"
plc_scan_s = 0.1
[block.ideal]
form = "ideal"
gain_kind = "gain"
gain_per = "percent"
integral_kind = "time in s"
derivative_kind = "time in s"
[defaults]
service = "filled in by a person"
unit = "area"
action = "reverse"
actuator = "continuous"
protects = "none"
block = "ideal"
scan_s = 0.5
without_guard = "with consent"
span = { pv_low_eu = 0.0, pv_high_eu = 120.0, op_low_means = "closed", op_high_means = "open", failure_position = "closed" }
mode_codes = { MAN = 0, AUTO = 1 }
limits = { step_up_pct = 10.0, step_down_pct = 10.0, op_low_pct = 5.0, op_high_pct = 95.0, pv_low_eu = 20.0, pv_high_eu = 100.0, switch_within_s = 60.0, test_within_s = 600.0, dead_time_s = 5.0 }
relay = { step_up_pct = 5.0, step_down_pct = 5.0 }
baseline = { look_around_s = 10.0, hold_s = 20.0, noise_at_most_pct = 1.0, drift_at_most_pct_per_s = 0.1 }
"""  # noqa: E501 - as a person may write it


@pytest.mark.parametrize("delimiter", [",", ";", "\t"])
def test_hundreds_of_loops_come_from_a_list_into_a_configuration(delimiter: str, tmp_path: Path) -> None:
    (tmp_path / "tags.csv").write_text(listed(LOOPS, delimiter), "utf-8-sig")
    drafted = read_tag_list(tmp_path / "tags.csv", "plc1")
    assert len(drafted.left_out) == LOOPS
    text = "\n".join(draft_text(draft) for draft in drafted.loops)
    (tmp_path / "plant.toml").write_text(REST + text, "utf-8")

    plant = load(tmp_path / "plant.toml")

    assert [loop.name for loop in plant.loops] == [f"TIC-{number}" for number in range(LOOPS)]
    kinds = {"REAL": DataType.REAL, "INT": DataType.INT, "UDINT": DataType.UDINT}
    kinds |= {"FLOAT": DataType.REAL, "FLOAT32": DataType.REAL, "UINT16": DataType.UINT, "WORD": DataType.UINT}
    for number, loop in enumerate(plant.loops):
        assert loop.tags == tuple(
            (
                tag,
                ModbusTag(RegisterTable.HOLDING, number * WIDTH + offset, kinds[kind.upper()], scale=float(scale or 1)),
            )
            for tag, _, offset, kind, scale in sorted(ROWS, key=lambda row: TAG_NAMES.index(row[0]))
        )
        assert loop.pv_span.unit == "degC"


def write(folder: Path, *lines: str) -> Path:
    path = folder / "tags.csv"
    path.write_text("\n".join(lines) + "\n", "utf-8")
    return path


HEADER = "name,table,address,type,scale,unit,bit"


@pytest.mark.parametrize(
    ("line", "column", "words"),
    [
        (
            "TIC-1.PV,registers,1,REAL,,,",
            "table",
            '"registers" is no Modbus table; write coil, discrete, input or holding',
        ),
        ("TIC-1.PV,holding,1.5,REAL,,,", "address", '"1.5" is no whole number'),
        ("TIC-1.PV,holding,,REAL,,,", "address", '"" is no whole number'),
        ("TIC-1.PV,holding,-1,REAL,,,", "address", '"-1" is no whole number'),
        ("TIC-1.PV,holding,1,STRING,,,", "type", '"STRING" is no type'),
        ("TIC-1.PV,holding,1,REAL,none,,", "scale", '"none" is no scale'),
        ("TIC-1.PV,holding,1,REAL,0,,", "scale", '"0" is no scale'),
        ("TIC-1.PV,holding,1,REAL,nan,,", "scale", '"nan" is no scale'),
        ("TIC-1.PV,holding,1,BOOL,,,16", "bit", '"16" is no bit'),
    ],
)
def test_a_wrong_row_is_named_by_line_and_column(line: str, column: str, words: str, tmp_path: Path) -> None:
    with pytest.raises(ConfigError) as caught:
        read_tag_list(write(tmp_path, HEADER, "", line))
    (complaint,) = caught.value.complaints
    assert complaint.key == f"line 3, {column}"
    assert words in str(complaint)


def test_a_tag_told_twice_is_named(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="line 3, name: TIC-1 has pv already"):
        read_tag_list(write(tmp_path, HEADER, "TIC-1.PV,holding,1,REAL,,,", "TIC-1_Process Value,holding,3,REAL,,,"))


@pytest.mark.parametrize(
    ("header", "words"),
    [
        ("name,table,type", "the column address is missing"),
        ("name,table,address,type,scaling", "unknown column"),
        ("", "the column name is missing"),
    ],
)
def test_a_wrong_header_is_named(header: str, words: str, tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=words):
        read_tag_list(write(tmp_path, header, "TIC-1.PV,holding,1,REAL"))


def test_a_list_that_cant_be_read_is_named(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="No such file"):
        read_tag_list(tmp_path / "gone.csv")
    (tmp_path / "latin.csv").write_bytes(b"name,table,address,type\nT\xe9.PV,holding,1,REAL\n")
    with pytest.raises(ConfigError, match="not UTF-8"):
        read_tag_list(tmp_path / "latin.csv")
    (tmp_path / "quotes.csv").write_text('name,table,address,type\n"TIC-1.PV,holding,1,REAL')
    with pytest.raises(ConfigError, match="no CSV"):
        read_tag_list(tmp_path / "quotes.csv")


def test_a_decimal_comma_and_a_bit_are_taken(tmp_path: Path) -> None:
    path = write(
        tmp_path, HEADER.replace(",", ";"), "TIC-1.OP;holding;7;INT;0,01;%;", "TIC-1.Mode;input registers;9;BOOL;;;3"
    )
    (draft,) = read_tag_list(path).loops
    assert draft.tags["op"] == {"table": "holding", "address": 7, "type": "INT", "scale": 0.01}
    assert draft.tags["mode"] == {"table": "input", "address": 9, "type": "BOOL", "bit": 3}


@pytest.mark.parametrize(
    ("name", "parts"),
    [
        ("TIC-204.PV", ("TIC-204", "pv")),
        ("TIC-204_op_request", ("TIC-204", "op_request")),
        ("Skid/TIC-204/Process Value", ("TIC-204", "pv")),
        ("Area1.TIC-204:Setpoint", ("TIC-204", "sp")),
        ("TIC_204.MODE", ("TIC_204", "mode")),
        ("TIC-204 Kp", ("TIC-204", "gain")),
        ("PV", None),
        (".PV", None),
        ("TIC-204.HH_Alarm", None),
        ("TIC 204.PV", None),  # a name with a space is none
        ("", None),
    ],
)
def test_a_name_is_a_loop_and_a_tag_or_nothing(name: str, parts: tuple[str, str] | None) -> None:
    assert split_name(name) == parts


@pytest.mark.parametrize("tag", TAG_NAMES)
def test_every_tag_is_known_by_its_own_name_in_any_spelling(tag: str) -> None:
    assert tag_of(tag) == tag_of(tag.upper()) == tag_of(tag.replace("_", " ").title()) == tag


@pytest.mark.parametrize("doubtful", ["mv", "cv", "p", "i", "d", "x", "y", "w", "value"])
def test_a_doubtful_short_form_stands_for_nothing(doubtful: str) -> None:
    assert tag_of(doubtful) is None


@given(
    st.text(max_size=20),
    st.dictionaries(st.sampled_from(TAG_NAMES), st.text(max_size=20), max_size=4),
    st.text(max_size=20),
)
def test_any_text_in_a_draft_is_still_toml(name: str, nodes: dict[str, str], remark: str) -> None:
    draft = LoopDraft(name, {tag: {"node": text} for tag, text in nodes.items()}, remarks=(remark,))
    (loop,) = tomllib.loads(draft_text(draft))["loop"]
    assert loop["name"] == name
    assert {tag: entries["node"] for tag, entries in loop["tags"].items()} == nodes


def test_a_draft_asks_for_everything_that_the_schema_asks_for(tmp_path: Path) -> None:
    """What a person has to fill in is exactly what loading complains of."""
    example = bundled_path("example-modbus.toml").read_text("utf-8")
    head = example[: example.index("[[loop]]")].replace('site_limits = "site-limits.toml"', "")
    head = head[: head.index("[defaults]")]
    draft = draft_text(LoopDraft("TIC-1", {}, "plc1"))
    (tmp_path / "plant.toml").write_text(head + draft, "utf-8")
    with pytest.raises(ConfigError) as caught:
        load(tmp_path / "plant.toml")
    missing = {one.key.rpartition(".")[2] for one in caught.value.complaints if one.fault == "missing"}
    asked = {line.split()[1] for line in draft.splitlines() if line.startswith("# ") and "fill in" in line}
    assert missing <= asked
    assert asked - missing == set()
