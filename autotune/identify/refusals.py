"""When a record can't be identified: the reason, and what to do next."""

from math import degrees, pi

import numpy as np

from autotune.identify.findings import Cycle, OscillationPoint
from autotune.identify.waveforms import Waveforms
from autotune.loop.outcome import Refusal
from autotune.loop.record import Record

CYCLES_AT_LEAST = 2  # usable ones: one shows no scatter
SAMPLES_PER_CYCLE_AT_LEAST = 8.0  # common practice, no source
SWING_PER_NOISE_AT_LEAST = 3.0  # half peak-to-peak over sigma; common practice, no source
STAMP_PHASE_AT_MOST_RAD = pi / 4  # of what the stamps leave unknown: beyond, it is as large as what is asked for
PHASE_LOW_RAD, PHASE_HIGH_RAD = -1.5 * pi, -pi / 4  # where a relay with hysteresis, latency and hold can swing


def samples_per_cycle(signals: Waveforms, cycles: tuple[Cycle, ...]) -> float:
    """Mean number of samples in a cycle; at least one cycle."""
    from_s, to_s = cycles[0].from_s, cycles[-1].from_s + cycles[-1].period_s
    return float(np.sum((signals.sample_s >= from_s) & (signals.sample_s < to_s))) / len(cycles)


def refusal_of_cycles(record: Record, signals: Waveforms, cycles: tuple[Cycle, ...]) -> Refusal | None:
    """Too few cycles, too few samples in them, or a swing that the noise hides; else ``None``."""
    if len(cycles) < CYCLES_AT_LEAST:
        return Refusal(
            "TOO_FEW_CYCLES",
            f"{len(cycles)} whole cycles with steady steps follow the first one, {CYCLES_AT_LEAST} are needed",
            "let the test swing longer, and see that nothing stops it or changes its steps on the way",
        )
    samples = samples_per_cycle(signals, cycles)
    if samples < SAMPLES_PER_CYCLE_AT_LEAST:
        return Refusal(
            "SCAN_TOO_SLOW",
            f"{samples:.1f} samples a cycle are too few to tell its shape, {SAMPLES_PER_CYCLE_AT_LEAST:.0f} are needed",
            f"read the loop faster than every {record.scan_s:g} s: 20 samples a cycle or more",
        )
    swing = min(cycle.pv_amplitude_pct for cycle in cycles)
    if not swing > SWING_PER_NOISE_AT_LEAST * record.noise_pct:
        return Refusal(
            "SWING_IN_NOISE",
            f"PV swung by +-{swing:.2g} %, and its noise at rest is {record.noise_pct:.2g} % (standard deviation)",
            "use larger steps of the output, or filter the transmitter and tune with the filter in place",
        )
    return None


def refusal_of_point(signals: Waveforms, fundamental: OscillationPoint) -> Refusal | None:
    """Stamps too coarse for this period, or a PV that doesn't follow the output as a plant does; else ``None``."""
    hull_rad = fundamental.frequency_rad_per_s * signals.delay_hull_s
    if not hull_rad <= STAMP_PHASE_AT_MOST_RAD:
        return Refusal(
            "STAMPS_TOO_COARSE",
            f"the stamps leave {1000 * signals.delay_hull_s:.0f} ms either way unknown between output and PV, "
            f"+-{degrees(hull_rad):.0f} degrees of the oscillation",
            "offer the PLC's clock tags, or read and write over a faster link",
        )
    if not PHASE_LOW_RAD <= fundamental.phase_rad <= PHASE_HIGH_RAD:
        return Refusal(
            "PV_NOT_FOLLOWING",
            f"PV swings at {degrees(fundamental.phase_rad):.0f} degrees to the output, no loop under a relay does",
            "check the action (direct or reverse), that the output reaches this valve, and what else moves PV",
        )
    return None
