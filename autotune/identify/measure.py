"""The one entry: a record in, findings or a refusal out."""

from autotune.identify.cautions import cautions
from autotune.identify.cycles import usable_cycles, whole_cycles
from autotune.identify.describing_function import describing_function_point
from autotune.identify.findings import Findings, FindingsOrRefusal
from autotune.identify.fourier import harmonic_points
from autotune.identify.refusals import refusal_of_cycles, refusal_of_point
from autotune.identify.static_gain import balance, static_gain
from autotune.identify.ultimate import infer
from autotune.identify.waveforms import waveforms
from autotune.loop.record import Record


def measure(record: Record) -> FindingsOrRefusal:
    """What was seen in a relay test and what it means, or why it can't be told and what to do.

    Seen: whole cycles, the textbook's describing function and the Fourier point of the fundamental, counted for a
    positive process gain.  Concluded: static gain (signed) where the test shows it, ultimate gain and period.
    """
    signals = waveforms(record)
    cycles = usable_cycles(whole_cycles(signals))
    if refusal := refusal_of_cycles(record, signals, cycles):
        return refusal
    points = harmonic_points(signals, cycles)
    if refusal := refusal_of_point(signals, points[0]):
        return refusal
    means = balance(signals, cycles)
    gain = static_gain(means, points[0], record.action.process_sign)
    return Findings(
        time_base=record.time_base,
        cycles=cycles,
        describing_function=describing_function_point(cycles, record.hysteresis_pct),
        fourier=points[0],
        static_gain=gain,
        ultimate=infer(signals, cycles, points),
        cautions=cautions(record, signals, cycles, means, has_static_gain=gain is not None),
    )
