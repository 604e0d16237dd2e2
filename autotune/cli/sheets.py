"""``sheet list, show, export, workbook, verify``: the records."""

from collections.abc import Mapping, Sequence
from datetime import UTC, datetime, tzinfo
from pathlib import Path

from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import Voice
from autotune.errors import SheetError
from autotune.paper.pdf import to_pdf
from autotune.paper.text import sheet_page
from autotune.paper.workbook import to_workbook
from autotune.service.workplace import Workplace
from autotune.sheet.export import samples_to_csv, to_json, writes_to_csv
from autotune.sheet.store import StoredSheet


def stored_sheet(workplace: Workplace, name: str) -> StoredSheet:
    """The sheet called ``name``, or the newest one for ``last``; raises ``SheetError``."""
    if name != "last":
        return workplace.store.get(name)
    lines = workplace.store.list()
    if not lines:
        raise SheetError(f"{workplace.data_dir}: no sheet is kept there yet; 'autotune test' makes one")
    return workplace.store.get(max(lines, key=lambda line: line.started_utc).sheet_id)


def list_sheets(voice: Voice, workplace: Workplace, loop: str | None) -> ExitCode:
    """A line for each sheet."""
    lines = workplace.store.list(loop)
    for line in lines:
        code = "" if line.code is None else f"  {line.code}"
        voice.say(f"{line.sheet_id:34}  {line.ended}{code}")
    if not lines:
        voice.say("no sheets yet; 'autotune test' makes one")
    voice.answer(
        {
            "sheets": [
                {"sheet": line.sheet_id, "loop": line.loop, "outcome": line.ended, "code": line.code, "hash": line.hash}
                for line in lines
            ]
        }
    )
    return ExitCode.DONE


def show(voice: Voice, workplace: Workplace, name: str) -> ExitCode:
    """One sheet as a page, in local time with its zone."""
    voice.say(sheet_page(stored_sheet(workplace, name), _local_zone()))
    return ExitCode.DONE


def chosen_sheets(workplace: Workplace, names: Sequence[str], *, is_all: bool) -> tuple[StoredSheet, ...]:
    """The sheets called ``names``, or all of them, oldest first; raises ``SheetError`` where none was named."""
    if is_all:
        names = [line.sheet_id for line in workplace.store.list()]
    if not names:
        raise SheetError(f"{workplace.data_dir}: no sheet to export; name sheets, or use --all once there are some")
    return tuple(stored_sheet(workplace, name) for name in dict.fromkeys(names))


def export(voice: Voice, sheets: Sequence[StoredSheet], folder: Path) -> ExitCode:
    """Three files of each sheet beside each other; none is overwritten."""
    files: dict[str, bytes] = {}
    for stored in sheets:
        name = stored.sheet.sheet_id
        files[f"{name}-samples.csv"] = samples_to_csv(stored).encode()
        files[f"{name}-writes.csv"] = writes_to_csv(stored).encode()
        files[f"{name}.json"] = to_json(stored).encode()
    return _keep(voice, folder, files)


def export_pdf(voice: Voice, workplace: Workplace, sheets: Sequence[StoredSheet], folder: Path) -> ExitCode:
    """One PDF file to be signed, of one sheet or of a whole commissioning folder; none is overwritten."""
    last = sheets[-1].sheet
    name = last.sheet_id if len(sheets) == 1 else f"test-sheets-{last.started_utc:%Y%m%d-%H%M%S}"
    return _keep(voice, folder, {f"{name}.pdf": to_pdf(sheets, workplace.store.head_hash(), _local_zone())})


def workbook(voice: Voice, workplace: Workplace, folder: Path) -> ExitCode:
    """All loops' settings as found and as left, as a workbook; none is overwritten."""
    loops = [(loop.name, loop.service, loop.unit) for loop in workplace.configuration.loops]
    return _keep(voice, folder, {"loop-settings.xlsx": to_workbook(workplace.store, loops, _local_zone())})


def _local_zone() -> tzinfo:
    return datetime.now().astimezone().tzinfo or UTC


def _keep(voice: Voice, folder: Path, files: Mapping[str, bytes]) -> ExitCode:
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for file_name, content in files.items():
            with (folder / file_name).open("xb") as file:
                file.write(content)
            voice.say(str(folder / file_name))
    except OSError as fault:
        raise SheetError(f"{fault.filename}: {fault.strerror}; choose another folder with --to") from fault
    return ExitCode.DONE


def verify(voice: Voice, workplace: Workplace, head: str | None) -> ExitCode:
    """The chain as a whole; 1 when anything was changed or removed."""
    damages = workplace.store.verify(head)
    for damage in damages:
        voice.say(str(damage), style="stop")
    head_hash = workplace.store.head_hash()
    if not damages:
        voice.say("every sheet is as it was written", style="good")
        voice.say(f"head hash, to keep elsewhere: {head_hash}")
    voice.answer({"intact": not damages, "damage": [str(damage) for damage in damages], "head_hash": head_hash})
    return ExitCode.NO if damages else ExitCode.DONE
