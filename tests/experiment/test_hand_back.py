"""Giving the loop back as found (S3), decision by decision."""

from dataclasses import replace
from math import nan
from typing import Any

import pytest

from autotune.experiment.commands import ClaimLoop, Command, DriveOutput, ReleaseLoop, SetMode, SetSetpoint
from autotune.experiment.events import HandBackResult
from autotune.experiment.hand_back import (
    HandBackDone,
    HandBackWrites,
    by_hand,
    hand_back_overdue,
    next_hand_back_step,
)
from autotune.experiment.held import Held, drive
from autotune.experiment.plan import TestPlan
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, Sample
from tests.experiment.bench import TOKEN, plan_for
from tests.experiment.readings import found, guard, held, reading

PLAN = plan_for()
GUARDED = plan_for(has_guard=True)
AUTO = found(mode=LoopMode.AUTO)
HIGH = held(op_pct=60.0, op_may_read_pct=(60.0, 60.0))
HIGH_FROM_AUTO = replace(HIGH, mode=LoopMode.MAN, modes_may_read=(LoopMode.MAN,))
HOME_FROM_AUTO = replace(HIGH_FROM_AUTO, op_pct=50.0, op_may_read_pct=(50.0, 50.0))
RESTORED, TAKEN = HandBackResult.RESTORED, HandBackResult.TAKEN
GAVE_BACK, NOT_CONFIRMED = HandBackResult.GUARD_GAVE_BACK, HandBackResult.NOT_CONFIRMED


def commands(plan: TestPlan, as_found: AsFound, hold: Held, sample: Sample) -> tuple[Command, ...]:
    answer = next_hand_back_step(plan, as_found, hold, sample)
    assert isinstance(answer, HandBackWrites)
    return answer.commands


def result(plan: TestPlan, as_found: AsFound, hold: Held, sample: Sample) -> HandBackResult:
    answer = next_hand_back_step(plan, as_found, hold, sample)
    assert isinstance(answer, HandBackDone)
    assert "output 50.00 %" in answer.detail
    assert f"mode {as_found.mode.value}" in answer.detail
    assert "setpoint" in answer.detail
    return answer.result


def test_the_output_goes_home_first_and_is_seen_there() -> None:
    answer = next_hand_back_step(PLAN, found(), HIGH, reading(op_pct=60.0))
    assert isinstance(answer, HandBackWrites)
    assert answer.commands == (DriveOutput(50.0, TOKEN, 9, 2),)
    assert commands(PLAN, found(), answer.held, reading(op_pct=60.0)) == (DriveOutput(50.0, TOKEN, 10, 2),)
    assert result(PLAN, found(), answer.held, reading(op_pct=50.0)) is RESTORED


def test_an_output_that_only_reads_home_is_written_home_too_since_our_last_move_may_still_land() -> None:
    moving, _ = drive(held(), 60.0, 50.0)
    assert commands(PLAN, found(), moving, reading(op_pct=50.0)) == (DriveOutput(50.0, TOKEN, 10, 3),)


def test_automatic_is_asked_for_only_when_the_output_is_home() -> None:
    assert commands(PLAN, AUTO, HIGH_FROM_AUTO, reading(op_pct=60.0)) == (DriveOutput(50.0, TOKEN, 9, 2),)
    assert commands(PLAN, AUTO, HOME_FROM_AUTO, reading()) == (SetMode(LoopMode.AUTO),)


def test_after_automatic_is_read_back_the_output_is_the_blocks_own() -> None:
    answer = next_hand_back_step(PLAN, AUTO, HOME_FROM_AUTO, reading())
    assert isinstance(answer, HandBackWrites)
    assert commands(PLAN, AUTO, answer.held, reading()) == (SetMode(LoopMode.AUTO),)
    assert result(PLAN, AUTO, answer.held, reading(mode=LoopMode.AUTO, op_pct=58.0)) is RESTORED


def test_where_the_setpoint_tracks_it_goes_before_the_mode_and_is_mended_once() -> None:
    plan = plan_for(sp_tracks_in_manual=True)
    answer = next_hand_back_step(plan, AUTO, HOME_FROM_AUTO, reading(sp_pct=43.0))
    assert isinstance(answer, HandBackWrites)
    assert answer.commands == (SetSetpoint(40.0), SetMode(LoopMode.AUTO))
    back = reading(mode=LoopMode.AUTO, sp_pct=43.0)
    mended = next_hand_back_step(plan, AUTO, answer.held, back)
    assert isinstance(mended, HandBackWrites)
    assert mended.commands == (SetSetpoint(40.0),)
    assert commands(plan, AUTO, mended.held, back) == (), "nobody is fought for a setpoint"
    assert result(plan, AUTO, mended.held, reading(mode=LoopMode.AUTO)) is RESTORED


def test_a_setpoint_that_was_never_read_is_never_written() -> None:
    plan, as_found = plan_for(sp_tracks_in_manual=True), found(sp_pct=None, mode=LoopMode.AUTO)
    assert commands(plan, as_found, HOME_FROM_AUTO, reading()) == (SetMode(LoopMode.AUTO),)


def test_where_it_tracks_in_manual_the_setpoint_of_a_loop_found_in_manual_is_free() -> None:
    assert result(plan_for(sp_tracks_in_manual=True), found(), held(), reading(sp_pct=43.0)) is RESTORED


def test_onto_a_failed_pv_no_automatic_is_given_back() -> None:
    for failed in ({"pv_quality": Quality.BAD}, {"pv_pct": None}, {"pv_pct": nan}):
        assert commands(PLAN, AUTO, HIGH_FROM_AUTO, reading(op_pct=60.0, **failed)) == (DriveOutput(50.0, TOKEN, 9, 2),)
        answer = next_hand_back_step(PLAN, AUTO, HOME_FROM_AUTO, reading(**failed))
        assert isinstance(answer, HandBackDone)
        assert answer.result is NOT_CONFIRMED
        assert answer.detail == f"PV has failed, so the loop stays in manual instead of AUTO; {by_hand(AUTO)}"


def test_a_loop_found_in_manual_comes_home_with_a_failed_pv_too() -> None:
    assert result(PLAN, found(), held(), reading(pv_pct=None, pv_quality=Quality.BAD)) is RESTORED


@pytest.mark.parametrize(
    "taken",
    [
        {"mode": LoopMode.AUTO},
        {"mode": LoopMode.CAS},
        {"op_pct": 70.0},
        {"sp_pct": 45.0},
    ],
)
def test_a_loop_that_somebody_took_is_theirs(taken: dict[str, Any]) -> None:
    assert result(PLAN, AUTO, HIGH_FROM_AUTO, reading(**{"op_pct": 60.0, **taken})) is TAKEN


def test_somebodys_loop_costs_only_our_token() -> None:
    taken = reading(op_pct=70.0, guard=guard())
    answer = next_hand_back_step(GUARDED, found(), HIGH, taken)
    assert isinstance(answer, HandBackWrites)
    assert answer.commands == (ReleaseLoop(),)
    assert result(GUARDED, found(), answer.held, taken) is TAKEN


@pytest.mark.parametrize("changes", [{"op_pct": 70.0}, {"sp_pct": 55.0}, {"mode": LoopMode.AUTO}])
def test_a_loop_that_was_taken_stays_theirs_once_our_token_has_gone(changes: dict[str, Any]) -> None:
    answer = next_hand_back_step(GUARDED, AUTO, HOME_FROM_AUTO, reading(guard=guard(), **changes))
    assert isinstance(answer, HandBackWrites)
    assert answer.commands == (ReleaseLoop(),)
    let_go = reading(guard=guard(state=GuardState.IDLE, holder=0), **changes)
    assert result(GUARDED, AUTO, answer.held, let_go) is TAKEN


def test_whoever_changes_the_loop_while_our_token_goes_has_it() -> None:
    answer = next_hand_back_step(GUARDED, found(), held(), reading(guard=guard()))
    assert isinstance(answer, HandBackWrites)
    assert answer.commands == (ReleaseLoop(),)
    theirs = reading(op_pct=70.0, guard=guard(state=GuardState.IDLE, holder=0))
    assert result(GUARDED, found(), answer.held, theirs) is TAKEN


@pytest.mark.parametrize("sample", [reading(op_pct=None), reading(op_pct=nan), reading(mode=LoopMode.NOT_KNOWN)])
def test_what_cannot_be_read_is_read_again(sample: Sample) -> None:
    answer = next_hand_back_step(PLAN, found(), HIGH, sample)
    assert answer == HandBackWrites((), HIGH)


def test_a_guard_that_cannot_be_read_is_read_again() -> None:
    assert next_hand_back_step(GUARDED, found(), HIGH, reading(op_pct=60.0)) == HandBackWrites((), HIGH)


def test_with_a_guard_the_token_goes_last_and_is_seen_to_go() -> None:
    assert commands(GUARDED, found(), held(), reading(guard=guard())) == (ReleaseLoop(),)
    free = reading(guard=guard(state=GuardState.IDLE, holder=0))
    released = next_hand_back_step(GUARDED, found(), held(), free)
    assert isinstance(released, HandBackWrites)
    assert released.commands == (ReleaseLoop(),), "a request that waits would arm the guard at its next chance"
    assert result(GUARDED, found(), released.held, free) is RESTORED


def test_with_a_guard_the_heartbeat_goes_on_until_the_mode_is_back() -> None:
    asked = commands(GUARDED, AUTO, HOME_FROM_AUTO, reading(guard=guard()))
    assert asked == (ClaimLoop(TOKEN, 9, 1), SetMode(LoopMode.AUTO))


def test_a_guard_that_names_no_holder_is_released_when_it_disarms() -> None:
    assert commands(GUARDED, found(), held(), reading(guard=guard(holder=None))) == (ReleaseLoop(),)
    done = replace(held(), has_release_been_asked=True)
    assert result(GUARDED, found(), done, reading(guard=guard(holder=None, state=GuardState.IDLE))) is RESTORED


def test_after_the_guard_gave_back_only_the_request_is_withdrawn() -> None:
    given = reading(guard=guard(state=GuardState.GAVE_BACK, holder=0))
    answer = next_hand_back_step(GUARDED, found(), HIGH, given)
    assert isinstance(answer, HandBackWrites)
    assert answer.commands == (ReleaseLoop(),)
    assert result(GUARDED, found(), answer.held, given) is GAVE_BACK
    acknowledged = reading(guard=guard(state=GuardState.IDLE, holder=0))
    assert result(GUARDED, found(), answer.held, acknowledged) is GAVE_BACK


def test_while_what_the_guard_gave_back_does_not_read_as_found_nothing_is_written() -> None:
    for state in (GuardState.GAVE_BACK, GuardState.IDLE, GuardState.NOT_KNOWN):
        given = reading(op_pct=60.0, guard=guard(state=state, holder=0))
        assert commands(GUARDED, found(), HIGH, given) == ()


def test_a_guard_that_left_a_failed_loop_in_manual_is_no_confirmed_hand_back() -> None:
    given = reading(pv_pct=None, pv_quality=Quality.BAD, guard=guard(state=GuardState.GAVE_BACK, holder=0))
    answer = next_hand_back_step(GUARDED, AUTO, HIGH_FROM_AUTO, given)
    assert isinstance(answer, HandBackWrites)
    assert answer.commands == (ReleaseLoop(),)
    assert result(GUARDED, AUTO, answer.held, given) is NOT_CONFIRMED


def test_a_loop_that_another_token_holds_is_theirs() -> None:
    other = reading(op_pct=60.0, guard=guard(holder=99))
    assert result(GUARDED, found(), HIGH, other) is TAKEN


@pytest.mark.parametrize(
    ("changes", "expected"),
    [({}, RESTORED), ({"op_pct": 60.0}, NOT_CONFIRMED), ({"mode": LoopMode.AUTO}, NOT_CONFIRMED)],
)
def test_after_a_restart_of_the_plc_nothing_is_written(changes: dict[str, Any], expected: HandBackResult) -> None:
    assert result(PLAN, found(boot_count=3), HIGH, reading(boot_count=4, **changes)) is expected


def test_a_restart_count_that_cannot_be_read_is_read_again() -> None:
    assert commands(PLAN, found(boot_count=3), HIGH, reading(op_pct=60.0)) == ()
    assert commands(PLAN, found(boot_count=3), HIGH, reading(op_pct=60.0, boot_count=3)) != ()


def test_a_mode_change_that_never_landed_leaves_nothing_to_do() -> None:
    asked = Held(mode=LoopMode.MAN, token=TOKEN, modes_may_read=(LoopMode.AUTO, LoopMode.MAN))
    assert result(PLAN, AUTO, asked, reading(mode=LoopMode.AUTO, op_pct=57.0)) is RESTORED


def test_a_mode_change_that_landed_unseen_is_taken_back_without_touching_the_output() -> None:
    asked = Held(mode=LoopMode.MAN, token=TOKEN, modes_may_read=(LoopMode.AUTO, LoopMode.MAN))
    assert commands(PLAN, AUTO, asked, reading(op_pct=57.0)) == (SetMode(LoopMode.AUTO),)


def test_what_was_never_driven_is_left_alone() -> None:
    claimed = Held(token=TOKEN, heartbeat=3)
    assert commands(GUARDED, found(), claimed, reading(guard=guard())) == (ReleaseLoop(),)


def test_an_overdue_hand_back_names_what_to_enter_by_hand() -> None:
    done = hand_back_overdue(found(op_pct=42.5, sp_pct=None), "no answer")
    assert done.result is NOT_CONFIRMED
    assert done.detail == "no answer; as found: output 42.50 %, setpoint not read, mode MAN"
