"""Brute force for ``settings_optima.json``: ``python -m tests.reference.settings_optima`` (about ten minutes).

Every process of the reference batch with kappa <= 4 under an ideal PI and PID (derivative filter Td/10, on PV),
sampled at Tu/100: the settings with the least load-step IAE that keep Ms and Mt at or below 1.4.  Shares no code
with the program: the plant is held by matrix exponentials (``tests.identify.exact_relay``), its frequency
response is c (zI - Phi)^-1 Gam, gains are sought on a grid and by bisection, and every candidate is simulated
scan by scan.  The grid of times is zoomed in on twice.
"""

import json
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from math import floor
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tests.identify.exact_relay import Plant, hold, reference_batch, state_space

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

PATH = Path(__file__).with_name("settings_optima.json")
KAPPA_AT_MOST = 4.0
SCANS_PER_PERIOD = 100
LIMIT = 1.4
FILTER_RATIO = 10.0
PERIODS = 12
LANES = 256
"""Candidates at a time, for the memory's sake."""


@dataclass(frozen=True, slots=True)
class Sampled:
    """x+ = phi x + late u[k-q-1] + soon u[k-q], y = c x; with its frequency response on a grid below pi/h."""

    scan_s: float
    scans_per_period: int
    delay_scans: int
    phi: Array
    late: Array
    soon: Array
    output: Array
    w: Array
    response: Complex


def sampled(plant: Plant, scans_per_period: int = SCANS_PER_PERIOD) -> Sampled:
    """The exact hold of one plant."""
    scan_s = plant.ultimate_period_s / scans_per_period
    a, b, c = state_space(plant)
    q = floor(plant.dead_time_s / scan_s + 1e-9)
    f = max(0.0, plant.dead_time_s - q * scan_s)
    phi_rest, soon = hold(a, b, scan_s - f)
    phi_f, gamma_f = hold(a, b, f)
    wu = 2.0 * np.pi / plant.ultimate_period_s
    w = np.union1d(np.geomspace(1e-3 * wu, np.pi / scan_s, 500), np.linspace(0.02 * wu, 12.0 * wu, 500))
    z = np.exp(1j * w * scan_s)[:, None, None]
    into = soon + (phi_rest @ gamma_f) / z[:, :, 0]
    states = np.linalg.solve(z * np.eye(len(b)) - phi_rest @ phi_f, into[:, :, None])
    response = (states[:, :, 0] @ c) * z[:, 0, 0] ** -float(q)
    return Sampled(scan_s, scans_per_period, q, phi_rest @ phi_f, phi_rest @ gamma_f, soon, c, w, response)


def controller(plant: Sampled, ti_s: Array, td_s: Array) -> Complex:
    """C(jw) at a gain of 1, one row for each pair of times."""
    h, back = plant.scan_s, np.exp(-1j * plant.w * plant.scan_s)[None, :]
    ti, td = ti_s[:, None], td_s[:, None]
    derivative = FILTER_RATIO * td * (1.0 - back) / (td + FILTER_RATIO * h - td * back)
    return np.asarray(1.0 + h / ti / (1.0 - back) + derivative)


def holds(loop: Complex, gains: Array) -> NDArray[np.bool_]:
    """Whether Ms and Mt hold, for loops (rows) at a gain of 1 and gains (rows, any number of columns)."""
    allowed = np.empty(gains.shape, dtype=bool)
    for column in range(gains.shape[1]):
        raised = gains[:, column, None] * loop
        nearest = np.abs(1.0 + raised)
        allowed[:, column] = np.max(np.maximum(1.0, np.abs(raised)) / nearest, axis=1) <= LIMIT
    return allowed


def largest_gains(plant: Sampled, ti_s: Array, td_s: Array, run: int) -> Array:
    """The largest gain of the ``run``-th run of admissible gains from below, 0 where there is none.

    Above a run of stable gains there can be one that only looks good: far from -1 on the wrong side of it.
    """
    loop = plant.response[None, :] * controller(plant, ti_s, td_s)
    scale = 1.0 / np.max(np.abs(loop[:, plant.w > 2.0 * np.pi / (plant.scans_per_period * plant.scan_s)]), axis=1)
    grid = scale[:, None] * np.geomspace(3e-3, 3.0, 36)[None, :]
    allowed = holds(loop, grid)
    ends = allowed & ~np.concatenate((allowed[:, 1:], np.zeros((len(ti_s), 1), dtype=bool)), axis=1)
    is_wanted = ends & (np.cumsum(ends, axis=1) == run + 1)
    last = np.argmax(is_wanted, axis=1)
    rows = np.arange(len(ti_s))
    low, high = grid[rows, last], grid[rows, np.minimum(last + 1, allowed.shape[1] - 1)]
    for _ in range(16):
        middle = np.sqrt(low * high)
        good = holds(loop, middle[:, None])[:, 0]
        low, high = np.where(good, middle, low), np.where(good, high, middle)
    return np.where(is_wanted.any(axis=1), low, 0.0)


def load_iae(plant: Sampled, gain: Array, ti_s: Array, td_s: Array) -> Array:
    """IAE after a load step of 1 at the plant's input, all candidates at once; infinite where it doesn't settle."""
    h, lanes = plant.scan_s, len(gain)
    scans = PERIODS * plant.scans_per_period
    state = np.zeros((lanes, len(plant.output)))
    held = np.zeros((plant.delay_scans + 2, lanes))
    integral, derivative, before = np.zeros(lanes), np.zeros(lanes), np.zeros(lanes)
    iae, signed, last = np.zeros(lanes), np.zeros(lanes), np.zeros(lanes)
    kept = td_s / (td_s + FILTER_RATIO * h)
    with np.errstate(over="ignore", invalid="ignore"):
        for k in range(scans):
            pv = state @ plant.output
            integral = integral - gain * h / ti_s * pv
            derivative = kept * derivative - FILTER_RATIO * kept * (pv - before)
            before = pv
            held = np.roll(held, 1, axis=0)
            held[0] = gain * (derivative - pv) + integral + 1.0
            state = state @ plant.phi.T + np.outer(held[-1], plant.late) + np.outer(held[-2], plant.soon)
            iae, signed = iae + h * np.abs(pv), signed + h * pv
            if k >= scans - plant.scans_per_period:
                last = np.maximum(last, np.abs(pv))
        settled = last * plant.scan_s * plant.scans_per_period < 0.05 * iae
        total = iae + np.abs(ti_s / gain - signed)
    return np.where(settled & (gain > 0.0) & np.isfinite(total), total, np.inf)


def best(plant: Sampled, ti_s: Array, td_s: Array) -> tuple[float, float, float, float]:
    """(IAE, gain, Ti, Td) of the best of all pairs."""
    found = (np.inf, 0.0, 0.0, 0.0)
    for first in range(0, len(ti_s), LANES):
        lane = slice(first, first + LANES)
        for run in range(2):
            gain = largest_gains(plant, ti_s[lane], td_s[lane], run)
            at = np.flatnonzero(gain > 0.0)
            if len(at) == 0:
                continue
            iae = load_iae(plant, gain[at], ti_s[lane][at], td_s[lane][at])
            least = int(np.argmin(iae))
            i = at[least]
            found = min(found, (float(iae[least]), float(gain[i]), float(ti_s[lane][i]), float(td_s[lane][i])))
    return found


def optimum(plant: Sampled, *, with_derivative: bool) -> tuple[float, float, float, float]:
    """Grid over the times, then two zooms."""
    period_s = plant.scans_per_period * plant.scan_s
    ti_axis = period_s * np.geomspace(0.01, 60.0, 48 if with_derivative else 160)
    td_axis = period_s * np.geomspace(0.01, 3.0, 32) if with_derivative else np.zeros(1)
    found = best(plant, *(axis.ravel() for axis in np.meshgrid(ti_axis, td_axis)))
    for zoom in (1.25, 1.06):
        ti_axis = found[2] * np.geomspace(1.0 / zoom, zoom, 13)
        td_axis = found[3] * np.geomspace(1.0 / zoom, zoom, 13) if with_derivative else np.zeros(1)
        found = min(found, best(plant, *(axis.ravel() for axis in np.meshgrid(ti_axis, td_axis))))
    return found


def main(arguments: Sequence[str] | None = None) -> int:
    """Write the file anew."""
    names = list(sys.argv[1:] if arguments is None else arguments)
    rows = {}
    for plant in reference_batch():
        if plant.kappa > KAPPA_AT_MOST or (names and plant.name not in names):
            continue
        held = sampled(plant)
        row = {}
        for letters in ("PI", "PID"):
            iae, gain, ti_s, td_s = optimum(held, with_derivative=letters == "PID")
            row[letters] = {"iae": iae, "gain": gain, "ti_s": ti_s, "td_s": td_s or None}
        rows[plant.name] = row
        print(plant.name, row, flush=True)  # noqa: T201
    if not names:
        PATH.write_text(
            json.dumps(
                {
                    "source": "brute force by tests/reference/settings_optima.py",
                    "conditions": "ideal form, Td/10 on PV, scan Tu/100, Ms <= 1.4, Mt <= 1.4, least load-step IAE",
                    "optima": rows,
                },
                indent=1,
            )
            + "\n",
            encoding="utf-8",
        )
    return 0


if __name__ == "__main__":
    sys.exit(main())
