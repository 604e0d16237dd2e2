"""From what an OPC UA server holds to drafts of loop sections."""

import tomllib
from collections.abc import Sequence

import pytest

from autotune.config.draft import draft_text
from autotune.config.types import Controller, DataType, ModbusEndpoint, OpcUaEndpoint
from autotune.errors import ConfigError
from autotune.field.facts import NodeFact
from autotune.service.tags import ListedTag, drafts_of, list_tags, server_of

UA = Controller("ua1", OpcUaEndpoint("opc.tcp://127.0.0.1:4840"), 0.05)
OTHER = Controller("ua2", OpcUaEndpoint("opc.tcp://127.0.0.1:4841"), 0.05)
MODBUS = Controller("plc1", ModbusEndpoint("127.0.0.1", 502, 1), 0.05)
PV = NodeFact("", "", DataType.REAL, is_scalar=True, is_readable=True, low_eu=0.0, high_eu=120.0, unit="degC")
OP = NodeFact("", "", DataType.REAL, is_scalar=True, is_readable=True, is_writable=True, low_eu=0.0, high_eu=100.0)
MODE = NodeFact("", "", DataType.DINT, is_scalar=True, is_writable=True, words=((0, "Manual"), (1, "Auto"), (5, "Odd")))
NUMBER = NodeFact("", "", DataType.REAL, is_scalar=True)

Row = tuple[int, str, NodeFact | None]


def tree(rows: Sequence[Row]) -> tuple[ListedTag, ...]:
    """Nodes from (depth, name, fact), in the order of a tree."""
    tags: list[ListedTag] = []
    above: list[int] = []
    for place, (depth, name, fact) in enumerate(rows):
        above = above[:depth]
        parent = above[-1] if above else -1
        way = f"{tags[parent].node_id}/{name}" if above else f"ns=2;s={name}"
        tags.append(ListedTag(way, name, parent, depth, fact))
        above.append(place)
    return tuple(tags)


def a_loop(depth: int, name: str) -> list[Row]:
    return [
        (depth, name, None),
        (depth + 1, "ProcessValue", PV),
        (depth + 1, "Setpoint", NUMBER),
        (depth + 1, "OUT", OP),
        (depth + 1, "Mode", MODE),
        (depth + 1, "Settings", None),
        (depth + 2, "Kp", NUMBER),
        (depth + 2, "Ti", NUMBER),
        (depth + 1, "Alarm", NUMBER),
    ]


PLANT = tree([(0, "Skid", None), *a_loop(1, "TIC-204"), *a_loop(1, "FIC-101"), (0, "Utilities", None)])


def test_an_object_becomes_its_loop_s_section() -> None:
    (draft,) = drafts_of(PLANT, "TIC-204", UA, "plant.toml")
    document = tomllib.loads(draft_text(draft))
    (loop,) = document["loop"]
    assert (loop["name"], loop["controller"]) == ("TIC-204", "ua1")
    assert {name: tag["node"] for name, tag in loop["tags"].items()} == {
        "pv": "ns=2;s=Skid/TIC-204/ProcessValue",
        "sp": "ns=2;s=Skid/TIC-204/Setpoint",
        "op": "ns=2;s=Skid/TIC-204/OUT",
        "mode": "ns=2;s=Skid/TIC-204/Mode",
        "gain": "ns=2;s=Skid/TIC-204/Settings/Kp",
        "integral": "ns=2;s=Skid/TIC-204/Settings/Ti",
    }
    assert loop["span"] == {
        "pv_low_eu": 0.0,
        "pv_high_eu": 120.0,
        "pv_unit": "degC",
        "op_low_eu": 0.0,
        "op_high_eu": 100.0,
    }
    assert loop["mode_codes"] == {"MAN": 0, "AUTO": 1}
    assert "# not used: Alarm, ns=2;s=Skid/TIC-204/Alarm, REAL" in draft_text(draft)
    assert "# action =" in draft_text(draft)


def test_a_folder_becomes_all_its_loops() -> None:
    assert [draft.name for draft in drafts_of(PLANT, "Skid", UA, "plant.toml")] == ["TIC-204", "FIC-101"]
    by_id = drafts_of(PLANT, "ns=2;s=Skid/FIC-101", UA, "plant.toml")
    assert [draft.name for draft in by_id] == ["FIC-101"]


@pytest.mark.parametrize(
    ("chosen", "words"),
    [("TIC-999", "nothing is called"), ("ProcessValue", "2 nodes are called"), ("Utilities", "no object with a PV")],
)
def test_what_is_no_loop_is_said_so(chosen: str, words: str) -> None:
    with pytest.raises(ConfigError, match=words):
        drafts_of(PLANT, chosen, UA, "plant.toml")


def test_hundreds_of_loops_are_drafted_at_once() -> None:
    rows: list[Row] = [(0, "Plant", None)]
    for number in range(400):
        rows += a_loop(1, f"TIC-{number}")
    drafts = drafts_of(tree(rows), "Plant", UA, "plant.toml")
    loops = tomllib.loads("\n".join(draft_text(draft) for draft in drafts))["loop"]
    assert [loop["name"] for loop in loops] == [f"TIC-{number}" for number in range(400)]
    assert all(loop["tags"]["op"]["node"] == f"ns=2;s=Plant/{loop['name']}/OUT" for loop in loops)


def test_the_words_of_a_line_say_what_the_server_tells() -> None:
    tag = ListedTag("ns=2;s=pv", "pv", -1, 0, OP)
    assert (tag.type_words, tag.range_words, tag.access_words) == ("REAL", "0 .. 100", "read, write")
    assert ListedTag("", "", -1, 0, MODE).type_words == "enumeration 0 Manual, 1 Auto, 5 Odd"
    assert ListedTag("", "", -1, 0, NodeFact("", "", is_scalar=False)).type_words == "list"
    assert ListedTag("", "", -1, 0, NodeFact("", "")).type_words == "no number"
    assert ListedTag("", "", -1, 0, None).range_words == ""


def test_the_only_server_is_meant_and_several_are_asked_about() -> None:
    assert server_of([MODBUS, UA], "plant.toml", None) is UA
    assert server_of([UA, OTHER], "plant.toml", "ua2") is OTHER
    for controllers, name, words in (
        ([UA, OTHER], None, "several OPC UA servers: ua1, ua2; name one with --controller"),
        ([MODBUS], None, "no controller speaks OPC UA"),
        ([MODBUS, UA], "plc1", "plc1 speaks Modbus, which lists no tags; use import-tags"),
        ([UA], "ua9", "there is no controller 'ua9'; use one of: ua1"),
    ):
        with pytest.raises(ConfigError, match=words):
            server_of(controllers, "plant.toml", name)


@pytest.mark.parametrize("under", ["TIC-204", "/a.b", "ns=2"])
async def test_a_start_that_names_no_node_is_refused_before_anything_is_sent(under: str) -> None:
    with pytest.raises(ConfigError, match="--under"):
        await list_tags(UA, under)
