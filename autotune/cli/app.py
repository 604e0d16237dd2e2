"""The command line: arguments in, one function call, an exit code out."""

from collections.abc import Coroutine
from pathlib import Path
from typing import Annotated, Any

import typer

from autotune.cli import check as checking
from autotune.cli import convert as converting
from autotune.cli import rehearse as rehearsing
from autotune.cli import service_app, sheets
from autotune.cli import settings as setting
from autotune.cli import tags as listing
from autotune.cli import test as testing
from autotune.cli.exit_codes import ExitCode
from autotune.cli.operators import PersonAtTheTerminal
from autotune.cli.printing import Voice
from autotune.cli.signals import run_to_its_end
from autotune.cli.soft_plant import Link
from autotune.config.load import load
from autotune.loop.settings import BlockFields, PidForm
from autotune.service.workplace import Workplace, open_workplace

app = typer.Typer(
    name="autotune",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    help="Supervised relay-feedback tuning of PID loops that live in PLCs. "
    "Try it first with 'autotune rehearse', which runs the whole job on a bundled soft plant.",
)
sheet_app = typer.Typer(no_args_is_help=True, help="The records: list, show, export, workbook, verify.")
app.add_typer(sheet_app, name="sheet")
app.command()(service_app.serve)
app.add_typer(service_app.person_app, name="person")

Config = Annotated[Path, typer.Argument(metavar="CONFIG", help="the configuration file (TOML)")]
Loop = Annotated[str, typer.Argument(metavar="LOOP", help="the loop's tag name, such as TIC-204")]
SheetId = Annotated[str, typer.Argument(metavar="SHEET", help="the sheet's id; 'last' is the newest one")]
ToFolder = Annotated[Path, typer.Option("--to", metavar="FOLDER", help="where the files go")]
Json = Annotated[bool, typer.Option("--json", help="answer with one JSON object on standard output")]
PersonName = Annotated[
    str | None, typer.Option("--person", metavar="NAME", help="who acts; otherwise the operating system's user")
]


def _run(coroutine: Coroutine[Any, Any, ExitCode]) -> None:
    raise typer.Exit(run_to_its_end(coroutine))


def _workplace(config: Path, *, may_create: bool = False) -> Workplace:
    return open_workplace(load(config), may_create=may_create)


@app.command()
def rehearse(
    scripted_operator: Annotated[
        bool,
        typer.Option("--scripted-operator", help="answer every question by a script; it reaches only the soft plant"),
    ] = False,
    loop: Annotated[str, typer.Option("--loop", metavar="LOOP", help="which loop of the juice skid")] = "TIC-204",
    link: Annotated[Link, typer.Option("--link", help="the protocol to reach it by")] = Link.MODBUS,
    keep: Annotated[
        Path | None, typer.Option("--keep", metavar="FOLDER", help="keep the records in this new folder")
    ] = None,
    is_json: Json = False,
) -> None:
    """Do the whole job on the bundled soft plant over a real socket: check, test, confirm, write, read back."""
    _run(rehearsing.rehearse(Voice(is_json=is_json), loop, link, is_scripted=scripted_operator, keep=keep))


@app.command()
def check(
    config: Config,
    loop: Annotated[str | None, typer.Argument(metavar="[LOOP]", help="one loop; otherwise all of them")] = None,
    look: Annotated[float, typer.Option("--look", metavar="SECONDS", min=0.5, help="how long to look at a loop")] = 3.0,
    is_json: Json = False,
) -> None:
    """Check the files, then read each loop (nothing is written) and say what would stop a test."""
    workplace = _workplace(config, may_create=True)
    loops = workplace.configuration.loops if loop is None else (workplace.loop(loop),)
    _run(checking.check(Voice(is_json=is_json), workplace, loops, look))


@app.command()
def test(
    config: Config,
    loop: Loop,
    dry_run: Annotated[
        bool,
        typer.Option("--dry-run", help="tell the tags to be written, the extreme outputs and the time; write nothing"),
    ] = False,
    person: PersonName = None,
    is_json: Json = False,
) -> None:
    """Run one supervised relay test: it moves a real output. Ctrl-C hands the loop back."""
    voice = Voice(is_json=is_json)
    workplace = _workplace(config, may_create=True)
    described = workplace.loop(loop)
    if dry_run:
        _run(testing.dry_run(voice, workplace, described))
    _run(testing.test(voice, workplace, described, PersonAtTheTerminal(voice, person)))


@app.command()
def propose(config: Config, sheet: SheetId, is_json: Json = False) -> None:
    """Show a sheet's proposals side by side, beside the settings as found."""
    raise typer.Exit(setting.propose(Voice(is_json=is_json), _workplace(config), sheet))


@app.command()
def write(
    config: Config,
    sheet: SheetId,
    proposal: Annotated[str, typer.Option("--proposal", metavar="NAME", help="the proposal to write")],
    person: PersonName = None,
    is_json: Json = False,
) -> None:
    """Write a proposal into the controller after you typed its digest; read it back, or put the old settings back."""
    voice = Voice(is_json=is_json)
    _run(setting.write(voice, _workplace(config), sheet, proposal, PersonAtTheTerminal(voice, person)))


@app.command()
def restore(
    config: Config,
    loop: Loop,
    sheet: Annotated[
        str | None, typer.Option("--sheet", metavar="SHEET", help="as found on this sheet; otherwise on the newest one")
    ] = None,
    person: PersonName = None,
    is_json: Json = False,
) -> None:
    """Give back a loop that a broken-off test left, or write settings as found on an earlier sheet back."""
    voice = Voice(is_json=is_json)
    workplace = _workplace(config)
    _run(setting.restore(voice, workplace, workplace.loop(loop), sheet, PersonAtTheTerminal(voice, person)))


@sheet_app.command("list")
def sheet_list(
    config: Config,
    loop: Annotated[str | None, typer.Option("--loop", metavar="LOOP", help="only this loop's sheets")] = None,
    is_json: Json = False,
) -> None:
    """List the sheets, oldest first."""
    raise typer.Exit(sheets.list_sheets(Voice(is_json=is_json), _workplace(config), loop))


@sheet_app.command("show")
def sheet_show(config: Config, sheet: SheetId) -> None:
    """Show one sheet as a page."""
    raise typer.Exit(sheets.show(Voice(), _workplace(config), sheet))


@sheet_app.command("export")
def sheet_export(
    config: Config,
    chosen: Annotated[
        list[str] | None, typer.Argument(metavar="SHEET", help="sheets by id; 'last' is the newest one")
    ] = None,
    is_all: Annotated[bool, typer.Option("--all", help="all sheets")] = False,
    is_pdf: Annotated[bool, typer.Option("--pdf", help="one PDF file to be signed, instead of CSV and JSON")] = False,
    to: ToFolder = Path(),
) -> None:
    """Export sheets: samples and writes as CSV, everything as JSON; or on paper, as one PDF file to be signed."""
    workplace = _workplace(config)
    stored = sheets.chosen_sheets(workplace, chosen or (), is_all=is_all)
    if is_pdf:
        raise typer.Exit(sheets.export_pdf(Voice(), workplace, stored, to))
    raise typer.Exit(sheets.export(Voice(), stored, to))


@sheet_app.command("workbook")
def sheet_workbook(config: Config, to: ToFolder = Path()) -> None:
    """Export the settings of all loops as found and as left, as a workbook for a spreadsheet."""
    raise typer.Exit(sheets.workbook(Voice(), _workplace(config), to))


@sheet_app.command("verify")
def sheet_verify(
    config: Config,
    head: Annotated[
        str | None, typer.Option("--head", metavar="HASH", help="a head hash kept elsewhere, to see a cut-off end")
    ] = None,
    is_json: Json = False,
) -> None:
    """Verify that no sheet was changed or removed, and print the head hash to keep elsewhere."""
    raise typer.Exit(sheets.verify(Voice(is_json=is_json), _workplace(config), head))


@app.command()
def convert(
    form: Annotated[PidForm, typer.Option("--form", help="the form of the given settings")],
    to: Annotated[PidForm, typer.Option("--to", help="the form wanted")],
    gain: Annotated[float, typer.Option("--gain", help="gain, or the proportional band with --gain-as band")],
    integral: Annotated[float, typer.Option("--integral", help="integral; 0 is off")] = 0.0,
    derivative: Annotated[float, typer.Option("--derivative", help="derivative; 0 is off")] = 0.0,
    gain_as: Annotated[converting.GainWord, typer.Option("--gain-as")] = converting.GainWord.GAIN,
    integral_as: Annotated[converting.IntegralWord, typer.Option("--integral-as")] = converting.IntegralWord.S,
    derivative_as: Annotated[converting.DerivativeWord, typer.Option("--derivative-as")] = converting.DerivativeWord.S,
    to_gain: Annotated[converting.GainWord, typer.Option("--to-gain")] = converting.GainWord.GAIN,
    to_integral: Annotated[converting.IntegralWord, typer.Option("--to-integral")] = converting.IntegralWord.S,
    to_derivative: Annotated[converting.DerivativeWord, typer.Option("--to-derivative")] = converting.DerivativeWord.S,
    is_json: Json = False,
) -> None:
    """Convert settings between forms and units; gain is %OP per %PV of span."""
    given = converting.Notation(form, gain_as, integral_as, derivative_as)
    wanted = converting.Notation(to, to_gain, to_integral, to_derivative)
    fields = BlockFields(gain, integral, derivative)
    raise typer.Exit(converting.convert(Voice(is_json=is_json), fields, given, wanted))


@app.command("list-tags")
def list_tags(
    config: Config,
    controller: Annotated[
        str | None, typer.Option("--controller", metavar="NAME", help="which OPC UA server, where there are several")
    ] = None,
    under: Annotated[
        str, typer.Option("--under", metavar="NODE", help="begin there: a node id, or a path such as /2:Skid")
    ] = "",
    draft: Annotated[
        str | None,
        typer.Option("--draft", metavar="OBJECT", help="draft the section of this object's loop, or of all below it"),
    ] = None,
    is_json: Json = False,
) -> None:
    """Show what an OPC UA server holds, or draft loop sections from it (TOML); the file's loops may be unfinished."""
    _run(listing.show_tags(Voice(is_json=is_json), config, controller, under, draft))


@app.command("import-tags")
def import_tags(
    file: Annotated[
        Path,
        typer.Argument(
            metavar="FILE.csv",
            help="a list with the header name,table,address,type,scale,unit,bit (the last three may be missing), "
            "separated by commas, semicolons or tabs; a name ends in the tag, such as TIC-204.PV",
        ),
    ],
    controller: Annotated[
        str, typer.Option("--controller", metavar="NAME", help="the Modbus controller that the loops belong to")
    ] = "",
    is_json: Json = False,
) -> None:
    """Draft loop sections (TOML) from a CSV list of Modbus tags."""
    raise typer.Exit(listing.import_tags(Voice(is_json=is_json), file, controller))
