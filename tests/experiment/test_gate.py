"""The last check before every write (S1, S3)."""

from dataclasses import replace
from math import inf, nan, nextafter
from typing import Any

import pytest

from autotune.experiment.commands import (
    ClaimLoop,
    Command,
    DriveOutput,
    HandBack,
    ReleaseLoop,
    SetMode,
    SetSetpoint,
)
from autotune.experiment.gate import gate, gate_hand_back
from autotune.experiment.history import History
from autotune.experiment.machine import begin
from autotune.experiment.phases import Phase
from autotune.experiment.recording import Move, Recording
from autotune.experiment.state import Experiment
from autotune.loop.mode import LoopMode
from tests.experiment.bench import LIMITS, TOKEN, plan_for
from tests.experiment.readings import found, held

EVERY_COMMAND: tuple[Command, ...] = (
    ClaimLoop(TOKEN, 1),
    SetMode(LoopMode.MAN),
    DriveOutput(50.0, TOKEN, 1, 1),
    SetSetpoint(40.0),
    ReleaseLoop(),
    HandBack("because"),
)


def experiment(phase: Phase, **limits: Any) -> Experiment:
    plan = plan_for(replace(LIMITS, **limits))
    return replace(begin(plan), phase=phase, as_found=found(mode=LoopMode.AUTO), held=held())


def code(phase: Phase, command: Command) -> str | None:
    refusal = gate(experiment(phase), command)
    return None if refusal is None else refusal.code


@pytest.mark.parametrize(
    ("phase", "passing"),
    [
        (Phase.IDLE, ()),
        (Phase.CHECKING, ()),
        (Phase.BASELINE, (ClaimLoop, SetMode, DriveOutput)),
        (Phase.TESTING, (ClaimLoop, SetMode, DriveOutput)),
        (Phase.RESTORING, (HandBack,)),
        (Phase.COMPLETE, ()),
        (Phase.ABORTED, ()),
        (Phase.RELEASED, (ReleaseLoop,)),
        (Phase.STRANDED, ()),
    ],
)
def test_each_phase_lets_only_its_own_commands_pass(phase: Phase, passing: tuple[type, ...]) -> None:
    assert tuple(type(command) for command in EVERY_COMMAND if code(phase, command) is None) == passing


def test_nothing_passes_before_the_loop_was_found() -> None:
    refusal = gate(replace(experiment(Phase.TESTING), as_found=None), DriveOutput(50.0, TOKEN, 1, 1))
    assert refusal is not None
    assert refusal.code == "GATE_PHASE"


@pytest.mark.parametrize("op_pct", [60.0, 40.0, 50.0, nextafter(60.0, 0.0)])
def test_an_output_within_the_steps_passes(op_pct: float) -> None:
    assert code(Phase.TESTING, DriveOutput(op_pct, TOKEN, 1, 1)) is None


@pytest.mark.parametrize("op_pct", [nextafter(60.0, 99.0), nextafter(40.0, 0.0), 0.0, 100.0, nan, inf, -inf])
def test_an_output_beyond_the_steps_or_that_is_no_number_is_refused(op_pct: float) -> None:
    assert code(Phase.TESTING, DriveOutput(op_pct, TOKEN, 1, 1)) == "GATE_OUTPUT"


def test_the_clamps_bound_every_output_but_the_one_found() -> None:
    tight = experiment(Phase.TESTING, op_high_pct=45.0)
    assert gate(tight, DriveOutput(50.0, TOKEN, 1, 1)) is None
    assert gate(tight, DriveOutput(50.1, TOKEN, 1, 1)) is not None


def test_the_baseline_is_held_exactly_as_found() -> None:
    assert code(Phase.BASELINE, DriveOutput(50.0, TOKEN, 1, 1)) is None
    assert code(Phase.BASELINE, DriveOutput(50.1, TOKEN, 1, 1)) == "GATE_OUTPUT"


@pytest.mark.parametrize(("op_pct", "expected"), [(55.2, None), (55.3, "GATE_RATE"), (54.7, "GATE_RATE"), (50.0, None)])
def test_no_move_is_faster_than_the_loops_rate_but_the_one_home(op_pct: float, expected: str | None) -> None:
    moves = Recording(moves=History((), (Move(55.0, 1, True),)), last_move=Move(op_pct, 2, True))
    ramp = replace(experiment(Phase.TESTING, op_rate_pct_per_s=2.0), recording=moves)
    refusal = gate(ramp, DriveOutput(op_pct, TOKEN, 1, 2))
    assert (None if refusal is None else refusal.code) == expected


def test_only_our_token_passes() -> None:
    assert code(Phase.BASELINE, ClaimLoop(99, 1)) == "GATE_TOKEN"
    assert code(Phase.TESTING, DriveOutput(50.0, 99, 1, 1)) == "GATE_TOKEN"


def test_a_test_asks_for_no_mode_but_manual_and_writes_no_setpoint() -> None:
    assert code(Phase.BASELINE, SetMode(LoopMode.AUTO)) == "GATE_MODE"
    assert code(Phase.BASELINE, SetSetpoint(40.0)) == "GATE_SETPOINT"


@pytest.mark.parametrize(
    ("command", "expected"),
    [
        (DriveOutput(50.0, TOKEN, 1, 1), None),
        (DriveOutput(50.01, TOKEN, 1, 1), "GATE_OUTPUT"),
        (DriveOutput(nan, TOKEN, 1, 1), "GATE_OUTPUT"),
        (DriveOutput(50.0, 99, 1, 1), "GATE_OUTPUT"),
        (SetMode(LoopMode.AUTO), None),
        (SetMode(LoopMode.MAN), "GATE_MODE"),
        (SetSetpoint(40.0), None),
        (SetSetpoint(41.0), "GATE_SETPOINT"),
        (SetSetpoint(nan), "GATE_SETPOINT"),
        (ClaimLoop(TOKEN, 1), None),
        (ClaimLoop(99, 1), "GATE_TOKEN"),
        (ReleaseLoop(), None),
        (HandBack("again"), "GATE_PHASE"),
    ],
)
def test_a_hand_back_writes_only_what_was_found(command: Command, expected: str | None) -> None:
    refusal = gate_hand_back(found(mode=LoopMode.AUTO), TOKEN, command)
    assert (None if refusal is None else refusal.code) == expected


@pytest.mark.parametrize("phase", list(Phase))
@pytest.mark.parametrize("command", EVERY_COMMAND)
def test_asking_the_gate_twice_gives_the_same_answer(phase: Phase, command: Command) -> None:
    here = experiment(phase)
    assert gate(here, command) == gate(here, command)
