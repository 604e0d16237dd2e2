"""How good proposed settings are on the truth: ``python -m tests.benchmarks.settings --batch FILE | --fresh SEED``.

Plants: a batch file (``tests/reference/reference_batch.json``) or plants drawn afresh.  The model is the true plant
(``--true-model``) or identified from a simulated relay test with ``--noise`` sigma over the swing.  The proposal is
the robust optimum against upsets, middle caution, for an ideal block that runs ``--controller-scan-per-period`` times
an ultimate period.  Scored with the brute force of ``tests.reference.settings_optima``, which shares no code with
the program: Ms of the true sampled loop, load-step IAE over the best possible within Ms, Mt <= 1.4, and whether
the loop settles.  ``cost_ratio`` is the processor time of all proposals over that of one order-3 response (500
samples, 14 switches).  Exits with 1 where a loop with kappa <= 4 is unstable.
"""

import argparse
import json
import sys
import time
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from autotune.design.choices import Caution, Purpose
from autotune.design.propose import propose_from_model
from autotune.identify.findings import Findings
from autotune.identify.measure import measure
from autotune.identify.model import ModelWithDraws, ProcessModel
from autotune.identify.step_responses import Staircase, responses
from autotune.loop.mode import ControlAction
from autotune.loop.settings import AntiWindup, BlockDescription, FieldRange, PidForm, PidSettings
from autotune.loop.span import Span
from tests.benchmarks.identification import KAPPA_AT_MOST, fresh_plants
from tests.identify.exact_relay import Bench, Plant, plant_of, sampled_relay
from tests.reference import settings_optima as brute

Numbers = NDArray[np.floating[Any]]

FRESH_COUNT = 40


@dataclass(frozen=True, slots=True)
class Run:
    """One plant: what was chosen for it and how that does on the truth; ``None`` where nothing was proposed."""

    id: str
    family: str
    kappa: float
    seed: int
    form: str
    choice: str | None = None
    gain: float | None = None
    ti_s: float | None = None
    td_s: float | None = None
    true_ms: float | None = None
    iae_ratio: float | None = None
    stable: bool | None = None
    cost_ratio: float | None = None
    refused: str | None = None


def true_model(plant: Plant) -> ProcessModel:
    """The plant itself as a process model."""
    top: Numbers = np.array([plant.gain]) if not plant.zero_s else plant.gain * np.array([plant.zero_s, 1.0])
    bottom: Numbers = np.ones(1)
    for lag_s in plant.lags_s:
        bottom = np.polymul(bottom, [lag_s, 1.0])
    if plant.quadratic:
        bottom = np.polymul(bottom, [*plant.quadratic, 1.0])
    if plant.is_integrating:
        bottom = np.append(bottom, 0.0)
    return ProcessModel(
        tuple(float(number) for number in top / bottom[0]),
        tuple(float(number) for number in bottom / bottom[0]),
        plant.dead_time_s,
    )


def kappa(plant: Plant) -> float:
    """|dln|G|/dln w| over |dphi/dln w| at the ultimate frequency."""
    if plant.kappa:
        return plant.kappa
    wu = 2.0 * np.pi / plant.ultimate_period_s
    response = true_model(plant).response(wu * np.exp([-1e-4, 1e-4]))
    return float(abs(np.log(abs(response[1] / response[0]))) / abs(np.angle(response[1] / response[0])))


def identified_model(plant: Plant, noise_ratio: float, seed: int) -> ModelWithDraws | str:
    """What a simulated relay test says of the plant, or why nothing."""
    found = measure(sampled_relay(plant, Bench(noise_ratio=noise_ratio), seed))
    if not isinstance(found, Findings):
        return found.code
    return found.model or "NO_MODEL"


def run(plant: Plant, seed: int, *, noise_ratio: float | None, scans_per_period: int) -> Run:
    """Propose for one plant (``noise_ratio`` ``None``: on the true model) and score on the truth."""
    family, weight = plant.name.split()[0], kappa(plant)
    model = ModelWithDraws(true_model(plant)) if noise_ratio is None else identified_model(plant, noise_ratio, seed)
    if isinstance(model, str):
        return Run(plant.name, family, weight, seed, "ideal", refused=model)
    wide = FieldRange(0.0, 1e12)
    block = BlockDescription(
        PidForm.IDEAL,
        scan_s=plant.ultimate_period_s / scans_per_period,
        anti_windup=AntiWindup.STOP,
        gain_range=wide,
        integral_range=wide,
        derivative_range=wide,
    )
    began = time.process_time()
    sheet = propose_from_model(
        model=model,
        block=block,
        action=ControlAction.REVERSE,
        pv_span=Span(0.0, 100.0, "%"),
        purpose=Purpose.REGULATE,
        caution=Caution.MIDDLE,
    )
    cost_ratio = (time.process_time() - began) / order_3_response_s()
    if sheet.recommended is None:
        return Run(plant.name, family, weight, seed, "ideal", cost_ratio=cost_ratio, refused=sheet.reason)
    settings = next(column for column in sheet.proposals if column.name == sheet.recommended).in_block_form
    choice = "PI" if settings.derivative_time_s is None else "PID"
    true_ms, iae, stable = scored(plant, settings, scans_per_period)
    best = optimum_iae(plant, choice, scans_per_period)
    return Run(
        plant.name,
        family,
        weight,
        seed,
        settings.form.value,
        choice=choice,
        gain=settings.controller_gain,
        ti_s=settings.integral_time_s,
        td_s=settings.derivative_time_s,
        true_ms=true_ms if stable else None,
        iae_ratio=iae / best if stable else None,
        stable=stable,
        cost_ratio=cost_ratio,
    )


def scored(plant: Plant, settings: PidSettings, scans_per_period: int) -> tuple[float, float, bool]:
    """Ms and IAE of the true loop, and whether it settles, by brute force."""
    held = brute.sampled(plant, scans_per_period)
    gain = np.array([settings.controller_gain])
    ti_s, td_s = np.array([settings.integral_time_s or np.inf]), np.array([settings.derivative_time_s or 0.0])
    loop = gain * held.response * brute.controller(held, ti_s, td_s)[0]
    iae = float(brute.load_iae(held, gain, ti_s, td_s)[0])
    return float(np.max(1.0 / np.abs(1.0 + loop))), iae, bool(np.isfinite(iae))


@cache
def _cached_optima() -> dict[str, Any]:
    optima: dict[str, Any] = json.loads(brute.PATH.read_text(encoding="utf-8"))["optima"]
    return optima


@cache
def optimum_iae(plant: Plant, choice: str, scans_per_period: int) -> float:
    """The least IAE within Ms, Mt <= 1.4: from the stored optima, else by brute force now."""
    stored = _cached_optima().get(plant.name)
    if stored is not None and scans_per_period == brute.SCANS_PER_PERIOD:
        return float(stored[choice]["iae"])
    return brute.optimum(brute.sampled(plant, scans_per_period), with_derivative=choice == "PID")[0]


@cache
def order_3_response_s() -> float:
    """Processor time of one response of a third-order plant: 500 samples, 14 switches."""
    sample_s = np.linspace(0.0, 6.0, 500)
    stairs = Staircase(sample_s, np.linspace(0.5, 5.5, 14), np.array([-1.0, 1.0] * 7))
    poles = np.array([-1.0, -2.0 + 1.0j, -2.0 - 1.0j])
    began = time.process_time()
    for _ in range(50):
        responses(poles, stairs, 0.1)
    return (time.process_time() - began) / 50.0


def summary(runs: Sequence[Run]) -> dict[str, Any]:
    """Over all runs, and over those with kappa <= 4."""
    return {
        name: _figures([one for one in runs if one.kappa <= limit])
        for name, limit in (("all", np.inf), ("kappa_at_most_4", KAPPA_AT_MOST))
    }


def _figures(runs: Sequence[Run]) -> dict[str, Any]:
    proposed = [one for one in runs if one.choice is not None]
    peaks = [one.true_ms for one in proposed if one.true_ms is not None]
    ratios = [one.iae_ratio for one in proposed if one.iae_ratio is not None]

    def spread(numbers: Sequence[float]) -> dict[str, float | None]:
        quantiles = np.percentile(numbers, [50, 90, 100]) if numbers else [None] * 3
        return {
            key: None if number is None else float(number)
            for key, number in zip(("median", "p90", "max"), quantiles, strict=True)
        }

    return {
        "runs": len(runs),
        "proposed": len(proposed),
        "unstable": sum(one.stable is False for one in proposed),
        "pid": sum(one.choice == "PID" for one in proposed),
        "true_ms": spread(peaks),
        "true_ms_within_1_percent_of_1p4": sum(abs(peak / brute.LIMIT - 1.0) <= 0.01 for peak in peaks),
        "iae_ratio": spread(ratios),
        "cost_ratio": spread([one.cost_ratio for one in proposed if one.cost_ratio is not None]),
    }


def main(arguments: Sequence[str] | None = None) -> int:
    """Print one JSON document or a short table; 1 where a loop with kappa <= 4 is unstable."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.settings", description=__doc__)
    source = parser.add_mutually_exclusive_group(required=True)
    source.add_argument("--batch", type=Path, help="a file like tests/reference/reference_batch.json")
    source.add_argument("--fresh", type=int, metavar="SEED", help=f"{FRESH_COUNT} plants drawn afresh")
    parser.add_argument("--noise", type=float, default=0.02, help="sigma over the swing (0.02)")
    parser.add_argument("--true-model", action="store_true", help="design on the true plant instead of a test")
    parser.add_argument("--controller-scan-per-period", type=int, default=brute.SCANS_PER_PERIOD)
    parser.add_argument("--kappa-at-most", type=float, default=np.inf, help="leave out plants beyond")
    parser.add_argument("--count", type=int, default=None, help="only so many plants")
    parser.add_argument("--seed", type=int, default=0, help="of the tests' noise")
    parser.add_argument("--json", action="store_true", help="one JSON document on standard output")
    chosen = parser.parse_args(arguments)
    if chosen.batch is not None:
        plants = tuple(plant_of(entry) for entry in json.loads(chosen.batch.read_text(encoding="utf-8"))["processes"])
    else:
        plants = fresh_plants(chosen.count or FRESH_COUNT, chosen.fresh)
    plants = tuple(plant for plant in plants if kappa(plant) <= chosen.kappa_at_most)[: chosen.count]
    noise_ratio = None if chosen.true_model else chosen.noise
    runs = [
        run(plant, chosen.seed, noise_ratio=noise_ratio, scans_per_period=chosen.controller_scan_per_period)
        for plant in plants
    ]
    figures = summary(runs)
    if chosen.json:
        print(json.dumps({"runs": [asdict(one) for one in runs], "summary": figures}, indent=1, allow_nan=False))
    else:
        print(json.dumps(figures, indent=1, allow_nan=False))
    return 1 if figures["kappa_at_most_4"]["unstable"] else 0


if __name__ == "__main__":
    sys.exit(main())
