"""``sheet export`` and ``sheet workbook`` as they are typed."""

import shutil
from pathlib import Path

import pytest
from typer.testing import CliRunner, Result

from autotune.cli.app import app
from autotune.config.load import load
from autotune.errors import SheetError
from autotune.service.workplace import open_workplace
from tests.meta.source import ROOT
from tests.paper.reading import pages
from tests.sheet.sheets import change, sheet

TIC, PIC = "TIC-204-20261201-094502-7f3a", "PIC-110-20261201-095002-7f3a"


@pytest.fixture
def config(tmp_path: Path) -> Path:
    """A configuration whose archive holds two tests, one with a change of settings."""
    for name in ("rehearsal.toml", "site-limits.toml"):
        shutil.copy(ROOT / "config" / name, tmp_path)
    store = open_workplace(load(tmp_path / "rehearsal.toml"), may_create=True).store
    for one in (sheet(), sheet("PIC-110", minutes=5)):
        store.append(one)
    store.append_addendum(change(sheet()))
    return tmp_path / "rehearsal.toml"


def typed(*arguments: object) -> Result:
    return CliRunner().invoke(app, ["sheet", *map(str, arguments)])


def names(folder: Path) -> set[str]:
    return {file.name for file in folder.iterdir()}


def test_one_sheet_becomes_one_pdf_named_after_it(config: Path, tmp_path: Path) -> None:
    assert typed("export", config, TIC, "--pdf", "--to", tmp_path / "out").exit_code == 0
    assert names(tmp_path / "out") == {f"{TIC}.pdf"}
    assert "Addendum 1" in " ".join(pages((tmp_path / "out" / f"{TIC}.pdf").read_bytes()))


@pytest.mark.parametrize("chosen", [("--all",), (TIC, PIC), (TIC, "last")])
def test_all_or_several_sheets_become_one_file_with_an_index(
    config: Path, tmp_path: Path, chosen: tuple[str, ...]
) -> None:
    assert typed("export", config, *chosen, "--pdf", "--to", tmp_path / "out").exit_code == 0
    assert names(tmp_path / "out") == {"test-sheets-20261201-095002.pdf"}
    first = pages((tmp_path / "out" / "test-sheets-20261201-095002.pdf").read_bytes())[0]
    assert TIC in first
    assert PIC in first


def test_without_pdf_each_sheet_is_exported_as_csv_and_json(config: Path, tmp_path: Path) -> None:
    assert typed("export", config, "--all", "--to", tmp_path / "out").exit_code == 0
    ends = ("-samples.csv", "-writes.csv", ".json")
    assert names(tmp_path / "out") == {f"{one}{end}" for one in (TIC, PIC) for end in ends}


def test_the_workbook_is_one_file(config: Path, tmp_path: Path) -> None:
    assert typed("workbook", config, "--to", tmp_path / "out").exit_code == 0
    assert names(tmp_path / "out") == {"loop-settings.xlsx"}


def test_nothing_is_overwritten_and_the_remedy_is_told(config: Path, tmp_path: Path) -> None:
    assert typed("workbook", config, "--to", tmp_path).exit_code == 0
    before = (tmp_path / "loop-settings.xlsx").read_bytes()
    again = typed("workbook", config, "--to", tmp_path)
    assert isinstance(again.exception, SheetError)
    assert "choose another folder with --to" in str(again.exception)
    assert (tmp_path / "loop-settings.xlsx").read_bytes() == before


def test_naming_no_sheet_is_a_fault_with_its_remedy(config: Path) -> None:
    named_none = typed("export", config, "--pdf")
    assert isinstance(named_none.exception, SheetError)
    assert "--all" in str(named_none.exception)
