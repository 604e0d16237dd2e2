"""What the live display shows."""

from dataclasses import replace

import pytest

from autotune.experiment.machine import begin
from autotune.experiment.phases import Phase
from autotune.experiment.picture import picture
from autotune.loop.mode import LoopMode
from tests.experiment.bench import bench, plan_for


def test_before_it_starts_the_picture_shows_what_is_planned() -> None:
    shown = picture(begin(plan_for()))
    assert (shown.loop, shown.phase, shown.stage) == ("TIC-204", Phase.IDLE, "not started")
    assert (shown.pv_pct, shown.mode, shown.period_s, shown.rough_ultimate_gain) == (None, None, None, None)
    assert (shown.op_low_pct, shown.op_high_pct, shown.pv_low_pct, shown.pv_high_pct) == (10.0, 90.0, 5.0, 95.0)
    assert (shown.elapsed_s, shown.left_at_most_s) == (0.0, 3600.0)


def test_while_it_runs_the_picture_shows_the_cycles_and_the_time_left() -> None:
    running = bench(plan_for())
    experiment = running.run(until=lambda e: len(e.whole_cycles) == 2)
    shown = picture(experiment)
    last = experiment.whole_cycles[-1]
    assert (shown.phase, shown.stage) == (Phase.TESTING, "relay cycles")
    assert (shown.op_low_pct, shown.op_high_pct) == (40.0, 60.0)
    assert shown.cycles == experiment.whole_cycles
    assert (shown.period_s, shown.pv_amplitude_pct) == (last.period_s, last.pv_amplitude_pct)
    assert shown.rough_ultimate_gain == last.rough_ultimate_gain
    assert shown.mode is LoopMode.MAN
    assert shown.asked_op_pct in (40.0, 60.0)
    assert shown.hysteresis_pct == 0.5
    assert shown.reference_pct == pytest.approx(40.0)
    assert experiment.touched_s is not None
    assert shown.t_s is not None
    assert shown.left_at_most_s == pytest.approx(3600.0 - (shown.t_s - experiment.touched_s))


def test_no_time_is_left_below_nothing() -> None:
    experiment = replace(begin(plan_for()), t_s=9e9, started_s=0.0, touched_s=0.0)
    assert picture(experiment).left_at_most_s == 0.0
