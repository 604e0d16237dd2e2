"""A journal explains its run: the same events, read back from their code, give the same commands."""

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from autotune.errors import JournalError
from autotune.experiment.commands import Command, HandBack
from autotune.experiment.events import AbortAsked, HandBackEnded, HandBackResult, ReadFailed, Started, Written
from autotune.experiment.phases import Phase
from autotune.service.journal import MemoryJournal
from autotune.service.journal_reading import JournalLine, read_journal, read_journal_text
from autotune.service.journal_replay import replay
from tests.experiment.bench import Bench, bench, plan_for, three_lags

JOURNALS = sorted((Path(__file__).parents[1] / "journals").glob("*.jsonl"))


def _journalled(run: Bench) -> tuple[JournalLine, ...]:
    journal = MemoryJournal()
    journal.record("plan", run.experiment.plan, t_s=0.0, durable=True)
    for event in run.events:
        journal.record("event", event, t_s=event.t_s)
    return read_journal_text("".join(f"{line}\n" for line in journal.lines)).lines


def _ran_to_its_end() -> Bench:
    run = bench(plan_for(), three_lags(), latency_s=0.02)
    run.run()
    assert run.experiment.phase is Phase.COMPLETE
    return run


def _was_aborted() -> Bench:
    run = bench(plan_for(has_guard=True), three_lags())
    run.run(until=lambda experiment: experiment.phase is Phase.TESTING)
    run.feed(ReadFailed(run.t_s, "no answer"))
    run.feed(AbortAsked(run.t_s, "R. Lind"))
    assert run.experiment.phase.is_terminal
    return run


@pytest.mark.parametrize("ran", [_ran_to_its_end, _was_aborted])
def test_replaying_a_journal_gives_the_same_commands_and_the_same_end(ran: Callable[[], Bench]) -> None:
    run = ran()
    experiment, commands = replay(_journalled(run))
    assert commands == tuple(command for _, command in run.issued)
    assert experiment == run.experiment


def test_a_journal_cut_short_replays_to_where_it_was_cut() -> None:
    run = _ran_to_its_end()
    lines = _journalled(run)
    experiment, commands = replay(lines[: len(lines) // 2])
    assert experiment.t_s == lines[len(lines) // 2 - 1].t_s
    assert commands == tuple(command for _, command in run.issued)[: len(commands)]


def test_what_a_later_process_recorded_is_not_replayed() -> None:
    run = _was_aborted()
    lines = _journalled(run)
    later = HandBackEnded(0.1, HandBackResult.TAKEN, "found in other hands")  # on another clock
    n, utc = len(lines), lines[-1].utc
    resumed = (JournalLine(n + 1, utc, run.t_s, "resumed", None), JournalLine(n + 2, utc, 0.1, "event", later))
    assert replay([*lines, *resumed]) == replay(lines)


def test_a_journal_without_its_plan_can_not_be_replayed() -> None:
    started = JournalLine(1, read_journal(JOURNALS[0]).lines[0].utc, 0.0, "event", Started(0.0))
    with pytest.raises(JournalError, match="line 1: an event before the plan"):
        replay([started])
    with pytest.raises(JournalError, match="no plan"):
        replay([])


@pytest.mark.parametrize("file", JOURNALS, ids=lambda file: file.stem)
def test_every_kept_journal_replays_to_its_recorded_writes_and_end(file: Path) -> None:
    lines = read_journal(file).lines
    experiment, commands = replay(lines)
    remaining: Iterator[Command] = (command for command in commands if not isinstance(command, HandBack))
    performed = [line.payload.command for line in lines if isinstance(line.payload, Written)]
    assert performed
    for command in performed:  # in the same order; what a change of phase made void was never performed
        assert command in remaining, f"the machine no longer gives {command}"
    assert [experiment.phase.value] == [line.payload for line in lines if line.kind == "end"]
