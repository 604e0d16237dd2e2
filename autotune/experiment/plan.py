"""What one test is asked to do, frozen before it starts."""

from dataclasses import dataclass
from enum import Enum

from autotune.loop.limits import Limits
from autotune.loop.mode import ControlAction


class FirstMove(Enum):
    """The direction that the output moves first."""

    UP = "up"
    DOWN = "down"


@dataclass(frozen=True, slots=True)
class RelayPlan:
    """The excitation, in percent of span and seconds.

    The output alternates between ``centre + step_up_pct`` and ``centre - step_down_pct``; unequal
    steps make the relay asymmetric, so that the static gain shows.  Both start values never exceed
    the limits' steps.  ``hysteresis_pct`` is a half-width; ``None`` takes ``hysteresis_per_noise``
    times the noise measured at rest, and never less than ``hysteresis_at_least_pct``.
    ``wanted_swing_pct`` is the wanted half peak-to-peak of PV; ``None`` leaves the steps as they are.
    ``blanking_s`` is the shortest time between two switches.
    """

    step_up_pct: float
    step_down_pct: float
    first_move: FirstMove = FirstMove.UP
    hysteresis_pct: float | None = None
    hysteresis_per_noise: float = 2.5
    hysteresis_at_least_pct: float = 0.05
    wanted_swing_pct: float | None = None
    blanking_s: float = 0.0


@dataclass(frozen=True, slots=True)
class ConvergencePlan:
    """When a test has seen enough: ``cycles_to_agree`` successive whole cycles agree in period and
    swing within ``agreement_pct`` percent; the first ``cycles_to_discard`` never count.
    """

    cycles_to_agree: int = 3
    agreement_pct: float = 5.0
    cycles_to_discard: int = 1


@dataclass(frozen=True, slots=True)
class TestPlan:
    """One test of one loop, complete and frozen.

    ``token`` is our holder token (1 .. 2^32-1), asked for where ``has_guard``; a loop without a guard
    needs ``accepts_no_guard``.  ``look_around_s`` is the time observed before anything is written,
    ``baseline_s`` the time held in manual.  ``baseline_noise_at_most_pct`` and
    ``baseline_drift_at_most_pct_per_s`` bound a steady baseline.  ``take_over_within_s`` bounds claim and
    mode change, ``hand_back_within_s`` the hand-back with its retries.  ``io_time_s`` is the longest time of the
    PLC's inputs and outputs, outside its scan.
    """

    __test__ = False  # not a test case, whatever a test collector makes of the name

    loop: str
    action: ControlAction
    limits: Limits
    relay: RelayPlan
    convergence: ConvergencePlan
    scan_s: float
    plc_scan_s: float | None
    has_guard: bool
    token: int
    accepts_no_guard: bool = False
    has_clock_tags: bool = False
    sp_tracks_in_manual: bool = False
    look_around_s: float = 2.0
    baseline_s: float = 10.0
    baseline_noise_at_most_pct: float = 2.0
    baseline_drift_at_most_pct_per_s: float = 0.1
    take_over_within_s: float = 5.0
    hand_back_within_s: float = 30.0
    io_time_s: float = 0.0
