"""The files that come with the program are found, right, complete and explained."""

import re
import shutil
import subprocess
import sys
import tomllib
from pathlib import Path
from typing import Any, get_args

import pytest

from autotune.config.bundled import bundled_path
from autotune.config.load import load
from autotune.config.numbers import Table
from autotune.config.schema import ControllerTable, FileTable, LoopTable
from autotune.config.schema_opc_ua import OpcUaControllerTable
from autotune.config.schema_settings import BlockTable
from autotune.config.schema_site import NeverWrittenTable, SiteLimitsTable
from autotune.config.schema_tags import TagsTable, TagTable
from autotune.config.types import DataType
from autotune.errors import ConfigError

EXAMPLE, UA_EXAMPLE, SITE = "example-modbus.toml", "example-opc-ua.toml", "site-limits.toml"


@pytest.mark.parametrize("name", ["rehearsal.toml", EXAMPLE, UA_EXAMPLE, SITE, "plc-guard.st"])
def test_a_bundled_file_is_found(name: str) -> None:
    assert bundled_path(name).is_file()
    assert bundled_path(name).name == name


@pytest.mark.parametrize("name", ["rehersal.toml", "../pyproject.toml", "", "plc-guard"])
def test_another_name_is_a_complaint_that_lists_what_there_is(name: str) -> None:
    with pytest.raises(ConfigError) as caught:
        bundled_path(name)
    (complaint,) = caught.value.complaints
    assert complaint.fault == "no such file comes with the program"
    assert "rehearsal.toml" in complaint.remedy


@pytest.mark.parametrize("name", ["rehearsal.toml", EXAMPLE, UA_EXAMPLE])
def test_a_bundled_configuration_is_right(name: str) -> None:
    assert load(bundled_path(name)).loops


def tables_in(annotation: Any) -> list[type[Table]]:
    """All tables that an annotation mentions."""
    if isinstance(annotation, type) and issubclass(annotation, Table):
        return [annotation]
    return [found for part in get_args(annotation) for found in tables_in(part)]


def tables_of(table: type[Table]) -> set[type[Table]]:
    """The table and all tables inside it."""
    inner = {found for field in table.model_fields.values() for found in tables_in(field.annotation)}
    return {table}.union(*(tables_of(one) for one in inner))


def shown_in(content: object, table: type[Table]) -> set[tuple[type[Table], str]]:
    """Which keys of which tables a document has, walked along the schema."""
    if isinstance(content, list):
        return {found for part in content for found in shown_in(part, table)}
    assert isinstance(content, dict)
    shown: set[tuple[type[Table], str]] = set()
    for name, field in table.model_fields.items():
        if name not in content:
            continue
        shown.add((table, name))
        has_free_names = getattr(field.annotation, "__origin__", None) is dict
        parts = list(content[name].values()) if has_free_names else content[name]
        for inner in tables_in(field.annotation):
            shown |= shown_in(parts, inner)
    return shown


ROOTS: tuple[type[Table], ...] = (
    FileTable,
    ControllerTable,
    OpcUaControllerTable,
    BlockTable,
    LoopTable,
    SiteLimitsTable,
)
TABLES = sorted({table for root in ROOTS for table in tables_of(root)}, key=lambda table: table.__name__)


OPC_UA_ONLY = {(TagTable, "node"), (TagTable, "path"), (TagTable, "namespace"), (TagsTable, "namespace")}
MODBUS_ONLY = {
    (TagTable, "table"),
    (TagTable, "bit"),
    (TagTable, "word_order"),
    (TagTable, "byte_order"),
    (TagTable, "ne43"),
} | {(LoopTable, "address_offset")}


def shown_keys(name: str) -> set[tuple[type[Table], str]]:
    """Every key that an example and the site's limits have."""
    example = tomllib.loads(bundled_path(name).read_text("utf-8"))
    shown = shown_in(example, FileTable) | shown_in(
        tomllib.loads(bundled_path(SITE).read_text("utf-8")), SiteLimitsTable
    )
    for controller in example["controller"].values():
        is_opc_ua = controller["protocol"] == "opc-ua"
        shown |= shown_in(controller, OpcUaControllerTable if is_opc_ua else ControllerTable)
    shown |= shown_in(list(example["block"].values()), BlockTable)
    return shown | shown_in([*example["loop"], example["defaults"]], LoopTable)


@pytest.mark.parametrize(
    ("name", "foreign_table", "foreign"),
    [(EXAMPLE, OpcUaControllerTable, OPC_UA_ONLY), (UA_EXAMPLE, ControllerTable, MODBUS_ONLY)],
)
def test_every_key_of_the_schema_is_in_the_example_or_the_site_s_limits(
    name: str, foreign_table: type[Table], foreign: set[tuple[type[Table], str]]
) -> None:
    assert "#   node = " in bundled_path(SITE).read_text("utf-8")  # its controller is in no example
    commented = {(NeverWrittenTable, "node")}
    inside_foreign = {table for table in TABLES if table.__name__ == "Ne43Table"} if name == UA_EXAMPLE else set()
    known = {
        (table, key)
        for table in TABLES
        for key in table.model_fields
        if table is not foreign_table and table not in inside_foreign
    }
    missing = known - shown_keys(name) - foreign - commented
    assert {f"{table.__name__}.{key}" for table, key in missing} == set()


@pytest.mark.parametrize("name", [EXAMPLE, UA_EXAMPLE, SITE])
def test_every_key_is_explained_by_a_comment(name: str) -> None:
    lines = bundled_path(name).read_text("utf-8").splitlines()
    assignment = re.compile(r"\s*[\w-]+ = ")
    unexplained = [
        line
        for before, line in zip(["", *lines], lines, strict=False)
        if assignment.match(line) and "# " not in line and not before.startswith("#")
    ]
    assert not unexplained


def test_every_key_of_the_schema_has_words_for_its_remedy() -> None:
    wordless = [
        f"{table.__name__}.{name}"
        for table in TABLES
        for name, field in table.model_fields.items()
        if not field.description
    ]
    assert not wordless


def test_numbers_with_a_unit_say_it_in_their_key() -> None:
    units = ("_s", "_pct", "_eu", "_ma")
    without = {"low", "high", "resolution", "factor_at_most", "scale", "offset", "derivative_filter_ratio"}
    without |= {"setpoint_weight", "integral_off", "derivative_off", "hysteresis_per_noise"}
    numbers = {
        name for table in TABLES for name, field in table.model_fields.items() if float in plain_types(field.annotation)
    }
    assert {name for name in numbers if not name.endswith(units)} == without


def plain_types(annotation: Any) -> set[Any]:
    """The types that a union or an annotated type is made of."""
    parts = get_args(annotation)
    return {found for part in parts for found in plain_types(part)} if parts else {annotation}


def test_types_fill_as_many_registers_as_their_bits_need() -> None:
    # IEC 61131-3, elementary data types: bits of each; a register holds 16 (SINT and USINT fill one).
    bits = {
        "BOOL": 1,
        "SINT": 8,
        "USINT": 8,
        "INT": 16,
        "UINT": 16,
        "DINT": 32,
        "UDINT": 32,
        "LINT": 64,
        "ULINT": 64,
        "REAL": 32,
        "LREAL": 64,
    }
    assert {kind.value: kind.register_count for kind in DataType} == {
        name: -(-size // 16) for name, size in bits.items()
    }
    assert {kind.value for kind in DataType if not kind.is_whole} == {"REAL", "LREAL"}


def test_the_files_are_found_in_the_source_tree() -> None:
    assert bundled_path("rehearsal.toml").parent == Path(__file__).parents[2] / "config"


def test_the_files_are_found_beside_an_installed_program(tmp_path: Path) -> None:
    root = Path(__file__).parents[2]
    shutil.copytree(root / "autotune", tmp_path / "autotune", ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copytree(root / "config", tmp_path / "autotune" / "bundled_config")  # as the wheel lays them
    look = "from autotune.config.bundled import bundled_path; print(bundled_path('rehearsal.toml'))"
    found = subprocess.run([sys.executable, "-c", look], cwd=tmp_path, capture_output=True, text=True, check=True)
    assert Path(found.stdout.strip()) == tmp_path / "autotune" / "bundled_config" / "rehearsal.toml"
