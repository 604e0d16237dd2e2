"""Plants under a relay, computed exactly with matrix exponentials: the independent oracle of this room.

``sampled_relay`` is the relay as a scan sees it: the exact-hold recursion with a fractional dead time
(x+ = Phi(h) x + Phi(h-f) Gam(f) u[k-q-1] + Gam(h-f) u[k-q], q = floor((L+d)/h), f = (L+d) - q h;
Astrom and Wittenmark, Computer-Controlled Systems, 3rd ed., section 2.3, sampling with a dead time).
``timed_relay`` switches at the very instant of the crossing: a continuous relay, for the closed forms.
"""

import json
from collections import deque
from dataclasses import dataclass, replace
from functools import cache, reduce
from math import floor
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm
from scipy.optimize import brentq

from autotune.loop.mode import ControlAction
from autotune.loop.record import OutputEffect, Record, RecordedSample, TimeBase
from autotune.loop.sample import Stamp

Matrix = NDArray[np.float64]
Element = tuple[Matrix, Matrix, Matrix, float]
REFERENCE = Path(__file__).parents[1] / "reference"


@dataclass(frozen=True, slots=True)
class Plant:
    """gain (1 + zero s) e^(-L s) / prod(1 + lag s) (q0 s^2 + q1 s + 1) (s where integrating)."""

    name: str
    gain: float = 1.0
    lags_s: tuple[float, ...] = ()
    dead_time_s: float = 0.0
    zero_s: float | None = None
    quadratic: tuple[float, float] | None = None
    is_integrating: bool = False
    ultimate_gain: float = 0.0
    ultimate_period_s: float = 0.0
    kappa: float = 0.0


def plant_of(entry: dict[str, Any]) -> Plant:
    """One process of the reference batch."""
    return Plant(
        name=entry["id"],
        gain=entry["gain"],
        lags_s=tuple(entry["lags_s"]),
        dead_time_s=entry["dead_time_s"],
        zero_s=entry["zero_s"],
        quadratic=tuple(entry["quadratic"]) if entry["quadratic"] else None,
        is_integrating=entry["integrating"],
        ultimate_gain=entry["ultimate_gain"],
        ultimate_period_s=entry["ultimate_period_s"],
        kappa=entry["kappa"],
    )


@cache
def reference_batch() -> tuple[Plant, ...]:
    """The batch of Astrom and Hagglund, J. Process Control 14 (2004) 635, with its ultimate points."""
    batch = json.loads((REFERENCE / "reference_batch.json").read_text())
    return tuple(plant_of(entry) for entry in batch["processes"])


@cache
def checks() -> dict[str, dict[str, Any]]:
    """The outside check values by id."""
    return {check["id"]: check for check in json.loads((REFERENCE / "checks.json").read_text())}


def _lag(lag_s: float, zero_s: float = 0.0) -> Element:
    direct = zero_s / lag_s
    return np.array([[-1 / lag_s]]), np.array([1 / lag_s]), np.array([1 - direct]), direct


def _series(first: Element, second: Element) -> Element:
    a1, b1, c1, d1 = first
    a2, b2, c2, d2 = second
    a = np.block([[a1, np.zeros((len(b1), len(b2)))], [np.outer(b2, c1), a2]])
    return a, np.concatenate((b1, b2 * d1)), np.concatenate((d2 * c1, c2)), d1 * d2


def state_space(plant: Plant) -> tuple[Matrix, Matrix, Matrix]:
    """(A, b, c) of the plant without its dead time."""
    elements = [_lag(lag, (plant.zero_s or 0.0) if i == 0 else 0.0) for i, lag in enumerate(plant.lags_s)]
    if plant.quadratic:
        q0, q1 = plant.quadratic
        elements.append(
            (np.array([[0.0, 1.0], [-1 / q0, -q1 / q0]]), np.array([0.0, 1 / q0]), np.array([1.0, 0.0]), 0.0)
        )
    if plant.is_integrating:
        elements.append((np.zeros((1, 1)), np.ones(1), np.ones(1), 0.0))
    a, b, c, direct = reduce(_series, elements)
    assert direct == 0.0
    return a, plant.gain * b, c


def hold(a: Matrix, b: Matrix, t_s: float) -> tuple[Matrix, Matrix]:
    """(Phi, Gam) of a held input over ``t_s``, from one exponential (Van Loan 1978)."""
    n = len(b)
    block = np.zeros((n + 1, n + 1))
    block[:n, :n], block[:n, n] = a, b
    exponential = expm(block * t_s)
    return exponential[:n, :n], exponential[:n, n]


@dataclass(frozen=True, slots=True)
class Bench:
    """How a sampled relay test is run; ``noise_ratio`` is sigma over the noise-free swing (half peak-to-peak)."""

    scans_per_ultimate_period: float = 40.0
    latency_scans: float = 1.0
    noise_ratio: float = 0.02
    bias_ratio: float = 0.3
    switches: int = 10
    amplitude_pct: float = 5.0
    hysteresis_per_noise: float = 2.5
    baseline_periods: float = 0.5
    drift_ratio: float = 0.0  # of the noise-free swing, per ultimate period


def _run(plant: Plant, bench: Bench, noise_pct: float, drift_pct_per_s: float, seed: int) -> Record:
    scan_s = plant.ultimate_period_s / bench.scans_per_ultimate_period
    a, b, c = state_space(plant)
    delay = plant.dead_time_s + bench.latency_scans * scan_s
    whole = floor(delay / scan_s + 1e-9)
    part = max(delay - whole * scan_s, 0.0)
    phi, _ = hold(a, b, scan_s)
    phi_late, gam_late = hold(a, b, scan_s - part)
    old = phi_late @ hold(a, b, part)[1]

    rng = np.random.default_rng(seed)
    baseline = int(bench.scans_per_ultimate_period * bench.baseline_periods)
    hysteresis = max(bench.hysteresis_per_noise * noise_pct, 1e-9)
    blanking = 0.12 * plant.ultimate_period_s
    up, down = bench.amplitude_pct * (1 + bench.bias_ratio), -bench.amplitude_pct * (1 - bench.bias_ratio)
    x = np.zeros(len(b))
    moves = [0.0] * (whole + 2)
    samples: list[RecordedSample] = []
    effects = [OutputEffect(Stamp.at(-scan_s), 50.0)]
    op, switches, last_switch, k = 0.0, 0, -1e9, 0
    rng_scan = rng.normal
    while switches <= bench.switches:
        t = k * scan_s
        drift = drift_pct_per_s * t
        pv = float(c @ x) + drift + noise_pct * float(rng_scan())
        samples.append(RecordedSample(Stamp.at(t), 50.0 + pv, 50.0 + op))
        wanted = op
        if k == baseline:
            wanted = up
        elif k > baseline and t - last_switch >= blanking:
            if pv > hysteresis:
                wanted = down
            elif pv < -hysteresis:
                wanted = up
        if wanted != op:
            op, last_switch, switches = wanted, t, switches + 1
            effects.append(OutputEffect(Stamp.at(t + bench.latency_scans * scan_s), 50.0 + op))
        moves.append(op)
        x = phi @ x + old * moves[-whole - 2] + gam_late * moves[-whole - 1]
        k += 1
        if k > 20000:
            raise AssertionError(f"{plant.name} never finished")
    return Record(
        action=ControlAction.REVERSE,
        time_base=TimeBase.PLC_CLOCK,
        samples=tuple(samples),
        effects=tuple(effects),
        centre_pct=50.0,
        reference_pct=50.0,
        relay_from_s=effects[1].effect.middle_s,
        hysteresis_pct=hysteresis,
        noise_pct=noise_pct,
        drift_pct_per_s=drift_pct_per_s,
        scan_s=scan_s,
        plc_scan_s=None,
    )


@cache
def quiet_swing_pct(plant: Plant, bench: Bench) -> float:
    """Half peak-to-peak of PV in the last cycle of the noise-free test: what the noise is measured against."""
    record = _run(plant, bench, 0.0, 0.0, 0)
    from_s = record.effects[-3].effect.middle_s
    swing = [sample.pv_pct for sample in record.samples if sample.taken.middle_s >= from_s]
    return 0.5 * (max(swing) - min(swing))


def sampled_relay(plant: Plant, bench: Bench, seed: int = 0) -> Record:
    """Record of a relay test in scans, stamped by the PLC's clock, exact at the sampling instants."""
    quiet = replace(bench, noise_ratio=0.0, drift_ratio=0.0)
    swing = quiet_swing_pct(plant, quiet)
    return _run(plant, bench, bench.noise_ratio * swing, bench.drift_ratio * swing / plant.ultimate_period_s, seed)


@dataclass(frozen=True, slots=True)
class LimitCycle:
    """Steady oscillation: times between switches (after up, after down), extremes, and the waveform."""

    after_up_s: float
    after_down_s: float
    high_pct: float
    low_pct: float

    @property
    def period_s(self) -> float:
        return self.after_up_s + self.after_down_s

    @property
    def amplitude_pct(self) -> float:
        return 0.5 * (self.high_pct - self.low_pct)


def timed_relay(
    plant: Plant,
    up_pct: float,
    down_pct: float,
    hysteresis_pct: float,
    switches: int = 60,
    grid_s: float = 0.02,
    kick_s: float = 0.0,
) -> tuple[LimitCycle, list[tuple[float, float]], list[tuple[float, float]]]:
    """Event-timed relay from rest: the limit cycle, the moves (t, OP) and the waveform (t, PV) of the whole run.

    Crossings are bracketed on a grid and solved to rounding; moves reach the plant a dead time later.  The first
    move lasts ``kick_s`` at least: without hysteresis and dead time a relay at rest would switch at once, for ever.
    """
    a, b, c = state_space(plant)
    n = len(b)
    on_grid = hold(a, b, grid_s)

    def after(x: Matrix, u: float, t_s: float) -> Matrix:
        phi, gam = on_grid if t_s == grid_s else hold(a, b, t_s)
        return np.asarray(phi @ x + gam * u)

    t, x, u_in, op = 0.0, np.zeros(n), 0.0, up_pct
    moves, waveform = [(0.0, op)], [(0.0, 0.0)]
    under_way = deque([(plant.dead_time_s, op)])
    while len(moves) <= switches:
        step = grid_s if not under_way else min(grid_s, under_way[0][0] - t)
        ahead = after(x, u_in, step) if step > 0 else x
        sign = 1.0 if op == up_pct else -1.0

        def margin(dt: float, x: Matrix = x, u: float = u_in, sign: float = sign) -> float:
            return float(sign * (c @ after(x, u, dt)) - hysteresis_pct)

        if sign * float(c @ ahead) > hysteresis_pct and step > 0 and t >= kick_s:
            crossing = float(brentq(margin, 0.0, step, xtol=1e-14)) if margin(0.0) < 0 else 0.0
            x, t = after(x, u_in, crossing), t + crossing
            op = down_pct if op == up_pct else up_pct
            moves.append((t, op))
            under_way.append((t + plant.dead_time_s, op))
        else:
            x, t = ahead, t + step
        waveform.append((t, float(c @ x)))
        while under_way and under_way[0][0] <= t + 1e-12:
            u_in = under_way.popleft()[1]
    ups = [m[0] for m in moves if m[1] == up_pct][-2:]
    down = next(m[0] for m in moves if m[1] == down_pct and ups[0] < m[0] < ups[1])
    swing = [pv for at, pv in waveform if ups[0] <= at <= ups[1]]
    return LimitCycle(down - ups[0], ups[1] - down, max(swing), min(swing)), moves, waveform


def timed_record(plant: Plant, up_pct: float, down_pct: float, hysteresis_pct: float, **how: Any) -> Record:
    """The event-timed run as a record about 0 %, with samples on the grid and at every event, and a rest before it.

    ``up_pct`` and ``down_pct`` are signed levels of OP; ``how`` goes to ``timed_relay``.
    """
    _, moves, waveform = timed_relay(plant, up_pct, down_pct, hysteresis_pct, **how)
    rest = [RecordedSample(Stamp.at(-0.1 * i), 0.0) for i in range(10, 0, -1)]
    return Record(
        action=ControlAction.REVERSE,
        time_base=TimeBase.PLC_CLOCK,
        samples=(*rest, *(RecordedSample(Stamp.at(t), pv) for t, pv in waveform)),
        effects=(OutputEffect(Stamp.at(-2.0), 0.0), *(OutputEffect(Stamp.at(t), op) for t, op in moves)),
        centre_pct=0.0,
        reference_pct=0.0,
        relay_from_s=0.0,
        hysteresis_pct=hysteresis_pct,
        noise_pct=0.0,
        drift_pct_per_s=0.0,
        scan_s=how.get("grid_s", 0.02),
        plc_scan_s=None,
    )
