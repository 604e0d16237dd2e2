"""Every command tells what it does, and says in one line what is wrong with what it was given."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import pytest
import typer
from typer.testing import CliRunner

from autotune.cli import exit_code_of
from autotune.cli.app import app
from autotune.cli.exit_codes import ExitCode
from autotune.errors import AutotuneError
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
    code: ExitCode
    words: Sequence[str]
    changes: Sequence[Change] = ()


SWAPPED: Sequence[Change] = (("pv_low_eu = 0.0\npv_high_eu = 100.0", "pv_low_eu = 100.0\npv_high_eu = 0.0"),)
NOWHERE = 1
"""A port on which no controller answers."""

WRONG = {
    "a file that is not there": Wrong(("check", "no-such.toml"), ExitCode.USAGE, ("no-such.toml",)),
    "an unknown key": Wrong(
        ("test", "FILE", LOOP),
        ExitCode.USAGE,
        ("bench.toml", "loop[TIC-1].hand_back_withn_s", "unknown key", "hand_back_within_s"),
        (("hand_back_within_s", "hand_back_withn_s"),),
    ),
    "an unknown loop": Wrong(
        ("test", "FILE", "TIC-9"), ExitCode.USAGE, ("no loop is called 'TIC-9'", "use one of TIC-1")
    ),
    "no sheet yet": Wrong(("propose", "FILE", "last"), ExitCode.USAGE, ("sheets.sqlite",)),
    "a word that is no command": Wrong(("tset",), ExitCode.USAGE, ("No such command 'tset'",)),
}


@pytest.mark.parametrize("wrong", WRONG.values(), ids=WRONG)
def test_what_is_wrong_with_the_given_is_said_with_its_exit_code(wrong: Wrong, tmp_path: Path) -> None:
    file = write_bench(tmp_path, NOWHERE, wrong.changes)
    ended = CliRunner().invoke(app, [str(file) if word == "FILE" else word for word in wrong.arguments])
    fault = ended.exception
    code = exit_code_of(fault) if isinstance(fault, AutotuneError) else ended.exit_code
    said = str(fault) if isinstance(fault, AutotuneError) else ended.output
    assert code == wrong.code
    for words in wrong.words:
        assert words in said


@dataclass(frozen=True, slots=True)
class Trial:
    """A mistake in the file and a controller that is not there, as whole commands."""

    swapped: Ran
    checked: Ran


async def commands_tried(folder: Path) -> Trial:
    swapped = await run("check", write_bench(folder / "swapped", NOWHERE, SWAPPED))
    checked = await run("check", write_bench(folder / "nowhere", NOWHERE), "--json")
    return Trial(swapped, checked)


SCENARIOS: dict[str, Scenario[Trial]] = {"commands": commands_tried}


@pytest.fixture(scope="module")
def trial(together: Together) -> Trial:
    outcomes: Outcomes[Trial] = together.of(Path(__file__).stem, SCENARIOS)
    return outcomes.of("commands")


def test_a_mistake_in_the_file_is_one_line_with_file_key_and_remedy(trial: Trial) -> None:
    assert trial.swapped.code == 2
    assert trial.swapped.out == ""
    (line,) = trial.swapped.err.splitlines()
    for words in ("bench.toml", "loop[TIC-1].span.pv_low_eu", "is not below", "swap"):
        assert words in line


def test_a_controller_that_is_not_there_is_exit_code_three_and_no_traceback(trial: Trial) -> None:
    assert trial.checked.code == 3
    (loop,) = trial.checked.answer["loops"]
    assert [finding["code"] for finding in loop["findings"]] == ["LINK"]
    assert "127.0.0.1" in loop["findings"][0]["text"]
    assert "Traceback" not in trial.checked.err
