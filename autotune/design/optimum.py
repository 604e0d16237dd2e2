"""Robust optimum: the least integrated error after a load step that the limits on Ms, Mt and noise allow.

For given times the gain follows from intervals (``gain_intervals``), so that a PI is a search along one
line and a PID one over a plane.  Everything is judged on the sampled loop and in the block's own form and filter.
"""

from collections.abc import Callable
from dataclasses import dataclass
from math import exp, inf, isfinite, sqrt
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize

from autotune.design.block_response import BlockTerms, block_equation, block_terms
from autotune.design.gain_intervals import LoopLimits, admissible_tops
from autotune.design.held import HeldPlant, held_plant
from autotune.design.loop_grid import SeenPlant
from autotune.design.margins import turns_say_stable
from autotune.design.responses import ClosedLoop, closed_loop, horizon_scans, load_iae_pct_s
from autotune.loop.settings import BlockDescription, PidSettings

Array = NDArray[np.float64]

_SIMULATED_PER_PERIOD = 200.0
"""Scans per ultimate period beyond which a response doesn't get truer, only dearer."""

LONGEST_INTEGRAL_RATIO = 60.0
"""Longest integral time over the ultimate period that is sought."""

_TIMES = np.geomspace(0.02, LONGEST_INTEGRAL_RATIO, 36)
"""Integral times over the ultimate period that a PI is first sought among."""

_GOLDEN_TURNS = 12
_PID_STARTS = ((0.5, 0.12), (0.9, 0.3))
"""Ti over that of the PI's optimum, and Td over the ultimate period."""

_PID_TURNS_AT_MOST = 90

_SLACK_RATIO = 1.0 + 1e-6
"""Rounding of the gain that meets a limit exactly."""

_WITHIN_GRID_RATIO = 3.0
"""Least |L| at the lowest frequency of the grid: a loop that crosses below it is not judged by it."""


@dataclass(frozen=True, slots=True, eq=False)
class LoopBench:
    """A plant under a block, ready to be tried with many settings: grid for the limits, held plant for responses."""

    plant: SeenPlant
    block: BlockDescription
    terms: BlockTerms
    simulated: HeldPlant
    scans: int

    @property
    def period_s(self) -> float:
        """The ultimate period that times are counted in."""
        return 2.0 * np.pi / self.plant.ultimate_rad_per_s

    @property
    def is_noise(self) -> NDArray[np.bool_]:
        """Where OP's answer to PV is noise: above the ultimate frequency.  At rest it is 1/Kp whatever the settings."""
        return self.plant.w_rad_per_s > self.plant.ultimate_rad_per_s

    def loop(self, settings: PidSettings) -> ClosedLoop:
        """The closed loop with settings in the block's form."""
        return closed_loop(self.simulated, block_equation(self.block, settings, self.simulated.scan_s))


@dataclass(frozen=True, slots=True)
class Found:
    """Settings that hold the limits, with the load-step IAE (% s per % of load)."""

    settings: PidSettings
    iae_pct_s: float


def loop_bench(plant: SeenPlant, block: BlockDescription) -> LoopBench:
    """``plant`` must be sampled.  Raises ``ValueError`` for a continuous one."""
    if plant.held is None:
        raise ValueError("an optimum needs the block's scan")
    period_s = 2.0 * np.pi / plant.ultimate_rad_per_s
    simulated = simulated_plant(plant, plant.held, period_s)
    return LoopBench(
        plant,
        block,
        block_terms(block, plant.w_rad_per_s, plant.held.scan_s),
        simulated,
        horizon_scans(simulated.scan_s, period_s, None),
    )


def simulated_plant(plant: SeenPlant, held: HeldPlant, period_s: float) -> HeldPlant:
    """The held plant, with a scan that is long enough to be worth computing; the hold's extra delay is taken off."""
    times = max(1, round(period_s / _SIMULATED_PER_PERIOD / held.scan_s))
    if times == 1:
        return held
    scan_s = times * held.scan_s
    excess_s = (scan_s - held.scan_s) / 2.0
    return held_plant(plant.model, scan_s, max(-plant.model.dead_time_s, plant.op_delay_s - excess_s))


def best_pi(bench: LoopBench, limits: LoopLimits) -> Found | None:
    """The PI with the least load-step IAE within the limits, or ``None`` where no gain is admissible."""
    logs = np.log(_TIMES * bench.period_s)
    tried = [_with_times(bench, limits, exp(x), None) for x in logs]
    at = min(range(len(logs)), key=lambda i: tried[i][0])
    if not isfinite(tried[at][0]):
        return None
    low, high = float(logs[max(0, at - 1)]), float(logs[min(len(logs) - 1, at + 1)])
    golden = _golden(lambda x: _with_times(bench, limits, exp(x), None)[0], low, high)
    (iae_pct_s, gain), at_log = min(
        (tried[at], float(logs[at])), (_with_times(bench, limits, exp(golden), None), golden)
    )
    return Found(PidSettings(bench.block.form, gain, exp(at_log), None), iae_pct_s)


def best_pid(bench: LoopBench, limits: LoopLimits, pi: Found, near: PidSettings | None = None) -> Found:
    """The PID with the least load-step IAE within the limits, or ``pi`` where none is better.

    Sought from the best PI, or quickly from ``near``, the answer to limits that were little different.
    """

    def cost(x: Array) -> float:
        return _with_times(bench, limits, exp(x[0]), exp(x[1]))[0]

    ti_s = pi.settings.integral_time_s or bench.period_s
    starts = [np.log([ti_ratio * ti_s, td_ratio * bench.period_s]) for ti_ratio, td_ratio in _PID_STARTS]
    if near is not None and near.integral_time_s and near.derivative_time_s:
        best = np.log([near.integral_time_s, near.derivative_time_s])
    else:
        best = min((least_by_simplex(cost, start) for start in starts), key=cost)
    x = least_by_simplex(cost, best, size_ratio=0.1)
    iae_pct_s, gain = _with_times(bench, limits, exp(x[0]), exp(x[1]))
    pid = Found(PidSettings(bench.block.form, gain, exp(x[0]), exp(x[1])), iae_pct_s)
    return min(pid, pi, key=lambda found: found.iae_pct_s)


def iae_pct_s(bench: LoopBench, settings: PidSettings) -> float:
    """Load-step IAE of a stable loop, % s per % of load."""
    ti_s = settings.integral_time_s
    lasting = None if ti_s is None else ti_s / settings.controller_gain
    return load_iae_pct_s(bench.loop(settings), bench.scans, lasting)


def admissible_gain(bench: LoopBench, limits: LoopLimits, ti_s: float, td_s: float | None) -> float | None:
    """The top of the admissible gap with the least load-step IAE for these times; ``None`` without one."""
    found, gain = _with_times(bench, limits, ti_s, td_s)
    return None if found == inf else gain


def keeps(bench: LoopBench, limits: LoopLimits, settings: PidSettings) -> bool:
    """Whether the loop is stable and within the limits, on the grid."""
    gain, ti_s = settings.controller_gain, settings.integral_time_s
    controller = gain * bench.terms.response(ti_s, settings.derivative_time_s)
    loop = bench.plant.gain * controller
    distance = np.abs(1.0 + loop)
    noise_gain = inf if limits.control_noise_gain is None else limits.control_noise_gain
    return (
        turns_say_stable(loop, bench.plant.integrators + (ti_s is not None))
        and bool(np.max(1.0 / distance) <= limits.peak_sensitivity * _SLACK_RATIO)
        and bool(np.max(np.abs(loop) / distance) <= limits.peak_complementary_sensitivity * _SLACK_RATIO)
        and bool(np.max(np.abs(controller * bench.is_noise) / distance) <= noise_gain * _SLACK_RATIO)
    )


def _with_times(bench: LoopBench, limits: LoopLimits, ti_s: float, td_s: float | None) -> tuple[float, float]:
    """(IAE, gain) of the best admissible gain for these times; an infinite IAE where there is none."""
    controller = bench.terms.response(ti_s, td_s)
    loop = bench.plant.gain * controller
    best = (inf, 0.0)
    for top in admissible_tops(loop, controller * bench.is_noise, limits):
        gain = float(top)
        if not isfinite(gain) or gain * abs(loop[0]) < _WITHIN_GRID_RATIO:
            continue
        if not turns_say_stable(gain * loop, bench.plant.integrators + 1):
            continue
        found = iae_pct_s(bench, PidSettings(bench.block.form, gain, ti_s, td_s))
        best = min(best, (found, gain))
    return best


def _golden(function: Callable[[float], float], low: float, high: float) -> float:
    """The least of a function with one valley, by golden section."""
    share = (sqrt(5.0) - 1.0) / 2.0
    left, right = high - share * (high - low), low + share * (high - low)
    at_left, at_right = function(left), function(right)
    for _ in range(_GOLDEN_TURNS):
        if at_left <= at_right:
            high, right, at_right = right, left, at_left
            left = high - share * (high - low)
            at_left = function(left)
        else:
            low, left, at_left = left, right, at_right
            right = low + share * (high - low)
            at_right = function(right)
    return left if at_left <= at_right else right


def least_by_simplex(
    function: Callable[[Array], float], start: Array, size_ratio: float = 0.4, turns: int = _PID_TURNS_AT_MOST
) -> Array:
    """Nelder and Mead from a simplex of the given size (in logarithms)."""
    corners = np.vstack([start, start + size_ratio * np.eye(len(start))])
    search: Any = minimize  # its stubs don't know "initial_simplex"
    result = search(
        lambda x: min(function(x), 1e300),
        start,
        method="Nelder-Mead",
        options={"initial_simplex": corners, "maxfev": turns, "xatol": 3e-3, "fatol": 1e-12},
    )
    return np.asarray(result.x, dtype=np.float64)
