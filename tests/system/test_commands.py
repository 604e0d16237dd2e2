"""Every command tells what it does, and says in one line what is wrong with what it was given."""

import socket
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import pytest
import typer
from typer.testing import CliRunner

from autotune.cli.app import app
from tests.system.bench import Change, write_bench
from tests.system.command import Ran, run
from tests.system.plant import LOOP
from tests.system.together import Outcomes, Scenario, Together

pytestmark = pytest.mark.socket


def paths(typed: typer.Typer, path: tuple[str, ...] = ()) -> Iterator[tuple[str, ...]]:
    """Every command and group of commands, as it is typed."""
    yield path
    for command in typed.registered_commands:
        assert command.callback is not None
        yield (*path, command.name or command.callback.__name__)
    for group in typed.registered_groups:
        assert group.name is not None
        assert group.typer_instance is not None
        yield from paths(group.typer_instance, (*path, group.name))


PATHS = list(paths(app))


def test_all_commands_are_found() -> None:
    assert {(), ("test",), ("check",), ("write",), ("restore",), ("rehearse",), ("sheet", "verify")} <= set(PATHS)


@pytest.mark.parametrize("path", PATHS, ids=" ".join)
def test_every_command_has_help(path: tuple[str, ...]) -> None:
    ended = CliRunner().invoke(app, [*path, "--help"], env={"COLUMNS": "200", "TERM": "dumb"})
    assert ended.exit_code == 0
    assert "Usage:" in ended.output
    shown = [line for line in ended.output.splitlines() if line.strip()]
    assert len(shown) > 4


@dataclass(frozen=True)
class Wrong:
    """What is typed, what is wrong in the file, and how the complaint reads."""

    arguments: Sequence[str]
    code: int
    words: Sequence[str]
    changes: Sequence[Change] = ()
    lines: int = 1
    port: int | None = field(default=None)


SWAPPED: Sequence[Change] = (("pv_low_eu = 0.0\npv_high_eu = 100.0", "pv_low_eu = 100.0\npv_high_eu = 0.0"),)

WRONG = {
    "a file that is not there": Wrong(("check", "no-such.toml"), 2, ("no-such.toml",)),
    "a swapped span": Wrong(
        ("check", "FILE", LOOP), 2, ("bench.toml", "span.pv_low_eu", "is not below", "swap"), SWAPPED
    ),
    "an unknown key": Wrong(
        ("test", "FILE", LOOP),
        2,
        ("bench.toml", "loop[TIC-1].hand_back_withn_s", "did you mean hand_back_within_s"),
        (("hand_back_within_s", "hand_back_withn_s"),),
    ),
    "an unknown loop": Wrong(("test", "FILE", "TIC-9"), 2, ("no loop is called 'TIC-9'", "use one of TIC-1")),
    "no sheet yet": Wrong(("propose", "FILE", "last"), 2, ("sheets",)),
    "a word that is no command": Wrong(("tset",), 2, ("No such command 'tset'",), lines=0),
    "a controller that is not there": Wrong(
        ("check", "FILE", LOOP, "--json"), 3, ('"code":"LINK"', "127.0.0.1"), lines=0
    ),
    "a test without its controller": Wrong(
        ("test", "FILE", LOOP), 3, ("LINK", "The test was refused; nothing was written"), lines=0
    ),
}


def unused_port() -> int:
    with socket.create_server(("127.0.0.1", 0)) as taken:
        port: int = taken.getsockname()[1]
    return port


def _scenario(wrong: Wrong) -> Scenario[Ran]:
    async def ran(folder: Path) -> Ran:
        file = write_bench(folder, unused_port(), wrong.changes)
        return await run(*(file if word == "FILE" else word for word in wrong.arguments))

    return ran


SCENARIOS = {name: _scenario(wrong) for name, wrong in WRONG.items()}


@pytest.fixture(scope="module")
def ended(together: Together) -> Outcomes[Ran]:
    return together.of(Path(__file__).stem, SCENARIOS)


@pytest.mark.parametrize("name", WRONG)
def test_what_is_wrong_is_said_with_its_exit_code_and_without_a_traceback(ended: Outcomes[Ran], name: str) -> None:
    ran, wrong = ended.of(name), WRONG[name]
    assert ran.code == wrong.code
    said = ran.out + ran.err
    assert "Traceback" not in said
    for words in wrong.words:
        assert words in said
    if wrong.lines:
        assert len(ran.err.splitlines()) == wrong.lines
