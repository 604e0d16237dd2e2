"""The rules that need a model, against printed examples and recomputed values, and the errors that others make."""

from collections.abc import Callable
from dataclasses import replace
from functools import partial
from math import inf, pi

import numpy as np
import pytest

from autotune.design import model_laws as laws
from autotune.design.integrator_rules import INTEGRATOR_RULES
from autotune.design.model_rules import MODEL_RULES, Basis, ModelRule
from autotune.design.readings import plant_readings, settings_by, ultimate_reading
from autotune.design.reduction import Ipdt, Sotd, half_rule_of_factors
from autotune.design.rules import ULTIMATE_RULES
from autotune.identify.closed_forms import Fotd
from autotune.identify.model import ProcessModel
from autotune.loop.conversion import to_form
from autotune.loop.outcome import Refusal
from autotune.loop.settings import PidForm, PidSettings
from tests.design.plants import THREE_LAGS, checks, plant

ALL_RULES: tuple[ModelRule, ...] = (*MODEL_RULES, *INTEGRATOR_RULES)
RULES = {rule.name: rule for rule in ALL_RULES}
LAG = plant(10.0, gain=2.0, dead_time_s=2.0)
INTEGRATING = plant(gain=1.0, dead_time_s=1.0, integrators=1)


def _settings(name: str, model: ProcessModel) -> PidSettings:
    settings = settings_by(RULES[name], plant_readings(model))
    assert isinstance(settings, PidSettings), settings
    return settings


def _numbers(name: str, model: ProcessModel) -> list[float]:
    settings = _settings(name, model)
    numbers = (settings.controller_gain, settings.integral_time_s, settings.derivative_time_s)
    return [number for number in numbers if number is not None]


def _refused(name: str, model: ProcessModel) -> Refusal:
    refusal = settings_by(RULES[name], plant_readings(model))
    assert isinstance(refusal, Refusal)
    return refusal


@pytest.mark.parametrize(
    ("prefix", "identifier", "path"),
    [
        ("ziegler-nichols-step", "TR-ZNR", ()),
        ("cohen-coon", "TR-CC", ()),
        ("chr-setpoint-0", "TR-CHR", ("sp0",)),
        ("chr-setpoint-20", "TR-CHR", ("sp20",)),
        ("chr-load-0", "TR-CHR", ("ld0",)),
        ("chr-load-20", "TR-CHR", ("ld20",)),
        ("lopez-ise", "TR-LOP", ("ISE",)),
        ("lopez-iae", "TR-LOP", ("IAE",)),
        ("lopez-itae", "TR-LOP", ("ITAE",)),
        ("rovira-iae", "TR-ROV", ("IAE",)),
        ("rovira-itae", "TR-ROV", ("ITAE",)),
        ("amigo", "TR-AMIGO", ()),
    ],
)
def test_each_table_gives_its_recomputed_example(prefix: str, identifier: str, path: tuple[str, ...]) -> None:
    """2 e^(-2s)/(10 s + 1); the readings of the model itself are exact to 1e-7."""
    table = checks()[identifier]["expected"]
    for key in path:
        table = table[key]
    compared = 0
    for letters, expected in table.items():
        if letters in {"P", "PI", "PD", "PID"}:
            numbers = [number for number in np.atleast_1d(np.array(expected, dtype=object)) if number is not None]
            assert _numbers(f"{prefix}-{letters.lower()}", LAG) == pytest.approx(numbers, rel=2e-6)
            compared += 1
    assert compared >= 2


def test_simc_and_its_improvement_give_their_recomputed_examples() -> None:
    """TR-SIMC and TR-iSIMC, with tc = L = 2."""
    expected, improved = checks()["TR-SIMC"]["expected"], checks()["TR-iSIMC"]["expected"]
    assert _numbers("simc-pi", LAG) == pytest.approx(expected["PI"], rel=1e-6)
    assert _numbers("simc-integrator-pi", INTEGRATING) == pytest.approx(expected["IPDT_k1_L1"])
    assert _numbers("improved-simc-pi", LAG) == pytest.approx(improved["PI"], rel=1e-6)
    assert _settings("improved-simc-pid", LAG).derivative_time_s == pytest.approx(improved["series_PID_tD"], rel=1e-6)


def test_simc_reaches_its_printed_limits() -> None:
    """TR-SIMC: a second integrator (the lag grows while k'' = k'/T2 stays), and dead time alone (the lag goes to 0)."""
    expected = checks()["TR-SIMC"]["expected"]
    lag_s = 1e9
    gain, ti_s, td_s = laws.simc_integrator_pid(Ipdt(lag_s, lag_s, 1.0), 1.0)
    assert (gain, ti_s, td_s) == pytest.approx(tuple(expected["double_int_k1_L1"]))
    gain, ti_s, _ = laws.simc_pi(Fotd(1.0, 1e-6, 1.0), 1.0)
    assert ti_s is not None
    assert gain / ti_s == pytest.approx(expected["delay_KI_k1_L1"])


def test_the_imc_formulas_give_their_recomputed_examples() -> None:
    """TR-IMC, with lambda = 3, and error 12: three formulas called "IMC PI" are three rules here."""
    check = checks()["TR-IMC"]
    fotd, lambda_s = Fotd(2.0, 10.0, 2.0), check["inputs"]["lam"]
    for law, key in ((laws.imc_pid, "PID"), (laws.imc_improved_pi, "improved_PI"), (laws.lambda_pi, "lambda_PI")):
        terms = [number for number in law(fotd, lambda_s) if number is not None]
        assert terms == pytest.approx(check["expected"][key], rel=1e-7)


def test_the_imc_formulas_for_an_integrator_give_their_recomputed_examples() -> None:
    """TR-IMC-INT, cases M and N, with tc = 4 = 2 L, which is also what the rows choose."""
    check = checks()["TR-IMC-INT"]
    model = plant(gain=check["inputs"]["k"], dead_time_s=check["inputs"]["L"], integrators=1)
    assert _numbers("imc-integrator-pi", model) == pytest.approx(check["expected"]["PI"], rel=1e-8)
    assert _numbers("imc-integrator-pid", model) == pytest.approx(check["expected"]["PID"], rel=1e-8)


def test_the_papers_conditions_on_lambda_hold_in_the_rows() -> None:
    """Rivera, Morari and Skogestad 1986: lambda > 1.7 L for the improved PI, > 0.8 L for the PID."""
    for dead_time_s in (0.1, 2.0, 40.0):
        model = plant(10.0, gain=2.0, dead_time_s=dead_time_s)
        improved = _settings("imc-improved-pi", model)
        assert (20.0 + dead_time_s) / (4.0 * improved.controller_gain) > 1.7 * dead_time_s
        pid = _settings("imc-pid", model)
        assert (20.0 + dead_time_s) / (2.0 * pid.controller_gain) - dead_time_s > 2.0 * 0.8 * dead_time_s * 0.999


@pytest.mark.parametrize(
    ("name", "identifier", "key", "rel"),
    [
        ("ziegler-nichols-integrator-pi", "TR-IPDT", "ZN_PI", 1e-6),
        ("tyreus-luyben-integrator-pi", "TR-IPDT", "TL92", 1e-6),
        ("simc-integrator-pi", "TR-IPDT", "SIMC", 1e-6),
        ("amigo-integrator-pi", "TR-IPDT", "AMIGO_PI", 1e-6),
        ("amigo-integrator-pi", "TR-AMIGO", "int_PI_k1_L1", 1e-8),
        ("amigo-integrator-pid", "TR-AMIGO", "int_PID_k1_L1", 1e-8),
    ],
)
def test_rules_for_an_integrator_give_their_printed_numbers(name: str, identifier: str, key: str, rel: float) -> None:
    assert _numbers(name, INTEGRATING) == pytest.approx(checks()[identifier]["expected"][key], rel=rel)


def test_tyreus_luyben_by_the_ultimate_point_meets_its_rule_for_integrators() -> None:
    """TR-IPDT: Ku = pi/(2 k L) and Tu = 4 L (CF-I)."""
    reading = ultimate_reading(INTEGRATING)
    assert isinstance(reading, laws.UltimateReading)
    assert (reading.ultimate_gain, reading.ultimate_period_s) == pytest.approx((pi / 2.0, 4.0))
    rule = next(rule for rule in ULTIMATE_RULES if rule.name == "tyreus-luyben-pi")
    settings = rule.settings(reading.ultimate_gain, reading.ultimate_period_s)
    assert [settings.controller_gain, settings.integral_time_s] == pytest.approx(
        checks()["TR-IPDT"]["expected"]["TL_via_Ku"]
    )


@pytest.mark.parametrize("lags", [3, 4, 5, 6, 8])
def test_the_ultimate_point_of_a_model_is_the_closed_form(lags: int) -> None:
    """CF-3 to CF-8."""
    expected = checks()[f"CF-{lags}"]["expected"]
    reading = ultimate_reading(plant(*[1.0] * lags))
    assert isinstance(reading, laws.UltimateReading)
    assert (reading.ultimate_gain, reading.ultimate_period_s) == pytest.approx(
        (expected["Ku"], expected["Tu"]), rel=1e-7
    )


def test_the_amigo_examples_come_out() -> None:
    """TR-AMIGO-EX: within 1 % of print, and error 18: P3's printed Ti of 0.360 is 0.367 by its own formula."""
    check = checks()["TR-AMIGO-EX"]
    models = {
        "P1": plant(1.0, 0.1, 0.01, 0.001),
        "P2": plant(1.0, 1.0, 1.0, 1.0),
        "P3": plant(0.05, 0.05, dead_time_s=1.0),
    }
    for name, model in models.items():
        for letters in ("PI", "PID"):
            printed = check["expected"]["printed"][name][letters]
            assert _numbers(f"amigo-{letters.lower()}", model) == pytest.approx(printed, rel=0.03)
            assert _numbers(f"amigo-{letters.lower()}", model) == pytest.approx(
                check["recomputed"][name][letters], rel=0.011
            )


def test_the_amigo_frequency_rules_come_out() -> None:
    """TR-AMIGO-F, on (s + 1)^-4, whose Ku is 4 and Tu 2 pi."""
    expected = checks()["TR-AMIGO-F"]["expected"]
    for letters in ("PI", "PID"):
        assert _numbers(f"amigo-frequency-{letters.lower()}", plant(1.0, 1.0, 1.0, 1.0)) == pytest.approx(
            expected[letters], rel=1e-4
        )


@pytest.mark.parametrize(("kind", "identifier"), [("step", "TR-KT"), ("frequency", "TR-KF")])
@pytest.mark.parametrize("key", ["PI1.4", "PI2.0", "PID1.4", "PID2.0"])
def test_kappa_tau_comes_out_on_three_lags(kind: str, identifier: str, key: str) -> None:
    """Error 11: a is Kp L/T; with slope L the gain would be 12 % higher here, and Ms far above its design."""
    expected = checks()[identifier]["expected"][key]
    letters, ms = key[:-3], key[-3:].replace(".", "")
    numbers = [expected[name] for name in ("K", "Ti", "Td") if name in expected]
    assert _numbers(f"kappa-tau-{kind}-{letters.lower()}-{ms}", THREE_LAGS) == pytest.approx(numbers, rel=1e-3)


def test_direct_synthesis_of_seborg_is_the_series_simc_in_another_form() -> None:
    """WX-SEB2: 2 e^-s/((10s+1)(5s+1)); Kc = 15/(2 (tc + 1)), tI = 15, tD = 3.33 in the ideal form."""
    expected = checks()["WX-SEB2"]["expected"]
    for tc_s, gain in zip(checks()["WX-SEB2"]["inputs"]["tc"], expected["Kc"], strict=True):
        k, ti_s, td_s = laws.simc_pid(Sotd(2.0, 10.0, 5.0, 1.0), tc_s)
        # the limit of Ti by 4 (tc + L) is SIMC's own and no part of direct synthesis
        ideal = to_form(PidSettings(PidForm.SERIES, k, max(10.0, ti_s or 0.0), td_s), PidForm.IDEAL)
        assert isinstance(ideal, PidSettings)
        assert [ideal.controller_gain, ideal.integral_time_s, ideal.derivative_time_s] == pytest.approx(
            [gain, expected["tI"], expected["tD"]], rel=0.005
        )
    reading = ultimate_reading(plant(10.0, 5.0, gain=2.0, dead_time_s=1.0))
    assert isinstance(reading, laws.UltimateReading)
    recomputed = checks()["WX-SEB2"]["recomputed"]
    assert [reading.ultimate_gain, reading.ultimate_period_s] == pytest.approx([recomputed["Ku"], recomputed["Tu"]])


def test_the_wood_berry_loops_come_out() -> None:
    """WX-WB: gains in size; the sign of the second is its controller's action.

    Error 16: its gains are Ku/2.2, which is 1 % more than 0.45 Ku.
    """
    check = checks()["WX-WB"]
    zn = next(rule for rule in ULTIMATE_RULES if rule.name == "ziegler-nichols-pi")
    for i, key in enumerate(("g11", "g22")):
        gain, lag_s, dead_time_s = check["inputs"][key]
        reading = ultimate_reading(plant(lag_s, gain=abs(gain), dead_time_s=dead_time_s))
        assert isinstance(reading, laws.UltimateReading)
        assert reading.ultimate_gain == pytest.approx(abs(check["recomputed"]["Ku"][i]), rel=1e-6)
        assert 2.0 * pi / reading.ultimate_period_s == pytest.approx(check["recomputed"]["wu"][i], rel=1e-6)
        settings = zn.settings(reading.ultimate_gain, reading.ultimate_period_s)
        printed_gain, printed_ti_s = check["expected"]["ZN_PI"][i]
        assert settings.controller_gain == pytest.approx(abs(printed_gain) * 2.2 * 0.45, rel=0.005)
        assert settings.integral_time_s == pytest.approx(printed_ti_s, rel=0.01)


E_BATCH: dict[str, Callable[[int], object]] = {
    "E1": partial(half_rule_of_factors, 1.0, (1.0, 0.2), (), 0.0),
    "E2": partial(half_rule_of_factors, 1.0, (2.0, 1.0, 0.4, 0.2, 0.05, 0.05, 0.05), (-0.3, 0.08), 0.0),
    "E3": partial(half_rule_of_factors, 2.0, (20.0, 1.0, 0.1, 0.1), (15.0,), 0.0),
    "E4": partial(half_rule_of_factors, 1.0, (1.0, 1.0, 1.0, 1.0), (), 0.0),
    "E5": partial(half_rule_of_factors, 1.0, (1.0, 0.2, 0.04, 0.008), (), 0.0),
    "E6": partial(half_rule_of_factors, 1.0, (inf, 1.0, 1.0, 0.028), (0.17, 0.17), 0.0),
    "E7": partial(half_rule_of_factors, 1.0, (1.0, 1.0, 1.0), (-2.0,), 0.0),
    "E8": partial(half_rule_of_factors, 1.0, (inf, 1.0, 1.0), (), 0.0),
    "E9": partial(half_rule_of_factors, 1.0, (1.0, 1.0), (), 1.0),
    "E10": partial(half_rule_of_factors, 1.0, (20.0, 2.0), (), 1.0),
    "E11": partial(half_rule_of_factors, 1.0, (6.0, 2.0, 2.0), (-1.0,), 1.0),
    "E12": partial(half_rule_of_factors, 1.0, (10.0, 8.0, 1.0), (6.0, 3.0), 0.3),
    "E13": partial(half_rule_of_factors, 1.0, (10.0, 0.5), (2.0,), 1.0),
    "E14": partial(half_rule_of_factors, 1.0, (inf,), (-1.0,), 0.0),
    "E15": partial(half_rule_of_factors, 1.0, (1.0,), (-1.0,), 0.0),
}
NOT_THE_HALF_RULE = {"E6 PI"}
"""Error 17: its printed dead time of 1.688 isn't the half rule's."""


def test_the_batch_of_skogestad_gets_its_printed_settings() -> None:
    """WX-SIMC-E, tc = L, series form; error 9: Ti = min(T1, 4 (tc + L))."""
    table = checks()["WX-SIMC-E"]["expected"]
    compared = 0
    for case, expected in table.items():
        if case in NOT_THE_HALF_RULE:
            continue
        name, letters = case.split()
        reduced = E_BATCH[name](1 if letters == "PI" else 2)
        match reduced:
            case Fotd():
                terms = laws.simc_pi(reduced, reduced.dead_time_s)
            case Sotd():
                terms = laws.simc_pid(reduced, reduced.dead_time_s)
            case Ipdt() if letters == "PI":
                terms = laws.simc_integrator_pi(reduced, reduced.dead_time_s)
            case Ipdt():
                terms = laws.simc_integrator_pid(reduced, reduced.dead_time_s)
            case _:
                pytest.fail(f"{case}: {reduced}")
        wanted = (expected["Kc"], expected["tI"], expected["tD"])
        assert [number or 0.0 for number in terms] == pytest.approx(wanted, rel=0.005), case
        compared += 1
    assert compared >= 24


def test_series_rules_are_series() -> None:
    """Error 8 and PF-04: E4's series 0.5, 1.5, 1 is 0.833, 2.5, 0.6 in the ideal form."""
    for name in ("simc-pid", "improved-simc-pid", "simc-integrator-pid"):
        assert RULES[name].form is PidForm.SERIES
    series = _settings("simc-pid", plant(1.0, 1.0, 1.0, 1.0))
    ideal = to_form(series, PidForm.IDEAL)
    assert isinstance(ideal, PidSettings)
    assert [ideal.controller_gain, ideal.integral_time_s, ideal.derivative_time_s] == pytest.approx(
        checks()["PF-04"]["expected"]["E4"], rel=1e-3
    )


def test_the_misprints_of_the_literature_are_not_in_the_tables() -> None:
    """Errors 2, 3, 4, 6, 9 and 10."""
    lag = Fotd(1.0, 1.0, 0.5)
    zn = _settings("ziegler-nichols-step-pi", LAG)
    assert zn.integral_time_s == pytest.approx(2.0 / 0.3)  # 2: not 3 L
    assert laws.cohen_coon_pi(lag)[0] == pytest.approx((0.9 + 0.5 / 12.0) / 0.5)  # 3: not 1.1
    assert laws.cohen_coon_pi(lag)[1] == pytest.approx(0.5 * 31.5 / 19.0)  # 3: multiples of L, not of T
    load = laws.load_table(lag, (0.859, -0.977), (0.674, -0.68), None)[1]
    setpoint = laws.setpoint_table(lag, (0.586, -0.916), (1.03, -0.165), None)[1]
    assert load == pytest.approx(1.0 / (0.674 * 0.5**-0.68))  # 4: a power for loads
    assert setpoint == pytest.approx(1.0 / (1.03 - 0.165 * 0.5))  # 4: a straight line for setpoints
    by_setpoint, by_load = _settings("chr-setpoint-0-pi", LAG), _settings("chr-load-0-pi", LAG)
    assert (by_setpoint.integral_time_s, by_load.integral_time_s) == pytest.approx((12.0, 8.0))  # 6: T and L
    assert laws.simc_pi(Fotd(1.0, 100.0, 1.0), 3.0)[1] == 16.0  # 9: 4 (tc + L), and 8 L only for tc = L
    ti_s = laws.amigo_pi(lag)[1]
    assert ti_s == pytest.approx(0.175 + 6.5 / (1.0 + 6.0 + 1.75))  # 10: T^2 + 12 L T + 7 L^2


@pytest.mark.parametrize(
    ("name", "model", "code"),
    [
        ("cohen-coon-pid", plant(1.0, dead_time_s=3.0), "OUTSIDE_LIMITS"),
        ("ziegler-nichols-step-pi", plant(100.0, dead_time_s=1.0), "OUTSIDE_LIMITS"),
        ("simc-pi", INTEGRATING, "NOT_FOR_THIS_PLANT"),
        ("simc-pid", INTEGRATING, "NOT_FOR_THIS_PLANT"),
        ("simc-integrator-pi", LAG, "NOT_FOR_THIS_PLANT"),
        ("amigo-integrator-pid", LAG, "NOT_FOR_THIS_PLANT"),
        ("amigo-pi", INTEGRATING, "INTEGRATES"),
        ("ziegler-nichols-step-p", INTEGRATING, "INTEGRATES"),
        ("kappa-tau-frequency-pi-14", INTEGRATING, "INTEGRATES"),
        ("kappa-tau-frequency-pi-14", plant(1.0, 1.0), "NO_ULTIMATE_POINT"),
        ("simc-pi", plant(1.0), "NO_DEAD_TIME"),
        ("simc-integrator-pi", plant(integrators=1), "NO_DEAD_TIME"),
    ],
)
def test_outside_its_limits_a_rule_answers_with_its_reason(name: str, model: ProcessModel, code: str) -> None:
    assert _refused(name, model).code == code


def test_a_frequency_rule_is_refused_above_kappa_1() -> None:
    """Such a plant is stronger at -180 degrees than at rest."""
    readings = replace(plant_readings(LAG), ultimate=laws.UltimateReading(1.0, 0.5, 1.0))
    refusal = settings_by(RULES["amigo-frequency-pi"], readings)
    assert isinstance(refusal, Refusal)
    assert refusal.code == "OUTSIDE_LIMITS"
    assert "kappa" in refusal.reason


def test_settings_that_are_no_pid_are_refused() -> None:
    """Cohen-Coon's PD loses its derivative at L = 3 T, which only its limits of use exclude."""
    wide = ModelRule("pd", "PD", Basis.STEP, laws.cohen_coon_pd, PidForm.IDEAL, "-", "-", (), "-")
    refusal = settings_by(wide, plant_readings(plant(1.0, dead_time_s=4.0)))
    assert isinstance(refusal, Refusal)
    assert refusal.code == "SETTINGS_INVALID"


def test_every_row_has_every_column_and_a_name_of_its_own() -> None:
    names = [*(rule.name for rule in ULTIMATE_RULES), *(rule.name for rule in ALL_RULES)]
    assert len(set(names)) == len(names)
    for rule in ALL_RULES:
        assert rule.name == rule.name.lower().replace(" ", "-")
        assert all([rule.title, rule.source, rule.suits, rule.limits, rule.purposes])
        assert any(character.isdigit() for character in rule.source)


def test_every_row_answers_for_the_plant_that_it_is_for() -> None:
    resting = plant_readings(plant(3.0, 1.0, 0.5, gain=2.0, dead_time_s=1.0))
    integrating = plant_readings(plant(1.0, gain=0.2, dead_time_s=1.0, integrators=1))
    for rule in MODEL_RULES:
        assert isinstance(settings_by(rule, resting), PidSettings), rule.name
    for rule in INTEGRATOR_RULES:
        assert isinstance(settings_by(rule, integrating), PidSettings), rule.name
