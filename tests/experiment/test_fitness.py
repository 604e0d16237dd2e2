"""Is the loop fit for a test?  Every no has its remedy."""

from dataclasses import replace
from math import inf, nan
from typing import Any

import pytest

from autotune.experiment.fitness import find, refusals, refuse_rest
from autotune.experiment.plan import RelayPlan, TestPlan
from autotune.experiment.steadiness import Rest
from autotune.loop.limits import WatchLimit
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, GuardView, Sample, Stamp, WatchReading
from tests.experiment.bench import LIMITS, TOKEN, plan_for
from tests.experiment.readings import reading

IDLE = GuardView(GuardState.IDLE, holder=0, is_enabled=True, is_stop_pressed=False)


def look(count: int = 20, **changes: Any) -> list[Sample]:
    """A look around of quiet samples up to 100 s, all with the same changes."""
    times_s = [100.0 - 0.1 * k for k in reversed(range(count))]
    return [reading(**{"t_s": t_s, "taken": Stamp.at(t_s), **changes}) for t_s in times_s]


def codes(samples: list[Sample], plan: TestPlan | None = None) -> list[str]:
    found = refusals(plan or plan_for(), samples, 100.0)
    assert all(refusal.reason and refusal.remedy for refusal in found)
    return [refusal.code for refusal in found]


def limited(**limits: Any) -> TestPlan:
    return plan_for(replace(LIMITS, **limits))


def test_a_quiet_loop_in_manual_or_automatic_is_fit() -> None:
    assert codes(look()) == []
    assert codes(look(mode=LoopMode.AUTO)) == []


def test_a_loop_that_was_not_seen_is_not_fit() -> None:
    assert codes([]) == ["NO_VIEW"]


@pytest.mark.parametrize(
    ("changes", "code"),
    [
        ({"pv_quality": Quality.UNCERTAIN}, "PV_QUALITY"),
        ({"pv_quality": Quality.FORCED}, "PV_QUALITY"),
        ({"pv_pct": None}, "PV_QUALITY"),
        ({"pv_pct": nan}, "PV_QUALITY"),
        ({"op_pct": None}, "OP_QUALITY"),
        ({"op_pct": inf}, "OP_QUALITY"),
        ({"op_quality": Quality.BAD}, "OP_QUALITY"),
        ({"sp_pct": nan}, "SP_QUALITY"),
        ({"taken": Stamp.at(98.9)}, "SAMPLE_STALE"),
        ({"taken": Stamp.at(nan)}, "SAMPLE_STALE"),
        ({"mode": LoopMode.TRACKING}, "MODE_NOT_SUITABLE"),
        ({"mode": LoopMode.NOT_KNOWN}, "MODE_NOT_SUITABLE"),
        ({"mode": LoopMode.LOCAL}, "MODE_NOT_SUITABLE"),
        ({"pv_pct": 4.9}, "PV_OUTSIDE_LIMITS"),
        ({"pv_pct": 95.1}, "PV_OUTSIDE_LIMITS"),
        ({"op_pct": 9.0}, "OP_OUTSIDE_LIMITS"),
        ({"op_pct": 91.0}, "OP_OUTSIDE_LIMITS"),
        ({"op_pct": 85.0}, "TOO_LITTLE_HEADROOM"),
        ({"op_pct": 19.0}, "TOO_LITTLE_HEADROOM"),
    ],
)
def test_each_fault_of_a_reading_has_its_code(changes: dict[str, Any], code: str) -> None:
    assert codes(look(**changes)) == [code]


@pytest.mark.parametrize("mode", [LoopMode.CAS, LoopMode.REMOTE])
def test_a_setpoint_from_elsewhere_is_refused_with_the_reason(mode: LoopMode) -> None:
    (refusal,) = refusals(plan_for(), look(mode=mode), 100.0)
    assert refusal.code == "MODE_NOT_SUITABLE"
    assert "setpoint comes from elsewhere" in refusal.reason
    assert "automatic or manual" in refusal.remedy


def test_one_bad_reading_of_a_look_around_is_enough() -> None:
    samples = look()
    samples[3] = replace(samples[3], pv_quality=Quality.BAD)
    assert codes(samples) == ["PV_QUALITY"]


def test_a_mode_that_changes_while_we_look_is_refused() -> None:
    assert codes([*look(3), *look(3, mode=LoopMode.AUTO)]) == ["MODE_CHANGED"]


def test_an_output_that_moves_in_manual_is_refused_and_in_automatic_it_is_the_blocks_right() -> None:
    moving = [replace(sample, op_pct=50.0 + 0.1 * k) for k, sample in enumerate(look())]
    assert codes(moving) == ["OP_MOVING"]
    assert codes([replace(sample, mode=LoopMode.AUTO) for sample in moving]) == []


@pytest.mark.parametrize(
    ("plan", "code"),
    [
        (plan_for(relay=RelayPlan(10.1, 10.0)), "STEPS_BEYOND_LIMITS"),
        (plan_for(relay=RelayPlan(10.0, 10.1)), "STEPS_BEYOND_LIMITS"),
        (plan_for(relay=RelayPlan(0.0, 10.0)), "STEPS_BEYOND_LIMITS"),
        (plan_for(relay=RelayPlan(5.0, nan)), "STEPS_BEYOND_LIMITS"),
        (plan_for(plc_scan_s=None), "PLC_SCAN_NOT_KNOWN"),
        (plan_for(accepts_no_guard=False), "NO_GUARD"),
    ],
)
def test_each_fault_of_the_plan_has_its_code(plan: TestPlan, code: str) -> None:
    assert code in codes(look(), plan)


def test_with_the_clock_of_the_plc_its_scan_need_not_be_declared() -> None:
    assert codes(look(), plan_for(plc_scan_s=None, has_clock_tags=True)) == []


@pytest.mark.parametrize(
    ("changes", "expected"),
    [
        ({}, []),
        ({"holder": None, "is_enabled": None, "is_stop_pressed": None}, []),
        ({"holder": 99, "state": GuardState.ARMED}, ["GUARD_HELD", "GUARD_NOT_IDLE"]),
        ({"state": GuardState.GAVE_BACK}, ["GUARD_NOT_IDLE"]),
        ({"state": GuardState.NOT_KNOWN}, ["GUARD_NOT_IDLE"]),
        ({"is_enabled": False}, ["GUARD_NOT_ENABLED"]),
        ({"is_stop_pressed": True}, ["GUARD_STOP_PRESSED"]),
    ],
)
def test_the_guard_has_to_be_free_enabled_and_not_stopped(changes: dict[str, Any], expected: list[str]) -> None:
    guard = replace(IDLE, **changes)
    assert codes(look(guard=guard), plan_for(has_guard=True)) == expected


@pytest.mark.parametrize(("holder", "words"), [(99, "token 99"), (TOKEN, "an earlier test was not handed back")])
def test_a_guard_that_is_held_says_by_whom(holder: int, words: str) -> None:
    found = refusals(plan_for(has_guard=True), look(guard=replace(IDLE, holder=holder)), 100.0)
    assert words in found[0].reason


def test_a_guard_that_cannot_be_read_is_refused() -> None:
    assert codes(look(), plan_for(has_guard=True)) == ["GUARD_NOT_SEEN"]


@pytest.mark.parametrize("token", [0, 1 << 32])
def test_a_token_has_to_be_one(token: int) -> None:
    assert codes(look(guard=IDLE), plan_for(has_guard=True, token=token)) == ["TOKEN_NOT_VALID"]


def test_the_watch_list_has_to_hold_all_the_time() -> None:
    plan = limited(watch=(WatchLimit("pump", 1.0, 1.0),))
    runs = (WatchReading("pump", 1.0, Quality.GOOD),)
    assert codes(look(watch=runs), plan) == []
    samples = look(watch=runs)
    samples[5] = replace(samples[5], watch=(WatchReading("pump", 0.0, Quality.GOOD),))
    assert codes(samples, plan) == ["WATCH"]


def test_in_manual_a_noisy_or_drifting_pv_is_refused_before_anything_is_touched() -> None:
    noisy = [replace(sample, pv_pct=40.0 + (4.0 if k % 2 else -4.0)) for k, sample in enumerate(look())]
    drifting = [replace(sample, pv_pct=40.0 + 0.05 * k) for k, sample in enumerate(look())]
    assert codes(noisy) == ["TOO_NOISY"]
    assert codes(drifting) == ["DRIFTING"]
    assert codes([replace(sample, mode=LoopMode.AUTO) for sample in drifting]) == []
    assert codes(drifting[-5:]) == [], "five samples tell nothing"


def test_all_reasons_are_told_at_once() -> None:
    found = codes(look(pv_quality=Quality.BAD, mode=LoopMode.CAS), plan_for(accepts_no_guard=False))
    assert found == ["NO_GUARD", "PV_QUALITY", "MODE_NOT_SUITABLE"]


def test_as_found_is_the_reading_in_manual_and_the_mean_in_automatic() -> None:
    samples = [replace(sample, op_pct=50.0 + k, sp_pct=40.0 + k) for k, sample in enumerate(look(5))]
    assert find(plan_for(), samples).op_pct == 54.0
    in_automatic = [replace(sample, mode=LoopMode.AUTO) for sample in samples]
    as_found = find(plan_for(), in_automatic)
    assert (as_found.op_pct, as_found.sp_pct, as_found.mode) == (52.0, 44.0, LoopMode.AUTO)
    assert as_found.sample is in_automatic[-1]


QUIET = Rest(100, 40.0, 0.1, 0.0, 0.001, None)


@pytest.mark.parametrize(
    ("rest", "relay", "code"),
    [
        (QUIET, RelayPlan(5.0, 5.0), None),
        (replace(QUIET, noise_pct=2.0), RelayPlan(5.0, 5.0), None),
        (replace(QUIET, noise_pct=2.01), RelayPlan(5.0, 5.0), "TOO_NOISY"),
        (replace(QUIET, noise_pct=nan), RelayPlan(5.0, 5.0), "TOO_NOISY"),
        (replace(QUIET, drift_pct_per_s=0.102), RelayPlan(5.0, 5.0), None),
        (replace(QUIET, drift_pct_per_s=-0.103), RelayPlan(5.0, 5.0), "DRIFTING"),
        (replace(QUIET, drift_pct_per_s=nan), RelayPlan(5.0, 5.0), "DRIFTING"),
        (QUIET, RelayPlan(5.0, 5.0, hysteresis_pct=0.1), None),
        (QUIET, RelayPlan(5.0, 5.0, hysteresis_pct=0.09), "NOISE_ABOVE_HYSTERESIS"),
    ],
)
def test_rest_is_judged_by_noise_by_a_drift_that_noise_cannot_explain_and_by_the_hysteresis(
    rest: Rest, relay: RelayPlan, code: str | None
) -> None:
    refusal = refuse_rest(plan_for(relay=relay), rest)
    assert (None if refusal is None else refusal.code) == code
