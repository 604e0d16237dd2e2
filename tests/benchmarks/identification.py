"""How well a relay test tells Ku and Tu: ``python -m tests.benchmarks.identification [--all] [--json]``.

Plants: the reference batch with kappa <= 4 (tests/reference/reference_batch.json; Astrom and Hagglund, J. Process
Control 14 (2004) 635), and with ``--all`` also plants drawn afresh that were in nobody's hands when the constants
were chosen, and harder conditions.  Simulated exactly (``tests.identify.exact_relay``).  A relay with bias 0.3 and
hysteresis 2.5 sigma, 10 switches after half a period at rest, scan Tu/40 and one scan of latency, noise of 2 % of
the swing, stamps by the PLC's clock, unless a row says otherwise.  The textbook's reading stands beside.
Exits with 1 where the reference row misses a bar.
"""

import argparse
import json
import sys
from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from math import log

import numpy as np

from autotune.identify.closed_forms import Rational, ultimate_of
from autotune.identify.findings import Findings
from autotune.identify.measure import measure
from tests.identify.exact_relay import Bench, Plant, reference_batch, sampled_relay

KAPPA_AT_MOST = 4.0
COVERAGE_AT_LEAST = 0.95
GAIN_ERROR_AT_MOST_PCT = 5.0
PERIOD_ERROR_AT_MOST_PCT = 2.5


@dataclass(frozen=True, slots=True)
class Row:
    """One condition: errors and half widths in percent; ``covered`` are the shares of intervals that hold the truth."""

    condition: str
    tests: int
    refused: int
    gain_covered: float
    period_covered: float
    gain_error_median_pct: float
    gain_error_p90_pct: float
    gain_error_max_pct: float
    period_error_median_pct: float
    period_error_p90_pct: float
    period_error_max_pct: float
    gain_half_width_median_pct: float
    period_half_width_median_pct: float
    textbook_gain_error_median_pct: float
    textbook_period_error_median_pct: float
    gain_missed: tuple[str, ...]
    period_missed: tuple[str, ...]

    @property
    def reaches_the_bars(self) -> bool:
        """Coverage, and the errors of best."""
        return (
            min(self.gain_covered, self.period_covered) >= COVERAGE_AT_LEAST
            and self.gain_error_median_pct <= GAIN_ERROR_AT_MOST_PCT
            and self.period_error_median_pct <= PERIOD_ERROR_AT_MOST_PCT
        )


def run(condition: str, plants: Sequence[Plant], bench: Bench, seeds: int) -> Row:
    """Identify every plant once a seed; at least one test must not be refused."""
    outcomes = [
        (plant, measure(sampled_relay(plant, bench, 1000 * i + seed)))  # no two plants see the same noise
        for i, plant in enumerate(plants)
        for seed in range(seeds)
    ]
    found = [(plant, outcome) for plant, outcome in outcomes if isinstance(outcome, Findings)]
    gains = [(plant.ultimate_gain, f.ultimate.ultimate_gain) for plant, f in found]
    periods = [(plant.ultimate_period_s, f.ultimate.ultimate_period_s) for plant, f in found]
    gain_missed = tuple(p.name for (p, _), (truth, i) in zip(found, gains, strict=True) if not i.low <= truth <= i.high)
    period_missed = tuple(
        p.name for (p, _), (truth, i) in zip(found, periods, strict=True) if not i.low <= truth <= i.high
    )
    gain_errors = 100 * np.abs([i.best / truth - 1 for truth, i in gains])
    period_errors = 100 * np.abs([i.best / truth - 1 for truth, i in periods])
    textbook = [(p, f.describing_function) for p, f in found]
    return Row(
        condition=condition,
        tests=len(outcomes),
        refused=len(outcomes) - len(found),
        gain_covered=1 - len(gain_missed) / len(found),
        period_covered=1 - len(period_missed) / len(found),
        gain_error_median_pct=float(np.median(gain_errors)),
        gain_error_p90_pct=float(np.percentile(gain_errors, 90)),
        gain_error_max_pct=float(np.max(gain_errors)),
        period_error_median_pct=float(np.median(period_errors)),
        period_error_p90_pct=float(np.percentile(period_errors, 90)),
        period_error_max_pct=float(np.max(period_errors)),
        gain_half_width_median_pct=50 * float(np.median([log(i.high / i.low) for _, i in gains])),
        period_half_width_median_pct=50 * float(np.median([log(i.high / i.low) for _, i in periods])),
        textbook_gain_error_median_pct=100
        * float(np.median([abs(1 / q.gain / p.ultimate_gain - 1) for p, q in textbook])),
        textbook_period_error_median_pct=100
        * float(np.median([abs(2 * np.pi / q.frequency_rad_per_s / p.ultimate_period_s - 1) for p, q in textbook])),
        gain_missed=gain_missed,
        period_missed=period_missed,
    )


def well_conditioned() -> tuple[Plant, ...]:
    """The plants of the batch where a phase error moves Ku by no more than four times itself."""
    return tuple(plant for plant in reference_batch() if plant.kappa <= KAPPA_AT_MOST)


def fresh_plants(count: int, seed: int) -> tuple[Plant, ...]:
    """Plants drawn afresh: 4 to 8 lags over 1.5 decades, dead time, half with a zero, a third with a damped pair,
    a fifth integrating.  Truth by root search, which the reference batch checks.
    """
    rng = np.random.default_rng(seed)
    plants = []
    for i in range(count):
        shape = Rational(
            gain=1.0,
            lags_s=tuple(float(10 ** rng.uniform(-1.5, 0.0)) for _ in range(rng.integers(4, 9))),
            dead_time_s=float(rng.uniform(0.0, 0.5)),
            zero_s=float(rng.uniform(-0.4, 0.4)) if rng.random() < 0.5 else 0.0,
            quadratic=(float(q := 10 ** rng.uniform(-2.0, -0.5)), float(2 * rng.uniform(0.3, 0.9) * q**0.5))
            if rng.random() < 1 / 3
            else (0.0, 0.0),
            integrators=int(rng.random() < 0.2),
        )
        gain, period_s = ultimate_of(shape)
        plants.append(
            Plant(
                name=f"fresh {i}",
                lags_s=shape.lags_s,
                dead_time_s=shape.dead_time_s,
                zero_s=shape.zero_s,
                quadratic=shape.quadratic if shape.quadratic[0] else None,
                is_integrating=bool(shape.integrators),
                ultimate_gain=gain,
                ultimate_period_s=period_s,
            )
        )
    return tuple(plants)


def rows(*, with_all: bool) -> list[Row]:
    """The reference row first."""
    bench = Bench()
    table = [run("batch, kappa <= 4", well_conditioned(), bench, seeds=3)]
    if with_all:
        batch = well_conditioned()
        table += [
            run("fresh plants", fresh_plants(150, seed=31), bench, seeds=2),
            run("fresh plants, equal steps", fresh_plants(150, seed=32), replace(bench, bias_ratio=0.0), seeds=1),
            run("whole batch", reference_batch(), bench, seeds=2),
            run("equal steps", batch, replace(bench, bias_ratio=0.0), seeds=2),
            run("no noise", batch, replace(bench, noise_ratio=0.0), seeds=1),
            run("noise 10 %", batch, replace(bench, noise_ratio=0.1), seeds=2),
            run(
                "scan Tu/100, no latency",
                batch,
                replace(bench, scans_per_ultimate_period=100, latency_scans=0),
                seeds=2,
            ),
            run(
                "scan Tu/20, two scans of latency",
                batch,
                replace(bench, scans_per_ultimate_period=20, latency_scans=2),
                2,
            ),
            run("6 switches", batch, replace(bench, switches=6), seeds=2),
            run("drift of 5 % of the swing per Tu", batch, replace(bench, drift_ratio=0.05), seeds=2),
        ]
    return table


def main(arguments: Sequence[str] | None = None) -> int:
    """Print the table; 1 where the reference row misses a bar."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.identification", description=__doc__)
    parser.add_argument(
        "--all", action="store_true", help="also fresh plants and harder conditions (about two minutes)"
    )
    parser.add_argument("--json", action="store_true", help="one JSON document on standard output")
    chosen = parser.parse_args(arguments)
    table = rows(with_all=chosen.all)
    if chosen.json:
        print(
            json.dumps(
                {"rows": [asdict(row) for row in table], "reaches_the_bars": table[0].reaches_the_bars}, indent=1
            )
        )
    else:
        print(
            "condition                          tests  covered Ku Tu  error med/p90/max Ku ; Tu  half width  textbook"
        )
        for row in table:
            print(
                f"{row.condition:34} {row.tests:5}  {row.gain_covered:.3f} {row.period_covered:.3f}  "
                f"{row.gain_error_median_pct:.2f}/{row.gain_error_p90_pct:.1f}/{row.gain_error_max_pct:.0f} ; "
                f"{row.period_error_median_pct:.2f}/{row.period_error_p90_pct:.1f}/{row.period_error_max_pct:.0f}  "
                f"{row.gain_half_width_median_pct:.1f} {row.period_half_width_median_pct:.1f}  "
                f"{row.textbook_gain_error_median_pct:.0f} {row.textbook_period_error_median_pct:.0f}"
            )
    return 0 if table[0].reaches_the_bars else 1


if __name__ == "__main__":
    sys.exit(main())
