"""A linear process, exact between the changes of its input.

    G(s) = gain (1 + zero_s s) e^(-dead_time_s s) / (prod(1 + lag s) (q0 s^2 + q1 s + 1) [s])

The input is piecewise constant, so the state moves by a matrix exponential from one change to
the next and nothing depends on a time grid.  The dead time is a queue of stamped changes.
"""

from collections import deque
from dataclasses import dataclass
from math import frexp, isfinite, pi
from typing import NamedTuple, Self

import numpy as np
import numpy.typing as npt

Matrix = npt.NDArray[np.float64]

STEPS_KEPT = 1024
"""How many matrix exponentials one process remembers; a PLC scan in whole milliseconds needs a few."""
TAYLOR_TERMS = 18
"""For a norm of at most 1/2 the first term left out is 0.5^19 / 19! = 2e-23, far below double precision."""


@dataclass(frozen=True, slots=True)
class ProcessSpec:
    """Parameters of G(s): ``gain`` in % of PV span per % of input (per second when ``integrating``).

    ``quadratic`` holds (q0 in s^2, q1 in s).  Raises ``ValueError`` when G(s) is improper, unstable or not finite.
    """

    gain: float
    lags_s: tuple[float, ...] = ()
    dead_time_s: float = 0.0
    zero_s: float | None = None
    quadratic: tuple[float, float] | None = None
    integrating: bool = False

    def __post_init__(self) -> None:
        numbers = (self.gain, *self.lags_s, self.dead_time_s, self.zero_s or 0.0, *(self.quadratic or ()))
        if not all(isfinite(number) for number in numbers):
            raise ValueError("every parameter of a process must be finite")
        if self.dead_time_s < 0.0 or any(lag_s <= 0.0 for lag_s in self.lags_s):
            raise ValueError("lags must be positive and the dead time must not be negative")
        if self.quadratic is not None and not (self.quadratic[0] > 0.0 and self.quadratic[1] >= 0.0):
            raise ValueError("a quadratic needs q0 > 0 and q1 >= 0")
        if self.zero_s is not None and not (self.lags_s or self.quadratic or self.integrating):
            raise ValueError("a zero needs a lag, a quadratic or an integrator beside it")


class _Change(NamedTuple):
    """An input change that has left the valve and is still under way through the dead time."""

    arrival_s: float
    input_pct: float | None = None
    load_pct: float = 0.0
    sine: tuple[float, float] | None = None  # amplitude in %, angular frequency in rad/s


class Process:
    """One process from a steady state: at rest at ``input_pct`` and ``output_pct`` when created at ``t_s``.

    Inputs are set at or after the present time and in order; ``advance_to`` moves the state.
    """

    def __init__(self, spec: ProcessSpec, *, t_s: float = 0.0, input_pct: float = 0.0, output_pct: float = 0.0) -> None:
        self.spec = spec
        self.t_s = t_s
        self._a, self._b, self._c, self._d = _state_space(spec)
        self._order = len(self._b)
        # [process state, input deviation, sine, cosine]: the last three drive the first
        self._state: Matrix = np.zeros(self._order + 3)
        self._omega_rad_per_s = 0.0
        self._steps: dict[tuple[float, float], Matrix] = {}
        self._under_way: deque[_Change] = deque()
        self._resting_input_pct = input_pct
        self._resting_output_pct = output_pct
        self._input_pct = input_pct
        self._load_pct = 0.0
        self._drift_from_s = t_s
        self._drift_pct_per_s = 0.0

    @property
    def output_pct(self) -> float:
        """The output now, in percent of PV span, before any transmitter."""
        driven = self._state[self._order] + self._state[self._order + 1]
        deviation = float(self._c @ self._state[: self._order]) + self._d * float(driven)
        return self._resting_output_pct + deviation + self._drift_pct_per_s * (self.t_s - self._drift_from_s)

    def set_input(self, t_s: float, input_pct: float) -> None:
        """From ``t_s`` on the process is fed ``input_pct``; it shows after the dead time."""
        self._send(_Change(t_s + self.spec.dead_time_s, input_pct=input_pct), t_s)

    def add_load_step(self, t_s: float, step_pct: float) -> None:
        """From ``t_s`` on ``step_pct`` is added to the input (a disturbance that nobody commands)."""
        self._send(_Change(t_s + self.spec.dead_time_s, load_pct=step_pct), t_s)

    def set_load_sine(self, t_s: float, amplitude_pct: float, period_s: float) -> None:
        """From ``t_s`` on ``amplitude_pct sin(2 pi (t - t_s) / period_s)`` joins the input (one sine at a time)."""
        self._send(_Change(t_s + self.spec.dead_time_s, sine=(amplitude_pct, 2.0 * pi / period_s)), t_s)

    def set_output_drift(self, drift_pct_per_s: float) -> None:
        """From now on the output drifts at this slope, keeping what it has drifted so far."""
        self._resting_output_pct += self._drift_pct_per_s * (self.t_s - self._drift_from_s)
        self._drift_from_s = self.t_s
        self._drift_pct_per_s = drift_pct_per_s

    def advance_to(self, t_s: float) -> None:
        """Move to ``t_s``, changes that arrive just then included.  Raises ``ValueError`` when time runs back."""
        if t_s < self.t_s:
            raise ValueError(f"a process can't go back from {self.t_s} s to {t_s} s")
        while self._under_way and self._under_way[0].arrival_s <= t_s:
            change = self._under_way.popleft()
            self._move(change.arrival_s)
            self._take(change)
        self._move(t_s)

    def copy(self) -> Self:
        """An independent copy at the present instant; it shares only the remembered matrix exponentials."""
        twin = object.__new__(type(self))
        twin.__dict__.update(self.__dict__)
        twin._state = self._state.copy()
        twin._under_way = deque(self._under_way)
        return twin

    def _send(self, change: _Change, t_s: float) -> None:
        if t_s < self.t_s or (self._under_way and change.arrival_s < self._under_way[-1].arrival_s):
            raise ValueError(f"an input change at {t_s} s comes too late: the process is ahead of it")
        self._under_way.append(change)
        self.advance_to(self.t_s)

    def _take(self, change: _Change) -> None:
        if change.input_pct is not None:
            self._input_pct = change.input_pct
        if change.sine is not None:
            amplitude_pct, self._omega_rad_per_s = change.sine
            self._state[self._order + 1 :] = 0.0, amplitude_pct
        self._load_pct += change.load_pct
        self._state[self._order] = self._input_pct + self._load_pct - self._resting_input_pct

    def _move(self, t_s: float) -> None:
        # Rounded so that equal scans find their matrix again; 1e-11 s is far below what any output can show.
        step_s = round(t_s - self.t_s, 11)
        self.t_s = t_s
        if step_s > 0.0:
            self._state = self._step(step_s) @ self._state

    def _step(self, step_s: float) -> Matrix:
        key = (step_s, self._omega_rad_per_s)
        known = self._steps.get(key)
        if known is None:
            if len(self._steps) >= STEPS_KEPT:
                self._steps.clear()
            known = self._steps[key] = matrix_exponential(self._generator() * step_s)
        return known

    def _generator(self) -> Matrix:
        n = self._order
        generator = np.zeros((n + 3, n + 3))
        generator[:n, :n] = self._a
        generator[:n, n] = self._b
        generator[:n, n + 1] = self._b
        generator[n + 1, n + 2] = self._omega_rad_per_s
        generator[n + 2, n + 1] = -self._omega_rad_per_s
        return generator


def matrix_exponential(matrix: Matrix) -> Matrix:
    """e^matrix of a small square matrix, by scaling, a Taylor sum and squaring (Golub & Van Loan, section 9.3).

    Only products: a linear solver that wakes its threads for six rows takes longer than a PLC scan.
    """
    squarings = max(0, frexp(float(np.abs(matrix).sum(axis=0).max(initial=0.0)))[1] + 1)
    scaled = matrix / 2.0**squarings
    unit = np.eye(len(matrix))
    total = unit
    for term in range(TAYLOR_TERMS, 0, -1):
        total = unit + (scaled @ total) / term
    for _ in range(squarings):
        total = total @ total
    return total


def _state_space(spec: ProcessSpec) -> tuple[Matrix, Matrix, Matrix, float]:
    """A, b, c, d of G(s) without its dead time: a chain of first- and second-order stages, well conditioned."""
    stages: list[tuple[Matrix, Matrix, Matrix, float]] = []
    zero_s = spec.zero_s or 0.0
    if spec.quadratic is not None:
        q0_s2, q1_s = spec.quadratic
        a = np.array([[0.0, 1.0], [-1.0 / q0_s2, -q1_s / q0_s2]])
        stages.append((a, np.array([0.0, 1.0 / q0_s2]), np.array([1.0, zero_s]), 0.0))
        zero_s = 0.0
    for lag_s in spec.lags_s:
        stages.append(
            (np.array([[-1.0 / lag_s]]), np.array([1.0 / lag_s]), np.array([1.0 - zero_s / lag_s]), zero_s / lag_s)
        )
        zero_s = 0.0
    if spec.integrating:
        stages.append((np.zeros((1, 1)), np.ones(1), np.ones(1), zero_s))
    a, b, c, d = np.zeros((0, 0)), np.zeros(0), np.zeros(0), 1.0
    for stage_a, stage_b, stage_c, stage_d in stages:
        a = np.block([[a, np.zeros((len(b), len(stage_b)))], [np.outer(stage_b, c), stage_a]])
        b = np.concatenate([b, stage_b * d])
        c = np.concatenate([stage_d * c, stage_c])
        d = stage_d * d
    return a, b, spec.gain * c, spec.gain * d
