"""Margins against closed forms, printed tables and python-control, continuous and sampled."""

from dataclasses import replace
from math import asin, degrees, exp, log, pi, sqrt

import control
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.design.block_response import block_equation, block_terms
from autotune.design.loop_grid import seen_plant
from autotune.design.margins import Margins, margins, turns_say_stable
from autotune.design.responses import closed_loop
from autotune.design.rules import ULTIMATE_RULES
from autotune.identify.model import ProcessModel
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.pid_block import at_rest, pid_law, step
from autotune.loop.settings import (
    Algorithm,
    AntiWindup,
    BlockDescription,
    DerivativeOn,
    PidForm,
    PidSettings,
)
from tests.design.plants import THREE_LAGS, checks, plant

IDEAL = BlockDescription(PidForm.IDEAL)
INTEGRATOR = plant(dead_time_s=1.0, integrators=1)
RULES = {rule.name: rule for rule in ULTIMATE_RULES}


def _continuous(model: ProcessModel, settings: PidSettings, block: BlockDescription = IDEAL) -> Margins:
    return margins(seen_plant(model, None), block, settings)


@pytest.mark.parametrize(("identifier", "ti_s"), [("RB-02", None), ("RB-03", 8.0)])
def test_the_margins_of_skogestads_table_come_out(identifier: str, ti_s: float | None) -> None:
    """RB-02 and RB-03: L = 0.5 e^-s/s (GM = pi exactly) and with Ti = 8."""
    expected = checks()[identifier]["expected"]
    found = _continuous(INTEGRATOR, PidSettings(PidForm.IDEAL, 0.5, ti_s))
    assert (
        found.gain_margin_ratio,
        found.phase_margin_deg,
        found.peak_sensitivity,
        found.peak_complementary_sensitivity,
        found.delay_margin_s,
    ) == pytest.approx(tuple(expected[key] for key in ("GM", "PM", "Ms", "Mt", "delay_margin")), rel=1e-5)
    assert found.delay_margin_scan_ratio is None


@pytest.mark.parametrize("ms", ["1.4", "1.6", "1.7", "2.0"])
def test_the_bounds_that_ms_sets_hold(ms: str) -> None:
    """RB-01 on a loop with that Ms, found by bisection of the gain."""
    low, high = 0.01, 7.9
    for _ in range(30):
        middle = (low + high) / 2.0
        found = _continuous(THREE_LAGS, PidSettings(PidForm.IDEAL, middle, None))
        assert found.peak_sensitivity is not None
        low, high = (middle, high) if found.peak_sensitivity < float(ms) else (low, middle)
    gain_margin, phase_margin = checks()["RB-01"]["expected"][ms]
    assert (float(ms) / (float(ms) - 1.0), degrees(2.0 * asin(0.5 / float(ms)))) == pytest.approx(
        (gain_margin, phase_margin), rel=1e-4
    )
    assert found.gain_margin_ratio is not None
    assert found.gain_margin_ratio >= gain_margin * 0.999
    if found.phase_margin_deg is not None:
        assert found.phase_margin_deg >= phase_margin * 0.999


@pytest.mark.parametrize(
    ("name", "key"),
    [
        ("ziegler-nichols-pi", "ZN PI"),
        ("ziegler-nichols-pid", "ZN PID"),
        ("tyreus-luyben-pi", "TL PI"),
        ("tyreus-luyben-pid", "TL PID"),
        ("no-overshoot-pid", "none"),
    ],
)
def test_rules_on_three_lags_have_the_recomputed_margins(name: str, key: str) -> None:
    """RB-04."""
    expected = checks()["RB-04"]["expected"][key]
    found = _continuous(THREE_LAGS, RULES[name].settings(8.0, 2.0 * pi / sqrt(3.0)))
    assert (found.peak_sensitivity, found.gain_margin_ratio, found.phase_margin_deg) == pytest.approx(
        (expected["Ms"], expected["GM"], expected["PM"]), rel=0.005
    )


@pytest.mark.parametrize(
    ("name", "key"),
    [
        ("ziegler-nichols-pi", "ZN PI"),
        ("ziegler-nichols-pid", "ZN PID"),
        ("tyreus-luyben-pi", "TL PI"),
        ("pessen-pid", "Pessen"),
    ],
)
def test_rules_on_a_lag_with_dead_time_have_the_recomputed_ms(name: str, key: str) -> None:
    """RB-05: L/T = 0.2."""
    model = plant(1.0, dead_time_s=0.2)
    seen = seen_plant(model, None)
    wu = seen.ultimate_rad_per_s
    ku = float(1.0 / abs(model.response(np.array([wu]))[0]))
    expected = checks()["RB-05"]["expected"][key]
    settings = RULES[name].settings(ku, 2.0 * pi / wu)
    assert settings.controller_gain == pytest.approx(expected["Kc"], rel=1e-4)
    assert margins(seen, IDEAL, settings).peak_sensitivity == pytest.approx(expected["Ms"], rel=0.005)


def test_a_quarter_decay_has_the_damping_of_its_closed_form() -> None:
    """RB-06: a pure integrator with a lag under P is of second order; zeta 0.2155 decays to a quarter."""
    expected = checks()["RB-06"]["expected"]
    zeta = -log(0.25) / sqrt(4.0 * pi**2 + log(0.25) ** 2)
    assert zeta == pytest.approx(expected["zeta"])
    assert exp(-pi * zeta / sqrt(1.0 - zeta**2)) == pytest.approx(expected["overshoot"])
    gain = 1.0 / (4.0 * zeta**2)  # s^2 + s + K
    found = _continuous(plant(1.0, integrators=1), PidSettings(PidForm.IDEAL, gain, None))
    assert found.peak_complementary_sensitivity == pytest.approx(1.0 / (2.0 * zeta * sqrt(1.0 - zeta**2)), rel=1e-6)


@pytest.mark.parametrize("form", list(PidForm))
@pytest.mark.parametrize("model", [THREE_LAGS, plant(5.0, 1.0, zeros_s=(-0.5,)), plant(1.0, 0.3, integrators=1)])
def test_continuous_margins_agree_with_python_control(model: ProcessModel, form: PidForm) -> None:
    settings = PidSettings(form, 0.4, 6.0, 0.5)
    s = control.tf("s")
    derivative = 0.5 * s / (1.0 + 0.05 * s)
    integral = 1.0 / (6.0 * s)
    shape = (1 + integral) * (1 + derivative) if form is PidForm.SERIES else 1 + integral + derivative
    loop = 0.4 * shape * control.tf(list(model.numerator), list(model.denominator))
    gain_margin, phase_margin, *_ = control.margin(loop)
    found = _continuous(model, settings, BlockDescription(form))
    assert found.is_stable
    assert found.gain_margin_ratio == pytest.approx(gain_margin, rel=1e-6)
    assert found.phase_margin_deg == pytest.approx(phase_margin, rel=1e-6)
    w = np.logspace(-3.0, 3.0, 40_000)
    response = control.frequency_response(loop, w).complex.squeeze()
    assert found.peak_sensitivity == pytest.approx(float(np.max(1.0 / np.abs(1.0 + response))), rel=1e-5)
    at_rest_ratio = 1.0  # with an integral
    assert found.peak_complementary_sensitivity == pytest.approx(
        max(at_rest_ratio, float(np.max(np.abs(response / (1.0 + response))))), rel=1e-5
    )


def _sampled_by_control(model: ProcessModel, scan_s: float, delay_scans: int) -> control.TransferFunction:
    held = control.c2d(control.tf(list(model.numerator), list(model.denominator)), scan_s, "zoh")
    return held * control.tf([1.0], [1.0] + [0.0] * delay_scans, scan_s) if delay_scans else held


@pytest.mark.parametrize(("scans", "delay_scans"), [(20, 0), (20, 1), (40, 3), (100, 0)])
def test_sampled_margins_agree_with_python_control(scans: int, delay_scans: int) -> None:
    """The block's equation is PF-09's backward difference, written out by hand here."""
    h = 2.0 * pi / sqrt(3.0) / scans
    k, ti, td, n = 1.6, 3.0, 0.6, 10.0
    z = control.tf("z")
    z.dt = h
    back = 1 / z
    controller = k * (1 + h / ti / (1 - back) + n * td * (1 - back) / (td + n * h - td * back))
    loop = controller * _sampled_by_control(THREE_LAGS, h, delay_scans)
    seen = seen_plant(THREE_LAGS, h, delay_scans * h)
    found = margins(seen, IDEAL, PidSettings(PidForm.IDEAL, k, ti, td))
    w = np.linspace(1e-3, pi / h, 200_000)
    response = loop(np.exp(1j * w * h))
    assert found.peak_sensitivity == pytest.approx(float(np.max(1.0 / np.abs(1.0 + response))), rel=1e-5)
    turned = np.flatnonzero((np.diff(np.sign(response.imag)) != 0) & (response.real[:-1] < 0.0))
    assert found.gain_margin_ratio == pytest.approx(float(np.min(-1.0 / response.real[turned])), rel=1e-3)
    crossed = np.flatnonzero(np.diff(np.sign(np.abs(response) - 1.0)) != 0)
    phase_margin_deg = np.min(np.abs(np.degrees(np.angle(-response[crossed]))))
    assert found.phase_margin_deg == pytest.approx(float(phase_margin_deg), rel=1e-3)
    assert found.delay_margin_s is not None
    assert found.delay_margin_scan_ratio == pytest.approx(found.delay_margin_s / h)


@pytest.mark.parametrize(("ti_s", "td_s"), [(1.9, None), (2.0, 0.5)])
def test_sampling_and_computing_delay_take_margin_from_a_continuous_design(ti_s: float, td_s: float | None) -> None:
    """Ms 1.40 when continuous; each coarser scan, and then a scan of delay, leaves less."""
    low, high = 0.01, 6.0
    for _ in range(30):
        middle = (low + high) / 2.0
        peak = _continuous(THREE_LAGS, PidSettings(PidForm.IDEAL, middle, ti_s, td_s)).peak_sensitivity
        low, high = (middle, high) if peak is not None and peak < 1.4 else (low, middle)
    period_s = 2.0 * pi / sqrt(3.0)
    peaks = [1.4]
    for scans, delay_scans in ((100, 0), (40, 0), (20, 0), (20, 1)):
        seen = seen_plant(THREE_LAGS, period_s / scans, delay_scans * period_s / scans)
        peak = margins(seen, IDEAL, PidSettings(PidForm.IDEAL, low, ti_s, td_s)).peak_sensitivity
        assert peak is not None
        peaks.append(peak)
    assert peaks == sorted(peaks)
    assert peaks[1] == pytest.approx(1.4, abs=0.05)
    assert peaks[-1] > 1.5


def test_the_delay_margin_is_the_least_over_all_gain_crossings() -> None:
    """A resonance crosses |L| = 1 again at a higher frequency, where a short delay is enough."""
    model = plant(quadratic=(1.0, 0.1), gain=0.4, integrators=1)
    found = _continuous(model, PidSettings(PidForm.IDEAL, 0.15, None))
    loop = 0.15 * control.tf(list(model.numerator), list(model.denominator))
    _, phases, _, _, at, _ = control.stability_margins(loop, returnall=True)
    delays = [radians / w for radians, w in zip(np.radians(np.mod(phases, 360.0)), at, strict=True)]
    assert found.delay_margin_s == pytest.approx(min(delays), rel=1e-6)


@pytest.mark.parametrize(
    ("model", "settings"),
    [
        (THREE_LAGS, PidSettings(PidForm.IDEAL, 8.1, None)),
        (THREE_LAGS, PidSettings(PidForm.IDEAL, 3.0, 0.3)),
        (INTEGRATOR, PidSettings(PidForm.IDEAL, 0.5, 0.8)),
    ],
)
def test_an_unstable_loop_has_no_margins(model: ProcessModel, settings: PidSettings) -> None:
    found = _continuous(model, settings)
    assert found == Margins(False, None, None, None, None, None, None)


def test_a_loop_that_never_crosses_has_no_bound() -> None:
    found = _continuous(plant(1.0, gain=0.5), PidSettings(PidForm.IDEAL, 1.0, None))
    assert (found.gain_margin_ratio, found.phase_margin_deg, found.delay_margin_s) == (None, None, None)


@given(
    k=st.floats(0.05, 12.0),
    ti_s=st.one_of(st.none(), st.floats(0.3, 30.0)),
    td_s=st.one_of(st.none(), st.floats(0.05, 3.0)),
    dead_time_s=st.floats(0.0, 2.0),
    is_integrating=st.booleans(),
)
def test_the_count_of_turns_agrees_with_the_poles_of_the_closed_loop(
    k: float, ti_s: float | None, td_s: float | None, dead_time_s: float, is_integrating: bool
) -> None:
    """Nyquist against the roots of the sampled characteristic polynomial, away from the border itself."""
    model = plant(1.0, 0.4, dead_time_s=dead_time_s, integrators=int(is_integrating))
    seen = seen_plant(model, 0.1)
    settings = PidSettings(PidForm.IDEAL, k, ti_s, td_s)
    assert seen.held is not None
    poles = np.roots(closed_loop(seen.held, block_equation(IDEAL, settings, 0.1)).denominator)
    largest = float(np.max(np.abs(poles)))
    if abs(largest - 1.0) < 2e-3:
        return
    assert margins(seen, IDEAL, settings).is_stable is (largest < 1.0)


def test_two_integrators_start_on_the_negative_axis() -> None:
    w = np.geomspace(1e-3, 1e3, 2000)
    lead = (1.0 + 3j * w) / (1j * w) ** 2 / (1.0 + 0.1j * w)
    lag = (1.0 + 0.1j * w) / (1j * w) ** 2 / (1.0 + 3j * w)
    assert turns_say_stable(lead, 2)
    assert not turns_say_stable(lag, 2)


BLOCKS = [
    BlockDescription(
        form, derivative_on=on, derivative_filter_ratio=ratio, pv_filter_time_s=filter_s, setpoint_weight=b
    )
    for form, on, ratio, filter_s, b in (
        (PidForm.IDEAL, DerivativeOn.PV, 10.0, 0.0, 1.0),
        (PidForm.SERIES, DerivativeOn.PV, 8.0, 0.7, 0.5),
        (PidForm.SERIES, DerivativeOn.ERROR, None, 0.0, 1.0),
        (PidForm.PARALLEL, DerivativeOn.ERROR, 5.0, 0.3, 0.0),
    )
]


@pytest.mark.parametrize("block", BLOCKS)
@pytest.mark.parametrize("algorithm", list(Algorithm))
@pytest.mark.parametrize(("ti_s", "td_s"), [(6.0, 1.2), (6.0, None), (None, 1.2), (None, None)])
def test_the_linear_equation_is_the_block_step_by_step(
    block: BlockDescription, algorithm: Algorithm, ti_s: float | None, td_s: float | None
) -> None:
    """Side by side with ``loop.pid_block`` on an arbitrary course of setpoint and PV, far from limits."""
    described = replace(block, algorithm=algorithm, scan_s=0.25, anti_windup=AntiWindup.STOP)
    settings = PidSettings(block.form, 2.0, ti_s, td_s)
    law = pid_law(described, settings, ControlAction.REVERSE, -1e9, 1e9)
    assert not isinstance(law, Refusal)
    k = np.arange(60)
    sp, pv = np.where(k > 3, 1.0, 0.0), np.sin(0.3 * k) * (k > 0)
    state = at_rest(law, 0.0, 0.0, 0.0)
    op = []
    for sp_pct, pv_pct in zip(sp, pv, strict=True):
        state, op_pct = step(law, state, float(sp_pct), float(pv_pct))
        op.append(op_pct)
    equation = block_equation(described, settings, 0.25)
    driven = np.convolve(equation.from_sp, sp)[:60] - np.convolve(equation.from_pv, pv)[:60]
    linear = np.zeros(60)
    for i in range(60):
        linear[i] = driven[i] - sum(
            equation.denominator[j] * linear[i - j] for j in range(1, min(i, len(equation.denominator) - 1) + 1)
        )
    assert linear == pytest.approx(op, abs=1e-9)
    w = np.array([0.05, 0.7, 9.0])
    back = np.exp(-1j * w * 0.25)
    by_equation = np.polyval(equation.from_pv[::-1], back) / np.polyval(equation.denominator[::-1], back)
    assert 2.0 * block_terms(described, w, 0.25).response(ti_s, td_s) == pytest.approx(by_equation)


@pytest.mark.parametrize("block", BLOCKS)
def test_a_fast_block_is_the_continuous_one(block: BlockDescription) -> None:
    w = np.array([0.05, 0.7, 3.0])
    fast = block_terms(block, w, 1e-5).response(6.0, 1.2)
    assert block_terms(block, w, None).response(6.0, 1.2) == pytest.approx(fast, rel=1e-3)
