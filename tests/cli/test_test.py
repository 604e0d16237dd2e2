"""``check``, ``test``, ``propose``, ``write``, ``restore`` and ``sheet`` on the plant in memory, in virtual time."""

import asyncio
import signal
from collections.abc import Callable, Coroutine
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from autotune.cli import check as checking
from autotune.cli import settings as setting
from autotune.cli import sheets
from autotune.cli import test as testing
from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import Voice
from autotune.config.types import LoopConfig
from autotune.errors import SheetError
from autotune.experiment.phases import Phase
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal
from autotune.service.estimator import InlineEstimator
from autotune.service.workplace import Workplace, new_token
from simulator.block import Mode
from tests.cli.bench import RecordingOperator, TerminalVoice, one_object
from tests.fakes.link import FakeLink
from tests.fakes.plant import WITH_GUARD, WITHOUT_GUARD, PlantInMemory
from tests.fakes.virtual_time import run_virtual
from tests.service.bench import at, workplace_at

JSON = Voice(is_json=True)


class Desk:
    """A plant, a workplace and the commands."""

    def __init__(self, folder: Path, loop: LoopConfig = WITH_GUARD, *, finds: bool = False) -> None:
        self.loop = loop
        self.plant = PlantInMemory()
        estimator = InlineEstimator() if finds else None
        self.workplace: Workplace = workplace_at(self.plant, folder, loop, estimator=estimator)
        self.operator = RecordingOperator()

    def do(self, command: Coroutine[Any, Any, ExitCode], on_pass: Callable[[int], None] | None = None) -> ExitCode:
        async def main() -> ExitCode:
            await asyncio.sleep(1.0)
            return await command

        return run_virtual(main(), within_s=300.0, on_pass=on_pass)

    def test(self, voice: Voice = JSON, on_pass: Callable[[int], None] | None = None) -> ExitCode:
        return self.do(testing.test(voice, self.workplace, self.loop, self.operator), on_pass)


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    return Desk(tmp_path)


@pytest.fixture(scope="module")
def tested(tmp_path_factory: pytest.TempPathFactory) -> Desk:
    """A desk after a whole test with its proposals."""
    desk = Desk(tmp_path_factory.mktemp("desk"), finds=True)
    assert desk.test(Voice()) is ExitCode.DONE
    return desk


def again(tested: Desk) -> Desk:
    """The same store and loop before a fresh plant, since each virtual time begins at zero."""
    desk = Desk(tested.workplace.data_dir, tested.loop)
    desk.workplace = replace(desk.workplace, store=tested.workplace.store, new_token=new_token)
    return desk


@pytest.mark.parametrize("loop", [WITH_GUARD, WITHOUT_GUARD], ids=["with a guard", "without a guard"])
def test_a_permitted_test_runs_and_answers_with_one_object(
    loop: LoopConfig, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    desk = Desk(tmp_path, loop, finds=True)
    assert desk.test() is ExitCode.DONE
    answer = one_object(capsys)
    assert answer["outcome"] == "COMPLETE"
    assert answer["ultimate_gain_low"] <= answer["ultimate_gain"] <= answer["ultimate_gain_high"]
    assert answer["sheet"] == desk.workplace.store.list()[0].sheet_id
    assert any("NO_GUARD" in caution for caution in desk.operator.shown) is not loop.has_guard
    sheet = desk.workplace.store.get(answer["sheet"]).sheet
    assert [said.text for said in sheet.cautions_accepted] == desk.operator.shown[:-1]


def test_a_person_reads_the_course_the_findings_and_the_proposals(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert Desk(tmp_path, finds=True).test(Voice()) is ExitCode.DONE
    out = capsys.readouterr().out
    for words in ("The output stands at 45.0 %", "RESTORING", "COMPLETE. Seen enough", "ultimate gain", "Proposals"):
        assert words in out


def test_without_permission_nothing_is_written(desk: Desk, capsys: pytest.CaptureFixture[str]) -> None:
    desk.operator.permission = None
    assert desk.test() is ExitCode.NO
    assert one_object(capsys)["outcome"] == "NOT_ALLOWED"
    assert all(link.requests("write") == [] for link in desk.plant.links)


def test_a_loop_that_is_not_fit_is_refused_before_anybody_is_asked(
    desk: Desk, capsys: pytest.CaptureFixture[str]
) -> None:
    desk.plant.loop.is_stop_pressed = True
    assert desk.test() is ExitCode.NO
    assert one_object(capsys)["outcome"] == "REFUSED"
    assert desk.operator.shown == []


def _unreachable(desk: Desk) -> Desk:
    opened = desk.workplace.open_link

    def open_link(loop: LoopConfig) -> FakeLink:
        link = opened(loop)
        assert isinstance(link, FakeLink)
        link.is_reachable = False
        return link

    desk.workplace = replace(desk.workplace, open_link=open_link)
    return desk


def test_a_controller_that_can_not_be_reached_ends_with_the_links_code(
    desk: Desk, capsys: pytest.CaptureFixture[str]
) -> None:
    assert _unreachable(desk).test() is ExitCode.LINK
    assert one_object(capsys)["refusal"]["code"] == "LINK"


@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM", "SIGHUP"])
def test_a_signal_hands_the_loop_back(name: str, desk: Desk, capsys: pytest.CaptureFixture[str]) -> None:
    number = getattr(signal, name)

    def on_pass(_number: int) -> None:
        loop: Any = asyncio.get_event_loop()
        if desk.plant.mode is LoopMode.MAN and number in loop.signal_handlers:
            loop.signal_handlers[number]()

    assert desk.test(on_pass=on_pass) is ExitCode.NO
    answer = one_object(capsys)
    assert (answer["outcome"], answer["code"]) == ("ABORTED", "OPERATOR_ABORT")
    assert name in answer["text"]
    assert desk.plant.mode is LoopMode.AUTO


def test_a_loop_that_somebody_takes_ends_with_no(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    desk = Desk(tmp_path, WITHOUT_GUARD)
    at(desk.plant, 6.5, lambda: setattr(desk.plant.loop.block, "mode", Mode.AUTO))
    assert desk.test() is ExitCode.NO
    assert one_object(capsys)["outcome"] == "RELEASED"


def test_a_stranded_loop_ends_with_four_and_says_what_to_enter(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    desk = Desk(tmp_path, WITHOUT_GUARD)
    at(desk.plant, 6.5, desk.plant.plc.restart)
    assert desk.test() is ExitCode.STRANDED
    answer = one_object(capsys)
    assert answer["outcome"] == "STRANDED"
    assert "enter by hand" in answer["text"]


def test_a_cancelled_command_hands_the_loop_back_and_keeps_the_sheet(desk: Desk) -> None:
    cancelled: list[int] = []

    def on_pass(number: int) -> None:
        if desk.plant.mode is LoopMode.MAN and not cancelled:
            cancelled.append(number)
            for task in asyncio.all_tasks():
                if "Desk.do" in str(task.get_coro()):
                    task.cancel()

    with pytest.raises(asyncio.CancelledError):
        desk.test(on_pass=on_pass)
    assert desk.plant.mode is LoopMode.AUTO
    assert [line.ended for line in desk.workplace.store.list()] == ["ABORTED"]


class FailingVoice(TerminalVoice):
    """A terminal that goes away in the middle of a test."""

    def say(self, text: str = "", style: str | None = None) -> None:
        if "TESTING" in text:
            raise BrokenPipeError("the terminal is gone")
        super().say(text, style)


def test_a_picture_that_fails_ends_the_test_with_the_loop_handed_back(desk: Desk) -> None:
    voice = FailingVoice(80)
    voice.is_json = True  # plain lines
    with pytest.raises(BrokenPipeError):
        desk.test(voice)
    assert desk.plant.mode is LoopMode.AUTO
    (line,) = desk.workplace.store.list()
    assert (line.ended, line.code) == ("ABORTED", "OPERATOR_ABORT")


@pytest.mark.parametrize("width", [80, 110])
def test_a_whole_test_on_a_screen_draws_every_phase(width: int, desk: Desk) -> None:
    voice = TerminalVoice(width)
    assert desk.test(voice) is ExitCode.DONE
    drawn = voice.screen.getvalue()
    for phase in (Phase.CHECKING, Phase.BASELINE, Phase.TESTING, Phase.COMPLETE):
        assert phase.value in drawn
    assert any(0x2800 < ord(cell) <= 0x28FF for cell in drawn)


@pytest.mark.parametrize("loop", [WITH_GUARD, WITHOUT_GUARD], ids=["with a guard", "without a guard"])
def test_a_dry_run_tells_every_tag_and_writes_nothing(
    loop: LoopConfig, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    desk = Desk(tmp_path, replace(loop, proves_writable=True, block=replace(loop.block, sp_tracks_in_manual=True)))
    assert desk.do(testing.dry_run(Voice(), desk.workplace, desk.loop)) is ExitCode.DONE
    out = capsys.readouterr().out
    assert "It never leaves 35.0 .. 55.0 %" in out
    assert ("op_request" in out) is loop.has_guard
    for words in ("mode: to MAN before", "sp: back to the value", "gain, integral, derivative: before all else"):
        assert words in out
    assert all(link.requests("write") == [] for link in desk.plant.links)


def test_a_dry_run_of_a_loop_that_can_not_be_read_tells_no_extremes(desk: Desk) -> None:
    assert desk.do(testing.dry_run(Voice(), _unreachable(desk).workplace, desk.loop)) is ExitCode.NO


def test_a_check_answers_for_each_loop(desk: Desk, capsys: pytest.CaptureFixture[str]) -> None:
    look = checking.check(JSON, desk.workplace, (desk.loop, desk.loop), 1.0)
    assert desk.do(look) is ExitCode.DONE
    answer = one_object(capsys)
    assert [one["loop"] for one in answer["loops"]] == ["TIC-204", "TIC-204"]
    assert answer["loops"][0]["pv_eu"] == pytest.approx(75.0, abs=0.5)


def test_a_check_of_a_stopped_loop_says_no_and_of_an_absent_one_says_link(
    desk: Desk, capsys: pytest.CaptureFixture[str]
) -> None:
    desk.plant.loop.is_stop_pressed = True
    assert desk.do(checking.check(Voice(), desk.workplace, (desk.loop,), 1.0)) is ExitCode.NO
    assert "not fit to test" in capsys.readouterr().out
    assert desk.do(checking.check(Voice(), _unreachable(desk).workplace, (desk.loop,), 1.0)) is ExitCode.LINK


def test_proposals_are_shown_side_by_side(tested: Desk, capsys: pytest.CaptureFixture[str]) -> None:
    assert setting.propose(JSON, tested.workplace, "last") is ExitCode.DONE
    answer = one_object(capsys)
    assert answer["as_found"] == {"gain": 0.375, "integral": 1.5, "derivative": 0.0}
    assert {"tyreus-luyben-pi"} <= {one["name"] for one in answer["proposals"]}
    assert setting.propose(Voice(), tested.workplace, "last") is ExitCode.DONE
    assert "as found" in capsys.readouterr().out


def test_a_sheet_without_proposals_says_no(desk: Desk, capsys: pytest.CaptureFixture[str]) -> None:
    assert desk.test(Voice()) is ExitCode.DONE
    capsys.readouterr()
    assert setting.propose(JSON, desk.workplace, "last") is ExitCode.NO
    assert all(one["settings"] is None for one in one_object(capsys)["proposals"])


def _write(desk: Desk, on_pass: Callable[[int], None] | None = None, voice: Voice = JSON) -> ExitCode:
    command = setting.write(voice, desk.workplace, "last", "tyreus-luyben-pi", desk.operator)
    return desk.do(command, on_pass)


def _restore(desk: Desk, voice: Voice = JSON) -> ExitCode:
    return desk.do(setting.restore(voice, desk.workplace, desk.loop, None, desk.operator))


def test_a_typed_digest_writes_and_a_restore_puts_the_old_settings_back(
    tested: Desk, capsys: pytest.CaptureFixture[str]
) -> None:
    desk = again(tested)
    assert _write(desk) is ExitCode.DONE
    answer = one_object(capsys)
    assert (answer["outcome"], answer["read_back_equal"]) == ("WRITTEN", True)
    changed = desk.plant.loop.block.settings
    assert changed.gain != 0.375
    later = again(tested)
    later.plant.loop.block.settings = changed
    assert _restore(later) is ExitCode.DONE
    assert one_object(capsys)["outcome"] == "WRITTEN"
    assert later.plant.loop.block.settings.gain == 0.375


def test_a_restore_of_what_is_held_is_done_already(tested: Desk, capsys: pytest.CaptureFixture[str]) -> None:
    desk = again(tested)
    assert _restore(desk) is ExitCode.DONE
    assert one_object(capsys)["outcome"] == "NOTHING_TO_WRITE"
    assert desk.operator.shown == []


@pytest.mark.parametrize(
    ("digest", "code"),
    [
        (lambda _shown: "", "DIGEST_WRONG"),
        (lambda _shown: Refusal("NOT_AT_A_TERMINAL", "no terminal", "use one"), "NOT_AT_A_TERMINAL"),
    ],
)
def test_without_the_digest_nothing_is_written(
    digest: Callable[[str], str | Refusal], code: str, tested: Desk, capsys: pytest.CaptureFixture[str]
) -> None:
    desk = again(tested)
    desk.operator.digest = digest
    assert _write(desk) is ExitCode.NO
    answer = one_object(capsys)
    assert answer["outcome"] == "REFUSED"
    assert code in answer["text"]
    assert all(link.requests("write") == [] for link in desk.plant.links)


def test_json_never_carries_the_digest(tested: Desk, capsys: pytest.CaptureFixture[str]) -> None:
    desk = again(tested)
    desk.operator.digest = lambda _shown: ""
    _write(desk)
    captured = capsys.readouterr()
    digest = desk.operator.shown[-1]
    assert len(digest) == 9
    assert digest not in captured.out
    assert digest.replace("-", "") not in captured.out


def test_a_signal_during_a_write_puts_the_old_settings_back(tested: Desk, capsys: pytest.CaptureFixture[str]) -> None:
    desk = again(tested)

    def on_pass(_number: int) -> None:
        loop: Any = asyncio.get_event_loop()
        if desk.plant.mode is LoopMode.MAN and signal.SIGINT in loop.signal_handlers:
            loop.signal_handlers[signal.SIGINT]()

    assert _write(desk, on_pass) is ExitCode.NO
    assert desk.plant.loop.block.settings.gain == 0.375
    assert desk.plant.mode is LoopMode.AUTO
    assert "SIGINT" in one_object(capsys)["text"]


def test_a_write_that_is_not_heard_of_again_ends_with_four(tested: Desk, capsys: pytest.CaptureFixture[str]) -> None:
    desk = again(tested)

    def on_pass(_number: int) -> None:
        for link in desk.plant.links:
            if len(link.requests("write")) == 2:
                link.is_reachable = False

    assert _write(desk, on_pass, Voice()) is ExitCode.STRANDED
    assert "GO TO THE PANEL NOW" in capsys.readouterr().out


def test_sheets_are_listed_shown_exported_and_verified(
    tested: Desk, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    workplace = tested.workplace
    assert sheets.list_sheets(JSON, workplace, None) is ExitCode.DONE
    (line,) = one_object(capsys)["sheets"]
    assert (line["loop"], line["outcome"], line["code"]) == ("TIC-204", "COMPLETE", None)
    assert sheets.list_sheets(Voice(), workplace, "TIC-204") is ExitCode.DONE
    assert line["sheet"] in capsys.readouterr().out
    assert sheets.list_sheets(Voice(), workplace, "FIC-101") is ExitCode.DONE
    assert "no sheets yet" in capsys.readouterr().out
    assert sheets.show(Voice(), workplace, "last") is ExitCode.DONE
    page = capsys.readouterr().out
    assert line["sheet"] in page
    assert "permit 77" in page
    chosen = sheets.chosen_sheets(workplace, ["last", line["sheet"]], is_all=False)
    assert sheets.export(Voice(), chosen, tmp_path / "out") is ExitCode.DONE
    assert sorted(file.name for file in (tmp_path / "out").iterdir()) == sorted(
        f"{line['sheet']}{end}" for end in ("-samples.csv", "-writes.csv", ".json")
    )
    with pytest.raises(SheetError, match="choose another folder"):
        sheets.export(Voice(), chosen, tmp_path / "out")
    capsys.readouterr()
    assert sheets.verify(JSON, workplace, None) is ExitCode.DONE
    told = one_object(capsys)
    assert (told["intact"], told["damage"]) == (True, [])
    assert sheets.verify(Voice(), workplace, told["head_hash"]) is ExitCode.DONE
    assert "every sheet is as it was written" in capsys.readouterr().out
    assert sheets.verify(JSON, workplace, "f" * 64) is ExitCode.NO
    assert one_object(capsys)["intact"] is False


def test_the_last_of_no_sheets_is_told(desk: Desk) -> None:
    with pytest.raises(SheetError, match="no sheet is kept there yet"):
        sheets.show(Voice(), desk.workplace, "last")
    with pytest.raises(SheetError, match="no sheet to export"):
        sheets.chosen_sheets(desk.workplace, (), is_all=True)
