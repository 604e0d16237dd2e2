"""The rule table against the values that others print, and against the errors that others make."""

import json
from pathlib import Path
from typing import Any

import control
import numpy as np
import pytest

from autotune.design.margins import sensitivity_at_least
from autotune.design.rules import ULTIMATE_RULES, UltimateRule
from autotune.loop.conversion import to_form
from autotune.loop.outcome import Refusal
from autotune.loop.settings import PidForm, PidSettings

REFERENCE = Path(__file__).parents[1] / "reference"
CHECKS: dict[str, dict[str, Any]] = {
    check["id"]: check for check in json.loads((REFERENCE / "checks.json").read_text(encoding="utf-8"))
}
RULES = {rule.name: rule for rule in ULTIMATE_RULES}


def _numbers(name: str, ultimate_gain: float, ultimate_period_s: float) -> list[float]:
    settings = RULES[name].settings(ultimate_gain, ultimate_period_s)
    numbers = (settings.controller_gain, settings.integral_time_s, settings.derivative_time_s)
    return [number for number in numbers if number is not None]


@pytest.mark.parametrize(
    ("name", "identifier", "key", "rel"),
    [
        ("ziegler-nichols-p", "TR-ZNU", "P", 1e-8),
        ("ziegler-nichols-pi", "TR-ZNU", "PI", 1e-8),
        ("ziegler-nichols-pid", "TR-ZNU", "PID", 1e-8),
        ("pessen-pid", "TR-MOD", "Pessen", 1e-6),
        ("some-overshoot-pid", "TR-MOD", "some", 1e-6),
        ("no-overshoot-pid", "TR-MOD", "none", 1e-6),
        ("tyreus-luyben-pi", "TR-TL", "PI", 1e-6),
        ("tyreus-luyben-pid", "TR-TL", "PID", 1e-6),
    ],
)
def test_each_rule_gives_its_printed_example(name: str, identifier: str, key: str, rel: float) -> None:
    check = CHECKS[identifier]
    assert _numbers(name, check["inputs"]["Ku"], check["inputs"]["Tu"]) == pytest.approx(
        check["expected"][key], rel=rel
    )


def test_every_rule_of_the_table_has_a_printed_example_and_every_column() -> None:
    assert len(RULES) == len(ULTIMATE_RULES) == 8
    for rule in ULTIMATE_RULES:
        assert rule.name == rule.name.lower().replace(" ", "-")
        assert all([rule.title, rule.source, rule.suits, rule.limits])
        assert rule.form is PidForm.IDEAL
        assert any(year in rule.source for year in ("1942", "1954", "1973", "1992", "1997"))


@pytest.mark.parametrize(
    ("name", "identifier", "key"),
    [
        ("ziegler-nichols-pid", "TR-ZNU", "parallel_PID"),
        ("pessen-pid", "TR-MOD", "parallel_Pessen"),
        ("some-overshoot-pid", "TR-MOD", "parallel_some"),
        ("no-overshoot-pid", "TR-MOD", "parallel_none"),
    ],
)
def test_the_parallel_gains_are_those_commonly_printed(name: str, identifier: str, key: str) -> None:
    """Common error: "0.0667 Ku Tu", "Ku Tu/9" and "1.75 Ku/Tu" taken for times or for another rule."""
    check = CHECKS[identifier]
    gain, ti_s, td_s = _numbers(name, check["inputs"]["Ku"], check["inputs"]["Tu"])
    expected = check["expected"][key]
    assert [gain / ti_s, gain * td_s] == pytest.approx([expected["Ki"], expected["Kd"]], rel=1e-6)
    assert expected.get("Kp", gain) == pytest.approx(gain)


@pytest.mark.parametrize("columns", ["expected", "recomputed"])
def test_the_continuous_cycling_example_of_seborg_comes_out(columns: str) -> None:
    check = CHECKS["WX-SEB1"]
    column = check[columns]
    for name, key in (("ziegler-nichols-pid", "ZN"), ("tyreus-luyben-pid", "TL")):
        assert _numbers(name, column["Ku"], column["Tu"]) == pytest.approx(column[key], rel=0.01)


def test_the_band_arithmetic_of_the_trade_comes_out() -> None:
    """TF-01, common practice, no source: 2.2 times the ultimate band is 1/2.2, not quite 0.45, of the gain."""
    check = CHECKS["TF-01"]
    expected = check["expected"]
    ku, tu_s = 100.0 / check["inputs"]["PBu_pct"], check["inputs"]["seconds"] / check["inputs"]["cycles"]
    assert (ku, tu_s) == pytest.approx((expected["Ku"], expected["Tu"]))
    assert 100.0 / _numbers("ziegler-nichols-p", ku, tu_s)[0] == pytest.approx(expected["P"]["PB"])
    gain, ti_s = _numbers("ziegler-nichols-pi", ku, tu_s)
    assert gain == pytest.approx(expected["PI_gain_0p45"])
    assert 100.0 / gain == pytest.approx(expected["PI"]["PB"], rel=0.011)
    assert ti_s == pytest.approx(expected["PI"]["Ti"])
    gain, ti_s, td_s = _numbers("ziegler-nichols-pid", ku, tu_s)
    assert [100.0 / gain, ti_s, td_s] == pytest.approx(list(expected["PID"].values()), rel=1e-5)


def test_the_misprints_of_the_literature_are_not_in_the_table() -> None:
    """Errors 1, 5 and 7: ZN PI as 0.4 Ku and 0.8 Tu; Tyreus-Luyben PI as exactly 0.31; a third as 0.33."""
    zn, tl, some = RULES["ziegler-nichols-pi"], RULES["tyreus-luyben-pi"], RULES["some-overshoot-pid"]
    assert zn.gain_ratio == 0.45
    assert zn.integral_ratio == pytest.approx(0.8333333)
    assert tl.gain_ratio == 0.3125
    assert some.gain_ratio == pytest.approx(0.3333333, rel=1e-6)
    assert RULES["tyreus-luyben-pid"].integral_ratio == 2.2  # 27 for 2.2 x 12 is a misprint of 26.4


@pytest.mark.parametrize("name", ["no-overshoot-pid", "some-overshoot-pid", "pessen-pid"])
def test_three_rules_do_not_fit_a_series_block(name: str) -> None:
    """Error 7."""
    refusal = to_form(RULES[name].settings(10.0, 10.0), PidForm.SERIES)
    assert isinstance(refusal, Refusal)
    assert refusal.code == "SERIES_CANNOT_HOLD"


@pytest.mark.parametrize("tu_s", [0.1, 1.0, 3.7, 11.973855, 1234.5])
def test_ziegler_nichols_pid_sits_exactly_on_the_series_limit(tu_s: float) -> None:
    """Error 22 and PF-03: Ti = 4 Td gives K/2, Ti/2, Ti/2, whatever the period's last digit is."""
    ideal = RULES["ziegler-nichols-pid"].settings(10.0, tu_s)
    series = to_form(ideal, PidForm.SERIES)
    assert isinstance(series, PidSettings)
    half = ideal.integral_time_s / 2.0 if ideal.integral_time_s else None
    assert series.controller_gain == pytest.approx(3.0, rel=1e-4)
    assert series.integral_time_s == pytest.approx(half, rel=1e-4)
    assert series.derivative_time_s == pytest.approx(half, rel=1e-4)


LAGS = control.tf([1.0], [1.0, 3.0, 3.0, 1.0])
LAGS_KU, LAGS_TU_S = 8.0, 2.0 * np.pi / np.sqrt(3.0)
"""1/(s + 1)^3 crosses -180 degrees at sqrt(3) rad/s with a gain of 1/8: closed form."""


def _controller(rule: UltimateRule) -> control.TransferFunction:
    settings = rule.settings(LAGS_KU, LAGS_TU_S)
    gain, ti_s, td_s = settings.controller_gain, settings.integral_time_s, settings.derivative_time_s
    controller = control.tf([gain], [1.0])
    if ti_s is not None:
        controller = controller + control.tf([gain], [ti_s, 0.0])
    if td_s is not None:
        controller = controller + control.tf([gain * td_s, 0.0], [td_s / 10.0, 1.0])
    return controller


def _largest_sensitivity(rule: UltimateRule) -> float:
    frequencies = np.logspace(-2, 2, 20000)
    loop = control.frequency_response(_controller(rule) * LAGS, frequencies)
    return float(np.max(1.0 / np.abs(1.0 + loop.complex.squeeze())))


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
def test_three_equal_lags_have_the_peak_sensitivity_of_rb_04(name: str, key: str) -> None:
    """RB-04, by python-control's frequency response: ZN PI is nearly unstable, as its limits of use say."""
    assert _largest_sensitivity(RULES[name]) == pytest.approx(CHECKS["RB-04"]["expected"][key]["Ms"], rel=0.005)


@pytest.mark.parametrize("name", RULES)
def test_the_bound_on_the_sensitivity_is_its_value_at_the_ultimate_frequency(name: str) -> None:
    rule = RULES[name]
    bound = sensitivity_at_least(rule.settings(LAGS_KU, LAGS_TU_S), 10.0, LAGS_KU, LAGS_TU_S)
    at_wu = (_controller(rule) * LAGS)(1j * np.sqrt(3.0))
    assert bound == pytest.approx(1.0 / abs(1.0 + at_wu), rel=1e-6)
    assert bound <= _largest_sensitivity(rule) * (1.0 + 1e-6)


def test_half_the_ultimate_gain_alone_doubles_disturbances_at_the_ultimate_frequency() -> None:
    """Closed form: 1/(1 - 0.5)."""
    settings = PidSettings(PidForm.IDEAL, 4.0, None, None)
    assert sensitivity_at_least(settings, None, 8.0, 3.0) == 2.0
    assert sensitivity_at_least(PidSettings(PidForm.IDEAL, 8.0, None, None), None, 8.0, 3.0) == np.inf


def test_a_series_block_has_the_bound_of_its_ideal_twin() -> None:
    series = PidSettings(PidForm.SERIES, 1.0, 8.0, 2.0)
    ideal = to_form(series, PidForm.IDEAL)
    assert isinstance(ideal, PidSettings)
    assert sensitivity_at_least(series, None, 8.0, 12.0) == pytest.approx(sensitivity_at_least(ideal, None, 8.0, 12.0))


def _is_stable(process: dict[str, Any], name: str) -> bool:
    """Nyquist: the loop's return difference turns by -90 degrees for each integrator, and by no more, if stable."""
    s = 1j * np.logspace(-4.0, 2.0, 100_000) * 2.0 * np.pi / process["ultimate_period_s"]
    plant = (
        process["gain"] * np.exp(-process["dead_time_s"] * s) / np.prod([1.0 + lag * s for lag in process["lags_s"]], 0)
    )
    settings = RULES[name].settings(process["ultimate_gain"], process["ultimate_period_s"])
    gain, ti_s, td_s = settings.controller_gain, settings.integral_time_s, settings.derivative_time_s
    integral = 0.0 if ti_s is None else 1.0 / (ti_s * s)
    derivative = 0.0 if td_s is None else td_s * s / (1.0 + td_s * s / 10.0)
    turn = np.unwrap(np.angle(1.0 + gain * (1.0 + integral + derivative) * plant))
    expected = 0.0 if ti_s is None else np.pi / 2.0
    return bool(abs(turn[-1] - turn[0] - expected) < 0.5)


@pytest.mark.parametrize(
    ("name", "process", "is_stable"),
    [
        ("tyreus-luyben-pi", "P2 T=1", True),
        ("tyreus-luyben-pi", "P2 T=500", False),
        ("ziegler-nichols-pi", "P2 T=50", False),
        ("tyreus-luyben-pid", "P1 T=0.02", False),
        ("pessen-pid", "P1 T=0.2", False),
        ("tyreus-luyben-pi", "P1 T=0.02", True),
    ],
)
def test_the_risks_that_are_told_are_real_on_the_test_batch(name: str, process: str, is_stable: bool) -> None:
    """Two large lags with almost no dead time, and dead time alone, on the batch of Astrom & Hagglund 2004/2006."""
    batch = json.loads((REFERENCE / "reference_batch.json").read_text(encoding="utf-8"))["processes"]
    found = next(entry for entry in batch if entry["id"] == process)
    assert _is_stable(found, name) is is_stable
