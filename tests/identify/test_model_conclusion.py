"""What is concluded from the fitted plant, in numbers and words, and how it stands beside the other inference."""

from dataclasses import replace
from functools import cache
from math import exp, pi

import numpy as np
import pytest

from autotune.identify.findings import UltimatePoint
from autotune.identify.model import ModelWithDraws, ProcessModel
from autotune.identify.model_bank import Structure
from autotune.identify.model_conclusion import ModelConclusion, conclude, conclude_from, cross_checked
from autotune.identify.model_point import crossing
from autotune.identify.plant_fit import fit_plant
from autotune.identify.waveforms import Waveforms
from autotune.loop.outcome import Interval
from tests.identify.exact_relay import Plant
from tests.identify.traces import EIGHT_LAGS, INTEGRATOR, LAG_AND_PAIR, TWO_LAGS, loaded, period_s, seen, with_truth

STEEP = with_truth(Plant("steep", lags_s=(10.0, 1.0), dead_time_s=0.03))


def concluded(signals: Waveforms) -> ModelConclusion:
    found = conclude(signals, period_s(signals))
    assert found is not None
    return found


@cache
def of_two_lags() -> ModelConclusion:
    return concluded(seen(TWO_LAGS, 0.02))


def holds(interval: Interval, truth: float) -> bool:
    return interval.low <= truth <= interval.high


@pytest.mark.parametrize("plant", [TWO_LAGS, INTEGRATOR, LAG_AND_PAIR, EIGHT_LAGS], ids=lambda plant: plant.name)
def test_the_interval_holds_the_truth_and_is_a_few_percent_wide(plant: Plant) -> None:
    found = concluded(seen(plant, 0.02)).ultimate
    assert holds(found.ultimate_gain, plant.ultimate_gain)
    assert holds(found.ultimate_period_s, plant.ultimate_period_s)
    assert found.ultimate_gain.high / found.ultimate_gain.low < 1.08


def test_the_model_is_that_of_the_conclusion() -> None:
    found = of_two_lags()
    w = np.array([2 * pi / found.ultimate.ultimate_period_s.best])
    response = found.model.best.response(w)[0]
    assert response == pytest.approx(-1 / found.ultimate.ultimate_gain.best, rel=1e-6)
    assert len(found.model.draws) > 20
    assert found.model.because == found.ultimate.because


def test_every_cause_of_the_width_is_named() -> None:
    found = of_two_lags()
    causes = " | ".join(found.ultimate.because)
    assert "the plant fitted: second order with no zero, dead time 0." in causes
    assert "times the noise at rest" in causes
    assert "noise in the test: +-" in causes
    assert "structures explain the test about as well" in causes
    assert "no plant is exactly one of the structures: +-0.6 % in gain, +-0.2 % in period" in causes
    assert found.cautions == ()
    assert found.is_trusted


def test_a_drift_is_named() -> None:
    causes = concluded(seen(TWO_LAGS, 0.02, drift_ratio=0.05)).ultimate.because
    assert causes[-1] == "PV drifted by itself: a ramp was fitted beside the plant"


@pytest.mark.parametrize("plant", [TWO_LAGS, EIGHT_LAGS], ids=lambda plant: plant.name)
def test_unknown_delay_counts_as_plant_at_the_low_end_and_as_none_at_the_high_end(plant: Plant) -> None:
    """Two lags have more dead time than the hull is wide; of eight the lags are fitted again."""
    hull_s = 0.02 * plant.ultimate_period_s
    signals = seen(plant, 0.02)
    plain, hulls = concluded(signals).ultimate, concluded(replace(signals, delay_hull_s=hull_s)).ultimate
    assert hulls.ultimate_gain.best == plain.ultimate_gain.best
    assert hulls.ultimate_gain.low < plain.ultimate_gain.low
    assert hulls.ultimate_gain.high > plain.ultimate_gain.high
    assert hulls.ultimate_period_s.high > plain.ultimate_period_s.high
    assert any(f"{1000 * hull_s:.0f} ms either way" in cause for cause in hulls.because)
    later = with_truth(replace(plant, dead_time_s=plant.dead_time_s + hull_s))
    assert holds(hulls.ultimate_gain, later.ultimate_gain)


def test_stamps_that_leave_more_unknown_than_the_dead_time_leave_the_high_end_open() -> None:
    found = concluded(replace(seen(TWO_LAGS, 0.02), delay_hull_s=0.6))
    assert not found.is_trusted
    assert "without it the fitted plant has no ultimate gain at all" in found.cautions[0]


def test_a_loop_whose_ultimate_gain_is_hard_to_see_is_said_to_be() -> None:
    found = concluded(seen(STEEP, 0.005))
    assert any("hard to see because its phase hardly turns where its gain falls" in said for said in found.cautions)


def test_a_step_of_load_is_said_with_its_size_and_instant() -> None:
    plain = seen(TWO_LAGS, 0.02)
    found = concluded(loaded(plain, TWO_LAGS, 0.55 * float(plain.sample_s[-1]), 1.0))
    assert any("The load changed during the test, by as much as +1 % of output" in said for said in found.cautions)
    assert holds(found.ultimate.ultimate_gain, TWO_LAGS.ultimate_gain)


def test_a_test_that_no_plant_explains_is_said_and_not_trusted() -> None:
    signals = seen(TWO_LAGS, 0.02)
    stuck = np.sin(2 * pi * signals.sample_s / 0.9) * 6 * signals.noise_pct
    found = concluded(replace(signals, pv_pct=signals.pv_pct + stuck))
    assert any("No simple plant explains this test" in said for said in found.cautions)
    assert not found.is_trusted


def test_plants_that_explain_the_test_as_well_and_disagree_are_named_and_held() -> None:
    """A third structure is made as likely as the best by hand."""
    signals = seen(EIGHT_LAGS, 0.005)
    fits = fit_plant(signals, period_s(signals))
    poorer = next(fit for fit in fits.fits if fit.structure == Structure(1, 0))
    tied = replace(poorer, residual_pct=fits.best.residual_pct)
    found = conclude_from(signals, replace(fits, fits=(fits.best, tied)))
    assert found is not None
    other = crossing(tied)
    assert other is not None
    assert found.cautions[-1].startswith("Two plants explain the test about as well and disagree: fourth order")
    assert holds(found.ultimate.ultimate_gain, exp(other.log_gain))
    assert not holds(concluded(signals).ultimate.ultimate_gain, exp(other.log_gain))


def test_a_plant_that_never_turns_by_half_a_circle_has_no_conclusion() -> None:
    signals = seen(Plant("two lags alone", lags_s=(5.0, 1.0), ultimate_period_s=2.0))
    later_s = float(signals.sample_s[1] - signals.sample_s[0])
    sooner = replace(signals, effect_s=signals.effect_s + later_s / 4)
    assert conclude(sooner, period_s(signals)) is None


def point(gain: Interval, period: Interval) -> UltimatePoint:
    return UltimatePoint("by hand", gain, period, ("a cause",))


def by_hand(*, is_trusted: bool = True) -> ModelConclusion:
    model = ModelWithDraws(ProcessModel((1.0,), (1.0, 1.0), 1.0))
    return ModelConclusion(point(Interval(2.0, 1.9, 2.1), Interval(3.0, 2.9, 3.1)), model, (), is_trusted)


def test_where_both_agree_the_model_speaks() -> None:
    found, said = cross_checked(by_hand(), point(Interval(2.1, 1.5, 2.5), Interval(3.2, 2.8, 3.5)))
    assert found == by_hand().ultimate
    assert said == ()


@pytest.mark.parametrize(
    "other",
    [
        point(Interval(2.5, 2.2, 2.7), Interval(3.0, 2.8, 3.5)),
        point(Interval(1.5, 1.2, 1.7), Interval(3.0, 2.8, 3.5)),
        point(Interval(2.0, 1.5, 2.5), Interval(4.0, 3.5, 4.5)),
    ],
)
def test_where_they_contradict_the_interval_holds_both_and_it_is_said(other: UltimatePoint) -> None:
    found, said = cross_checked(by_hand(), other)
    assert "contradict each other beyond their intervals" in said[0]
    assert found.ultimate_gain.low == min(1.9, other.ultimate_gain.low)
    assert found.ultimate_period_s.high == max(3.1, other.ultimate_period_s.high)
    assert found.ultimate_gain.level is None
    assert found.ultimate_gain.best == 2.0


def test_a_model_that_is_not_trusted_gets_the_wider_interval() -> None:
    other = point(Interval(2.1, 1.5, 2.5), Interval(3.2, 2.8, 3.5))
    found, said = cross_checked(by_hand(is_trusted=False), other)
    assert "can't be relied on here" in said[0]
    assert (found.ultimate_gain.low, found.ultimate_gain.high) == (1.5, 2.5)
