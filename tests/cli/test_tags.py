"""``list-tags`` and ``import-tags`` as they are typed: what goes to standard output, and with which exit code."""

import json
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest
from typer.testing import CliRunner

from autotune.cli.app import app
from autotune.config.types import DataType
from autotune.errors import ConfigError
from tests.field.ua_plant import UaPlant

HELD = {
    "pv": (DataType.REAL, 48.5),
    "op": (DataType.REAL, 40.0),
    "mode": (DataType.DINT, 1),
    "note": (DataType.BOOL, 0),
}


@pytest.fixture(scope="module")
def config(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """A file that has nothing but a server, which is there."""
    with UaPlant(HELD) as plant:
        path = tmp_path_factory.mktemp("tags") / "plant.toml"
        path.write_text(
            f'schema_version = 1\n[controller.ua1]\nprotocol = "opc-ua"\nurl = "{plant.url}"\nsecurity = "none"\n'
            "request_timeout_s = 5.0\n"
        )
        yield path


def run(*words: object) -> str:
    answer = CliRunner().invoke(app, [str(word) for word in words], catch_exceptions=False)
    assert answer.exit_code == 0, answer.output
    return answer.stdout


@pytest.mark.socket
def test_list_tags_shows_the_tree_with_types_rights_and_node_ids(config: Path) -> None:
    lines = [" ".join(line.split()) for line in run("list-tags", config).splitlines()]
    assert lines[0].startswith("Pasteuriser")
    assert lines[1] == "TIC-204 ns=2;s=TIC-204"
    assert "pv REAL read, write ns=2;s=TIC-204.pv" in lines


@pytest.mark.socket
def test_list_tags_begins_where_it_is_told(config: Path) -> None:
    for under in ("ns=2;s=TIC-204", "/2:Pasteuriser/2:TIC-204"):
        answer = json.loads(run("list-tags", config, "--under", under, "--json"))
        assert [tag["name"] for tag in answer["tags"]] == list(HELD)
        assert {tag["type"] for tag in answer["tags"]} == {"REAL", "DINT", "BOOL"}


@pytest.mark.socket
def test_a_draft_alone_is_on_standard_output(config: Path) -> None:
    (loop,) = tomllib.loads(run("list-tags", config, "--draft", "TIC-204"))["loop"]
    assert loop["controller"] == "ua1"
    assert loop["tags"] == {name: {"node": f"ns=2;s=TIC-204.{name}"} for name in ("pv", "op", "mode")}


def test_a_list_becomes_drafts_on_standard_output(tmp_path: Path) -> None:
    (tmp_path / "tags.csv").write_text("name,table,address,type\nTIC-1.PV,holding,1,REAL\nTIC-1.Alarm,coil,2,BOOL\n")
    text = run("import-tags", tmp_path / "tags.csv", "--controller", "plc1")
    (loop,) = tomllib.loads(text)["loop"]
    assert loop["tags"] == {"pv": {"table": "holding", "address": 1, "type": "REAL"}}
    assert '# left out: line 3: "TIC-1.Alarm"' in text
    assert json.loads(run("import-tags", tmp_path / "tags.csv", "--controller", "plc1", "--json"))["draft"] == text


def test_a_list_without_loops_is_an_answer_of_no(tmp_path: Path) -> None:
    (tmp_path / "tags.csv").write_text("name,table,address,type\nAlarm,coil,2,BOOL\n")
    assert CliRunner().invoke(app, ["import-tags", str(tmp_path / "tags.csv")]).exit_code == 1


def test_a_wrong_list_names_its_line(tmp_path: Path) -> None:
    (tmp_path / "tags.csv").write_text("name,table,address,type\nTIC-1.PV,holding,one,REAL\n")
    with pytest.raises(ConfigError, match="line 2, address"):
        run("import-tags", tmp_path / "tags.csv")


def test_a_file_without_a_server_is_told_what_to_add(tmp_path: Path) -> None:
    (tmp_path / "plant.toml").write_text("schema_version = 1\n")
    with pytest.raises(ConfigError, match=r'no controller speaks OPC UA; add .*protocol = "opc-ua"'):
        run("list-tags", tmp_path / "plant.toml")


@pytest.mark.parametrize("column", ["name", "table", "address", "type", "scale", "unit", "bit"])
def test_the_help_of_import_tags_tells_the_header(column: str) -> None:
    assert column in "".join(run("import-tags", "--help").split())
