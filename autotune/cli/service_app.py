"""The command lines of ``serve`` and ``person``: arguments in, one function call, an exit code out."""

import asyncio
from pathlib import Path
from typing import Annotated

import typer

from autotune.cli import person as persons
from autotune.cli import serve as serving
from autotune.cli.printing import Voice
from autotune.config.load import load
from autotune.service.console_keeper import PageAddress
from autotune.service.persons import Role
from autotune.service.workplace import Workplace, open_workplace

person_app = typer.Typer(no_args_is_help=True, help="Who may sign in at the page: add, list, remove.")

_Config = Annotated[Path, typer.Argument(metavar="CONFIG", help="the configuration file (TOML)")]
_Name = Annotated[str, typer.Argument(metavar="NAME", help="the person's name, as it will stand on sheets")]
_Json = Annotated[bool, typer.Option("--json", help="answer with one JSON object on standard output")]
_Pem = Annotated[Path | None, typer.Option(metavar="FILE", help="PEM file; together they make the page HTTPS")]


def serve(
    config: _Config,
    host: Annotated[str, typer.Option("--host", help="where the page listens; others than loopback need TLS")] = (
        "127.0.0.1"
    ),
    port: Annotated[int, typer.Option("--port", min=0, max=65535, help="0 takes a free one")] = 8204,
    certificate: _Pem = None,
    key: _Pem = None,
    name: Annotated[
        list[str] | None, typer.Option("--name", help="a host name that browsers use for this machine")
    ] = None,
    watch_only: Annotated[
        bool, typer.Option("--watch-only", help="nothing can be started or written through this service")
    ] = False,
    lock_after: Annotated[
        float, typer.Option("--lock-after", metavar="MINUTES", min=0.1, help="when a screen left alone locks")
    ] = 15.0,
    is_json: _Json = False,
) -> None:
    """Serve the loops of a configuration: the daemon owns tests and writes, and offers the page. Ctrl-C ends it."""
    address = PageAddress(host, port, certificate, key, tuple(name or ()))
    workplace = _workplace(config)
    job = serving.run(Voice(is_json=is_json), workplace, address, is_watch_only=watch_only, lock_after_min=lock_after)
    raise typer.Exit(asyncio.run(job))


@person_app.command("add")
def add(
    config: _Config,
    name: _Name,
    role: Annotated[
        list[Role] | None,
        typer.Option("--role", help="test: start tests; write: change settings; configure: nothing on the page yet"),
    ] = None,
    is_json: _Json = False,
) -> None:
    """Add a person; the secret is asked for. Everybody in the book may watch, and abort a test."""
    raise typer.Exit(persons.add(Voice(is_json=is_json), _workplace(config), name, role or []))


@person_app.command("list")
def list_persons(config: _Config, is_json: _Json = False) -> None:
    """List everybody with their roles."""
    raise typer.Exit(persons.list_persons(Voice(is_json=is_json), _workplace(config)))


@person_app.command("remove")
def remove(config: _Config, name: _Name, is_json: _Json = False) -> None:
    """Take a person out of the book; open screens of theirs are out at once."""
    raise typer.Exit(persons.remove(Voice(is_json=is_json), _workplace(config), name))


def _workplace(config: Path) -> Workplace:
    return open_workplace(load(config), may_create=True)
