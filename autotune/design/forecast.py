"""What settings would do: margins, answers to a step, noise on the valve, a limit cycle; as a band over the draws."""

from dataclasses import dataclass
from math import ceil, inf

import numpy as np
from numpy.typing import NDArray

from autotune.design.block_response import block_equation
from autotune.design.draws import DrawsOnGrid, quantile_ratio
from autotune.design.held import HeldPlant, held_plant
from autotune.design.limit_cycle import LimitCycle, limit_cycle
from autotune.design.margins import Margins, margins
from autotune.design.optimum import LoopBench
from autotune.design.responses import (
    StepFigures,
    horizon_scans,
    load_figures,
    noise_gain_ratio,
    pv_after_steps,
    setpoint_figures,
)
from autotune.identify.model import ModelWithDraws
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Interval, Refusal
from autotune.loop.pid_block import pid_law
from autotune.loop.settings import BlockDescription, PidSettings

Array = NDArray[np.float64]

BAND_LEVEL = 0.9
"""Share of the draws that a band holds, a twentieth being left out at each end."""

NEAR_SENSITIVITY = 2.0
"""Ms from which a loop counts as near instability: the upper end of the usual range."""

_DRAWN_SCANS_PER_PERIOD = 60.0
_DRAWN_AT_MOST = 10


@dataclass(frozen=True, slots=True)
class Forecast:
    """How the loop is expected to behave with one set of settings, far from the output's limits.

    ``setpoint`` and ``load`` answer steps of 1 % (``None`` where the best estimate is unstable).  The
    intervals are bands over the stable draws, ``unstable_share_ratio`` the weight of the others.
    ``op_noise_pct`` is the standard deviation of OP from noise of PV (``None``: noise not known),
    ``limit_cycle`` what a measured dead band of the valve causes (``None``: no dead band known, or no cycle).
    ``warnings`` name what a person must know.
    """

    margins: Margins
    setpoint: StepFigures | None
    load: StepFigures | None
    peak_sensitivity: Interval | None
    overshoot_pct: Interval | None
    setpoint_iae_pct_s: Interval | None
    load_peak_pct: Interval | None
    load_iae_pct_s: Interval | None
    unstable_share_ratio: float
    op_noise_pct: float | None
    limit_cycle: LimitCycle | None
    warnings: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class ForecastBench:
    """All that forecasts of one loop share: the bench of the best estimate, and some draws held at a longer scan."""

    bench: LoopBench
    draws: DrawsOnGrid
    drawn: tuple[HeldPlant, ...]
    drawn_scan_s: float
    drawn_at: tuple[int, ...]
    noise_pct: float | None
    dead_band_pct: float | None


def check_declared(block: BlockDescription, settings: PidSettings) -> Refusal | None:
    """Refuse what decides a forecast and isn't declared: scan, anti-windup, or a form that can't hold the settings."""
    law = pid_law(block, settings, ControlAction.REVERSE, 0.0, 100.0)
    return law if isinstance(law, Refusal) else None


def forecast_bench(
    bench: LoopBench,
    model: ModelWithDraws,
    draws: DrawsOnGrid,
    noise_pct: float | None = None,
    dead_band_pct: float | None = None,
) -> ForecastBench:
    """Ready to forecast; ``noise_pct`` is PV's standard deviation at rest, ``dead_band_pct`` the valve's, of OP."""
    plant, scan_s = bench.plant, bench.simulated.scan_s
    times = max(1, round(bench.period_s / _DRAWN_SCANS_PER_PERIOD / scan_s))
    excess_s = (times - 1) * scan_s / 2.0
    every = max(1, ceil(len(model.draws) / _DRAWN_AT_MOST))
    chosen = tuple(range(0, len(model.draws), every))
    drawn = tuple(
        held_plant(model.draws[i], times * scan_s, max(-model.draws[i].dead_time_s, plant.op_delay_s - excess_s))
        for i in chosen
    )
    return ForecastBench(bench, draws, drawn, times * scan_s, chosen, noise_pct, dead_band_pct)


def forecast(ready: ForecastBench, settings: PidSettings) -> Forecast | Refusal:
    """What settings (in the block's form) do on this loop; refuses as ``check_declared``."""
    bench = ready.bench
    if (refusal := check_declared(bench.block, settings)) is not None:
        return refusal
    found = margins(bench.plant, bench.block, settings)
    shape = bench.terms.response(settings.integral_time_s, settings.derivative_time_s)
    peaks = ready.draws.peak_sensitivities(settings.controller_gain * shape, int(settings.integral_time_s is not None))
    unstable_share_ratio = float(np.sum(ready.draws.shares[np.isinf(peaks)]))
    if not found.is_stable:
        return Forecast(
            found, None, None, None, None, None, None, None, unstable_share_ratio, None, None, _warnings(found, 1.0)
        )
    loop = bench.loop(settings)
    scans = horizon_scans(loop.scan_s, bench.period_s, settings.integral_time_s)
    lasting = _lasting_pct_s(settings)
    setpoint, load = setpoint_figures(loop, scans), load_figures(loop, scans, lasting)
    overshoot, setpoint_iae, load_peak, load_iae = _drawn_bands(
        ready, settings, peaks, (setpoint.overshoot_pct, setpoint.iae_pct_s, load.overshoot_pct, load.iae_pct_s)
    )
    noise_pct = None
    if ready.noise_pct is not None:
        noise_pct = ready.noise_pct * noise_gain_ratio(loop, scans)
    cycle = None if not ready.dead_band_pct else limit_cycle(bench, settings, ready.dead_band_pct)
    stable = np.isfinite(peaks)
    return Forecast(
        margins=found,
        setpoint=setpoint,
        load=load,
        peak_sensitivity=_band(found.peak_sensitivity or inf, peaks[stable], ready.draws.shares[stable]),
        overshoot_pct=overshoot,
        setpoint_iae_pct_s=setpoint_iae,
        load_peak_pct=load_peak,
        load_iae_pct_s=load_iae,
        unstable_share_ratio=unstable_share_ratio,
        op_noise_pct=noise_pct,
        limit_cycle=cycle,
        warnings=(*_warnings(found, unstable_share_ratio), *_cycle_warning(cycle)),
    )


def _lasting_pct_s(settings: PidSettings) -> float | None:
    ti_s = settings.integral_time_s
    return None if ti_s is None else ti_s / settings.controller_gain


def _drawn_bands(ready: ForecastBench, settings: PidSettings, peaks: Array, best: tuple[float, ...]) -> list[Interval]:
    """Overshoot, setpoint IAE, load peak and load IAE over the stable ones among the chosen draws."""
    rows, shares = [], []
    lasting = _lasting_pct_s(settings)
    equation = block_equation(ready.bench.block, settings, ready.drawn_scan_s)
    for held, at in zip(ready.drawn, ready.drawn_at, strict=True):
        if not np.isfinite(peaks[at]):
            continue
        scans = horizon_scans(held.scan_s, ready.bench.period_s, settings.integral_time_s)
        after_sp, after_load = pv_after_steps(held, equation, scans)
        seen, signed = held.scan_s * float(np.sum(np.abs(after_load))), held.scan_s * float(np.sum(after_load))
        rows.append(
            (
                100.0 * max(0.0, float(np.max(after_sp)) - 1.0),
                held.scan_s * float(np.sum(np.abs(1.0 - after_sp))),
                float(np.max(np.abs(after_load))),
                seen + (0.0 if lasting is None else abs(lasting - signed)),
            )
        )
        shares.append(float(ready.draws.shares[at]))
    columns = np.array(rows).reshape(-1, len(best)).T
    return [_band(one, column, np.array(shares)) for one, column in zip(best, columns, strict=True)]


def _band(
    best: float,
    drawn: Array,
    shares: Array,
) -> Interval:
    """Best estimate with the band of the draws, which is widened to hold it."""
    if len(drawn) == 0:
        return Interval(best, best, best, None)
    whole = shares / np.sum(shares)
    tail = (1.0 - BAND_LEVEL) / 2.0
    low, high = quantile_ratio(drawn, whole, tail), quantile_ratio(drawn, whole, 1.0 - tail)
    return Interval(best, min(low, best), max(high, best), BAND_LEVEL)


def _warnings(found: Margins, unstable_share_ratio: float) -> tuple[str, ...]:
    if not found.is_stable:
        return ("Unstable on the identified model: the loop would swing ever wider.",)
    sentences = []
    if unstable_share_ratio > 0.0:
        sentences.append(
            f"Unstable on {100.0 * unstable_share_ratio:.0f} % of what the model may be instead of the best estimate."
        )
    if found.peak_sensitivity is not None and found.peak_sensitivity > NEAR_SENSITIVITY:
        sentences.append(f"Near instability: Ms is {found.peak_sensitivity:.2f}, above the usual {NEAR_SENSITIVITY:g}.")
    if found.delay_margin_scan_ratio is not None and found.delay_margin_scan_ratio < 5.0:
        sentences.append(
            f"Only {found.delay_margin_scan_ratio:.1f} executions of the block may be lost before the loop swings."
        )
    return tuple(sentences)


def _cycle_warning(cycle: LimitCycle | None) -> tuple[str, ...]:
    if cycle is None:
        return ()
    return (
        f"The valve's dead band will keep the loop swinging: about every {cycle.period_s:.3g} s, OP by "
        f"{cycle.op_amplitude_pct:.2g} % and PV by {cycle.pv_amplitude_pct:.2g} % each way. Repair the valve first.",
    )
