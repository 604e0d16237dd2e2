"""Settings from one PID form to another: exact, or refused with the reason.

Without a derivative filter, ideal K (1 + 1/(Ti s) + Td s), series k (1 + 1/(ti s)) (1 + td s) and
parallel Kp + Ki/s + Kd s are the same polynomial in other coefficients (Astrom & Hagglund, PID
Controllers, 1995): multiplying the series out gives f = 1 + td/ti, K = k f, Ti = ti f, Td = td / f.
The way back solves a quadratic, so it exists only for Ti >= 4 Td.  A derivative filter Td/N is not
carried over: its time follows Td, and is not quite the same filter in the other form.
"""

from math import isfinite, sqrt

from autotune.loop.outcome import Refusal
from autotune.loop.settings import PidForm, PidSettings

_ROUNDING_RATIO = 1e-9
"""Ti may miss 4 Td by this much before it counts as less: the limit case is a published rule's own."""


def check_settings(settings: PidSettings) -> Refusal | None:
    """Refuse settings that are no PID: a gain or a time that is not finite and above zero."""
    for name, number in (
        ("controller gain", settings.controller_gain),
        ("integral time", settings.integral_time_s),
        ("derivative time", settings.derivative_time_s),
    ):
        if number is not None and not (isfinite(number) and number > 0.0):
            return Refusal(
                "SETTINGS_INVALID",
                f"a {name} of {number!r} is not a finite number above zero",
                "give a number above zero, or leave the term off",
            )
    return None


def to_form(settings: PidSettings, form: PidForm) -> PidSettings | Refusal:
    """The same controller in another form; gain in %OP/%PV, times in seconds, ``None`` is off.

    Exact without derivative filter.  Refuses ``SETTINGS_INVALID``, and ``SERIES_CANNOT_HOLD`` when an
    ideal or parallel PID has Ti < 4 Td, which no series block with real times can hold.
    """
    if (refusal := check_settings(settings)) is not None:
        return refusal
    gain, ti_s, td_s = settings.controller_gain, settings.integral_time_s, settings.derivative_time_s
    is_series = settings.form is PidForm.SERIES
    if ti_s is None or td_s is None or is_series == (form is PidForm.SERIES):
        return PidSettings(form, gain, ti_s, td_s)
    if is_series:
        factor_ratio = 1.0 + td_s / ti_s
        return PidSettings(form, gain * factor_ratio, ti_s * factor_ratio, td_s / factor_ratio)
    discriminant = 1.0 - 4.0 * td_s / ti_s
    if not discriminant >= -_ROUNDING_RATIO:
        return Refusal(
            "SERIES_CANNOT_HOLD",
            f"the integral time is {ti_s / td_s:.3g} times the derivative time, and a series block needs at least 4",
            "choose settings with less derivative, or a PI",
        )
    root_ratio = sqrt(max(0.0, discriminant))
    return PidSettings(
        form, 0.5 * gain * (1.0 + root_ratio), 0.5 * ti_s * (1.0 + root_ratio), 0.5 * ti_s * (1.0 - root_ratio)
    )
