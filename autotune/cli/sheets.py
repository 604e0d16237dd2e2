"""``sheet list, show, export, verify``: the records."""

from datetime import datetime
from pathlib import Path

from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import Voice
from autotune.errors import SheetError
from autotune.paper.text import sheet_page
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
    zone = datetime.now().astimezone().tzinfo
    stored = stored_sheet(workplace, name)
    voice.say(sheet_page(stored) if zone is None else sheet_page(stored, zone))
    return ExitCode.DONE


def export(voice: Voice, workplace: Workplace, name: str, folder: Path) -> ExitCode:
    """Three files beside each other; none is overwritten."""
    stored = stored_sheet(workplace, name)
    texts = {
        f"{stored.sheet.sheet_id}-samples.csv": samples_to_csv(stored),
        f"{stored.sheet.sheet_id}-writes.csv": writes_to_csv(stored),
        f"{stored.sheet.sheet_id}.json": to_json(stored),
    }
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for file_name, text in texts.items():
            with (folder / file_name).open("x", encoding="utf-8", newline="") as file:
                file.write(text)
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
