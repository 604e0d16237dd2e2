"""A test bench in virtual time: an exact plant, a small PLC with a guard, and a shell that performs commands.

The plant is solved exactly (matrix exponentials of the augmented system), so no step size enters.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from autotune.experiment.commands import (
    ClaimLoop,
    Command,
    DriveOutput,
    HandBack,
    ReleaseLoop,
    SetMode,
    SetSetpoint,
)
from autotune.experiment.events import Event, HandBackEnded, HandBackResult, SampleArrived, Started, Written
from autotune.experiment.gate import gate, gate_hand_back
from autotune.experiment.hand_back import HandBackDone, hand_back_overdue, next_hand_back_step
from autotune.experiment.machine import begin, step
from autotune.experiment.phases import Phase
from autotune.experiment.plan import ConvergencePlan, RelayPlan, TestPlan
from autotune.experiment.state import Experiment
from autotune.loop.limits import Limits
from autotune.loop.mode import ControlAction, LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, GuardView, Sample, Stamp
from autotune.loop.write import WriteOutcome, WriteReport
from simulator.guard import Guard, GuardInputs, GuardLimits
from simulator.guard import GuardState as PlcGuardState

TOKEN = 4711
Matrix = NDArray[np.float64]


class Plant:
    """x' = A x + B u(t - delay), y = C x + rest; solved exactly between the switches of its delayed input."""

    def __init__(
        self, a: Iterable[Iterable[float]], b: Iterable[float], c: Iterable[float], delay_s: float, op_pct: float
    ) -> None:
        self.a, self.b, self.c = np.array(a, float), np.array(b, float), np.array(c, float)
        self.delay_s, self.centre_pct = delay_s, op_pct
        self.x = np.zeros(len(self.b))
        self.holds: dict[float, tuple[Matrix, Matrix]] = {}
        self.t_s = 0.0
        self.inputs: list[tuple[float, float]] = [(-math.inf, op_pct)]

    def drive(self, t_s: float, op_pct: float) -> None:
        self.inputs.append((t_s, op_pct))

    def pv_at(self, t_s: float) -> float:
        edges = [at + self.delay_s for at, _ in self.inputs if self.t_s < at + self.delay_s < t_s]
        for until_s in (*edges, t_s):
            self._advance(until_s)
        return float(self.c @ self.x)

    def _advance(self, until_s: float) -> None:
        held_s = until_s - self.t_s
        if held_s <= 0.0:
            return
        middle_s = self.t_s + 0.5 * held_s - self.delay_s
        op_pct = next(op for at, op in reversed(self.inputs) if at <= middle_s)
        phi, gamma = self._hold(round(held_s, 12))
        self.x = phi @ self.x + gamma * (op_pct - self.centre_pct)
        self.t_s = until_s

    def _hold(self, held_s: float) -> tuple[Matrix, Matrix]:
        if held_s not in self.holds:
            size = len(self.b)
            block = np.zeros((size + 1, size + 1))
            block[:size, :size], block[:size, size] = self.a, self.b
            whole = expm(block * held_s)
            self.holds[held_s] = (whole[:size, :size], whole[:size, size])
        return self.holds[held_s]


def first_order(gain: float, lag_s: float, delay_s: float, op_pct: float = 50.0) -> Plant:
    """gain e^(-delay s) / (lag s + 1)."""
    return Plant([[-1.0 / lag_s]], [gain / lag_s], [1.0], delay_s, op_pct)


def three_lags(gain: float = 1.0, op_pct: float = 50.0, delay_s: float = 0.0) -> Plant:
    """gain e^(-delay s) / (s + 1)^3."""
    return Plant([[-1, 0, 0], [1, -1, 0], [0, 1, -1]], [gain, 0, 0], [0, 0, 1], delay_s, op_pct)


MODE_CODES = {LoopMode.MAN: 0, LoopMode.AUTO: 1}
GUARD_STATES = {
    PlcGuardState.IDLE: GuardState.IDLE,
    PlcGuardState.ARMED: GuardState.ARMED,
    PlcGuardState.GAVE_BACK: GuardState.GAVE_BACK,
}


@dataclass
class Plc:
    """The block, the mailbox and the soft plant's own guard, scanned at every read and after every write.

    ``mailbox_sequence`` is what an earlier test left; ``is_guard_stopped`` stops the guard's scan, as a PLC in stop.
    """

    plant: Plant
    rest_pct: float = 40.0
    mode: LoopMode = LoopMode.MAN
    sp_pct: float = 40.0
    op_pct: float = 50.0
    has_guard: bool = False
    sp_tracks: bool = False
    is_enabled: bool = True
    is_stop_pressed: bool = False
    is_guard_stopped: bool = False
    is_pv_failed: bool = False
    mailbox_sequence: int = 0
    boot_count: int | None = None
    has_clock: bool = False
    clock_from_ms: int = 0
    noise: Callable[[float], float] = lambda t_s: 0.0
    change: Callable[[Sample], Sample] = lambda sample: sample
    writes: list[tuple[float, Command]] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.guard = Guard(GuardLimits(0.0, 100.0, -1e9, 1e9))
        self.request, self.heartbeat, self.op_request_pct = 0, 0, 0.0
        self._scan(0.0, 0.0, is_enable_pressed=False)
        self._scan(0.0, 0.0, is_enable_pressed=self.is_enabled)

    def clock_ms(self, t_s: float) -> int:
        return (self.clock_from_ms + round(1000.0 * t_s)) % 2**32

    def _scan(self, t_s: float, pv_pct: float, *, is_enable_pressed: bool = False) -> None:
        if self.is_guard_stopped:
            return
        given = self.guard.scan(
            GuardInputs(
                clock_ms=self.clock_ms(t_s),
                is_enable_pressed=is_enable_pressed,
                is_stop_pressed=self.is_stop_pressed,
                holder_request=self.request,
                heartbeat=self.heartbeat,
                sequence=self.mailbox_sequence,
                op_request_pct=self.op_request_pct,
                pv_eu=pv_pct,
                is_pv_failed=self.is_pv_failed,
                op_pct=self.op_pct,
                sp_eu=self.sp_pct,
                mode=MODE_CODES.get(self.mode, 9),
            )
        )
        if given.op_pct is not None:
            self.move(t_s, given.op_pct)
        if given.sp_eu is not None:
            self.sp_pct = given.sp_eu
        if given.mode is not None:
            self.mode = LoopMode.MAN if given.mode == MODE_CODES[LoopMode.MAN] else LoopMode.AUTO

    def read(self, t_s: float) -> Sample:
        pv_pct = self.rest_pct + self.plant.pv_at(t_s) + self.noise(t_s)
        if self.sp_tracks and self.mode is LoopMode.MAN:
            self.sp_pct = pv_pct
        self._scan(t_s, pv_pct)
        guard = GuardView(
            state=GUARD_STATES[self.guard.state],
            holder=self.guard.holder,
            heartbeat_echo=self.guard.heartbeat_echo,
            is_enabled=self.guard.is_enabled,
            is_stop_pressed=self.is_stop_pressed,
            op_effect_count=self.guard.op_effect_count,
            op_effect_ms=self.guard.op_effect_ms,
        )
        return self.change(
            Sample(
                t_s=t_s,
                taken=Stamp.at(t_s),
                pv_pct=None if self.is_pv_failed else pv_pct,
                pv_quality=Quality.BAD if self.is_pv_failed else Quality.GOOD,
                sp_pct=self.sp_pct,
                op_pct=self.op_pct,
                op_quality=Quality.GOOD,
                mode=self.mode,
                guard=guard if self.has_guard else None,
                plc_clock_ms=self.clock_ms(t_s) if self.has_clock else None,
                boot_count=self.boot_count,
            )
        )

    def write(self, t_s: float, command: Command) -> None:
        self.writes.append((t_s, command))
        match command:
            case ClaimLoop():
                self.mailbox_sequence = command.sequence
                self.request, self.heartbeat = command.token, command.heartbeat
            case DriveOutput() if self.has_guard:
                self.request, self.heartbeat = command.token, command.heartbeat
                self.op_request_pct, self.mailbox_sequence = command.op_pct, command.sequence
            case DriveOutput():
                self.move(t_s, command.op_pct)
            case SetMode():
                self.mode = command.mode
            case SetSetpoint():
                self.sp_pct = command.sp_pct
            case ReleaseLoop():
                self.request = 0
            case HandBack():
                raise AssertionError("the shell performs a hand-back")
        self._scan(t_s, self.rest_pct)

    def move(self, t_s: float, op_pct: float) -> None:
        """The block's output, by whoever may move it."""
        self.op_pct = op_pct
        self.plant.drive(t_s, op_pct)


Outcome = Callable[[float, Command], WriteOutcome]


@dataclass
class Bench:
    """The shell in virtual time: reads on a grid, steps, gates, writes after ``latency_s`` and reports."""

    plc: Plc
    experiment: Experiment
    latency_s: float = 0.0
    outcome: Outcome = lambda t_s, command: WriteOutcome.APPLIED
    t_s: float = 0.0
    events: list[Event] = field(default_factory=list)
    issued: list[tuple[Phase, Command]] = field(default_factory=list)

    def feed(self, event: Event) -> None:
        self.events.append(event)
        self.experiment, commands = step(self.experiment, event)
        for command in commands:
            assert gate(self.experiment, command) is None
            self.issued.append((self.experiment.phase, command))
            if isinstance(command, HandBack):
                self._hand_back()
            else:
                self._perform(command)

    def _perform(self, command: Command) -> None:
        at_s = self.t_s + self.latency_s
        outcome = self.outcome(at_s, command)
        if outcome is not WriteOutcome.REFUSED:
            self.plc.write(at_s, command)
        self.feed(Written(self.t_s, command, WriteReport(outcome, Stamp(self.t_s, at_s))))

    def _hand_back(self) -> None:
        plan, held = self.experiment.plan, self.experiment.held
        as_found = self.experiment.as_found
        assert as_found is not None
        done = hand_back_overdue(as_found, "not verified in time")
        until_s = self.t_s + plan.hand_back_within_s
        while self.t_s < until_s:
            self.t_s += plan.scan_s
            answer = next_hand_back_step(plan, as_found, held, self.plc.read(self.t_s))
            if isinstance(answer, HandBackDone):
                done = answer
                break
            held = answer.held
            for command in answer.commands:
                assert gate_hand_back(as_found, plan.token, command) is None
                self.plc.write(self.t_s, command)
        self.feed(HandBackEnded(self.t_s, done.result, done.detail))

    def scan(self) -> None:
        self.feed(SampleArrived(self.t_s, self.plc.read(self.t_s)))
        self.t_s += self.experiment.plan.scan_s

    def run(self, at_most_s: float = 4000.0, until: Callable[[Experiment], bool] = lambda e: e.is_over) -> Experiment:
        if self.experiment.phase is Phase.IDLE:
            self.feed(Started(self.t_s))
        while not until(self.experiment) and self.t_s < at_most_s:
            self.scan()
        return self.experiment


LIMITS = Limits(
    step_up_pct=10.0,
    step_down_pct=10.0,
    op_low_pct=10.0,
    op_high_pct=90.0,
    pv_low_pct=5.0,
    pv_high_pct=95.0,
    op_move_s=0.5,
)


def plan_for(limits: Limits = LIMITS, relay: RelayPlan | None = None, **changes: Any) -> TestPlan:
    """A plan without guard, in seconds of a bench."""
    plan = TestPlan(
        loop="TIC-204",
        action=ControlAction.REVERSE,
        limits=limits,
        relay=relay or RelayPlan(step_up_pct=10.0, step_down_pct=10.0, hysteresis_pct=0.5),
        convergence=ConvergencePlan(),
        scan_s=0.1,
        plc_scan_s=0.01,
        has_guard=False,
        token=TOKEN,
        accepts_no_guard=True,
        look_around_s=1.0,
        baseline_s=2.0,
    )
    return replace(plan, **changes)


def bench(plan: TestPlan, plant: Plant | None = None, latency_s: float = 0.0, **plc: Any) -> Bench:
    """A bench with the plan's PLC, at rest."""
    controller = Plc(plant or three_lags(), has_guard=plan.has_guard, **plc)
    return Bench(controller, begin(plan), latency_s)


def result_of(experiment: Experiment) -> HandBackResult | None:
    """How the hand-back of an experiment ended."""
    return None if experiment.hand_back is None else experiment.hand_back.result
