"""What one point of the frequency response says about a margin: a bound, and no more than that."""

from math import pi

from autotune.loop.settings import PidForm, PidSettings


def sensitivity_at_least(
    settings: PidSettings, filter_ratio: float | None, ultimate_gain: float, ultimate_period_s: float
) -> float:
    """The least that the loop's peak sensitivity Ms can be with these settings (no unit).

    At wu = 2 pi/Tu the plant is -1/Ku, so the loop there is -C(j wu)/Ku, and Ms, the largest
    |1/(1 + C G)| over all frequencies, is at least its size at this one.  The true Ms may be far
    larger, so a small number here promises nothing; infinite when the loop runs through -1.
    ``filter_ratio`` is N of a derivative filter Td/N (``None``: none); Ku in %OP/%PV, Tu in seconds.
    """
    s = 2j * pi / ultimate_period_s
    ti_s, td_s = settings.integral_time_s, settings.derivative_time_s
    integral = 0.0 if ti_s is None else 1.0 / (ti_s * s)
    filter_time_s = 0.0 if td_s is None or filter_ratio is None else td_s / filter_ratio
    derivative = 0.0 if td_s is None else td_s * s / (1.0 + filter_time_s * s)
    if settings.form is PidForm.SERIES:
        controller = settings.controller_gain * (1.0 + integral) * (1.0 + derivative)
    else:
        controller = settings.controller_gain * (1.0 + integral + derivative)
    distance = abs(1.0 - controller / ultimate_gain)
    return 1.0 / distance if distance > 0.0 else float("inf")
