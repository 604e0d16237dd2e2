"""A list of Modbus tags as CSV, to drafts of loops."""

import csv
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from autotune.config.complaints import meant, one_line, shown
from autotune.config.draft import Entry, LoopDraft
from autotune.config.tag_words import split_name
from autotune.config.types import DataType, RegisterTable
from autotune.errors import Complaint, ConfigError

COLUMNS = ("name", "table", "address", "type", "scale", "unit", "bit")
"""The header of a list; the last three may be missing."""

_NEEDED = ("name", "table", "address", "type")
_LARGEST_FILE = 20_000_000
_TABLES = {
    "holding": RegisterTable.HOLDING,
    "holding register": RegisterTable.HOLDING,
    "4x": RegisterTable.HOLDING,
    "input": RegisterTable.INPUT,
    "input register": RegisterTable.INPUT,
    "3x": RegisterTable.INPUT,
    "coil": RegisterTable.COIL,
    "0x": RegisterTable.COIL,
    "discrete": RegisterTable.DISCRETE,
    "discrete input": RegisterTable.DISCRETE,
    "1x": RegisterTable.DISCRETE,
}
_TYPES = {kind.value: kind for kind in DataType} | {
    "BIT": DataType.BOOL,
    "BOOLEAN": DataType.BOOL,
    "INT8": DataType.SINT,
    "UINT8": DataType.USINT,
    "BYTE": DataType.USINT,
    "INT16": DataType.INT,
    "UINT16": DataType.UINT,
    "WORD": DataType.UINT,
    "INT32": DataType.DINT,
    "UINT32": DataType.UDINT,
    "DWORD": DataType.UDINT,
    "INT64": DataType.LINT,
    "UINT64": DataType.ULINT,
    "FLOAT": DataType.REAL,
    "FLOAT32": DataType.REAL,
    "DOUBLE": DataType.LREAL,
    "FLOAT64": DataType.LREAL,
}


@dataclass(frozen=True, slots=True)
class TagList:
    """The loops of a list in the order of their first row, and the rows that belong to none."""

    loops: tuple[LoopDraft, ...]
    left_out: tuple[str, ...]


def read_tag_list(path: Path, controller: str = "") -> TagList:
    """Read a CSV list with the header ``COLUMNS``, separated by commas, semicolons or tabs.

    Raises ``ConfigError`` with a complaint for each row that is wrong, naming its line and column.
    """
    rows = _rows(path)
    complaints: list[Complaint] = []
    tags: dict[str, dict[str, dict[str, Entry]]] = {}
    units: dict[str, str] = {}
    left_out: list[str] = []
    for line, row in rows:
        whole = row["name"]
        found = split_name(whole)
        if found is None:
            left_out.append(f"line {line}: {shown(whole)} does not end in a tag that a loop has")
            continue
        loop, tag = found
        entries, wrong = _entries(row, path, line)
        complaints += wrong
        if tag in tags.setdefault(loop, {}):
            again = f"{loop} has {tag} already"
            complaints.append(Complaint(str(path), f"line {line}, name", again, "keep one of the two rows"))
        tags[loop][tag] = entries
        if tag == "pv" and row.get("unit"):
            units[loop] = row["unit"]
    if complaints:
        raise ConfigError(tuple(complaints))
    loops = tuple(
        LoopDraft(loop, told, controller, span={"pv_unit": units[loop]} if loop in units else None)
        for loop, told in tags.items()
    )
    return TagList(loops, tuple(left_out))


def _rows(path: Path) -> list[tuple[int, dict[str, str]]]:
    try:
        with path.open("rb") as opened:
            content = opened.read(_LARGEST_FILE + 1)
        text = content.decode("utf-8-sig")
    except OSError as fault:
        raise _cant_be_read(path, fault.strerror or "can't be read", "check the name and its rights") from fault
    except UnicodeDecodeError as fault:
        raise _cant_be_read(path, "not UTF-8", "save the list as UTF-8") from fault
    if len(content) > _LARGEST_FILE:
        raise _cant_be_read(path, f"larger than {_LARGEST_FILE} bytes", "divide it")
    lines = text.splitlines()
    header = lines[0] if lines else ""
    separator = max(",;\t", key=header.count)
    try:
        reader = list(csv.reader(lines, delimiter=separator, strict=True))
    except csv.Error as fault:
        raise _cant_be_read(path, f"no CSV: {one_line(str(fault))}", "mend its quotes") from fault
    names = [name.strip().casefold() for name in reader[0]] if reader else []
    _check_header(path, names)
    return [
        (number, dict(zip(names, (cell.strip() for cell in cells), strict=False)))
        for number, cells in enumerate(reader[1:], start=2)
        if any(cell.strip() for cell in cells)
    ]


def _check_header(path: Path, names: Sequence[str]) -> None:
    complaints = [
        Complaint(str(path), "line 1", f"the column {name} is missing", f"begin with a line {','.join(COLUMNS)}")
        for name in _NEEDED
        if name not in names
    ]
    complaints += [
        Complaint(str(path), "line 1", f"unknown column {shown(name)}", f"{meant(name, list(COLUMNS))}take it out")
        for name in names
        if name not in COLUMNS
    ]
    if complaints:
        raise ConfigError(tuple(complaints))


def _entries(row: Mapping[str, str], path: Path, line: int) -> tuple[dict[str, Entry], list[Complaint]]:
    """The keys of one tag, and what is wrong with its row."""
    entries: dict[str, Entry] = {}
    complaints: list[Complaint] = []
    for column, entry, fault, remedy in _cells(row):
        if fault:
            complaints.append(Complaint(str(path), f"line {line}, {column}", fault, remedy))
        elif entry is not None:
            entries[column] = entry
    return entries, complaints


def _cells(row: Mapping[str, str]) -> Iterator[tuple[str, Entry | None, str, str]]:
    table = _TABLES.get(row.get("table", "").casefold().removesuffix("s"))
    fault = "" if table else f"{shown(row.get('table', ''))} is no Modbus table"
    yield "table", table.value if table else None, fault, "write coil, discrete, input or holding"
    address = row.get("address", "")
    is_whole = address.isascii() and address.isdigit()
    fault = "" if is_whole else f"{shown(address)} is no whole number"
    yield "address", int(address) if is_whole else None, fault, "write the address as the controller's manual counts"
    kind = _TYPES.get(row.get("type", "").upper())
    fault = "" if kind else f"{shown(row.get('type', ''))} is no type"
    yield "type", kind.value if kind else None, fault, "write an IEC 61131-3 type such as REAL, INT or UDINT"
    if row.get("bit"):
        is_bit = row["bit"].isascii() and row["bit"].isdigit() and int(row["bit"]) <= 15
        fault = "" if is_bit else f"{shown(row['bit'])} is no bit of a register"
        yield "bit", int(row["bit"]) if is_bit else None, fault, "write 0 to 15"
    if row.get("scale"):
        scale = _number(row["scale"])
        fault = "" if scale else f"{shown(row['scale'])} is no scale"
        yield "scale", None if scale == 1.0 else scale, fault, "write engineering units per raw count"


def _number(text: str) -> float | None:
    try:
        number = float(text.replace(",", "."))
    except ValueError:
        return None
    return number if abs(number) <= 1e9 else None


def _cant_be_read(path: Path, fault: str, remedy: str) -> ConfigError:
    return ConfigError((Complaint(one_line(str(path)), "(file)", fault, remedy),))
