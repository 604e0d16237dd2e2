"""Whose loop it is (S3)."""

from math import nan, nextafter

import pytest

from autotune.experiment.held import Held, drive
from autotune.experiment.takeover import sign_of_takeover
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.sample import Sample
from tests.experiment.bench import LIMITS, TOKEN, plan_for
from tests.experiment.readings import found, guard, held, reading

RESOLUTION_PCT = LIMITS.op_resolution_pct


def sign(sample: Sample, hold: Held, as_found: AsFound | None = None, *, tracks: bool = False) -> str | None:
    return sign_of_takeover(plan_for(sp_tracks_in_manual=tracks), as_found or found(), hold, sample)


def test_a_loop_as_we_left_it_is_ours() -> None:
    assert sign(reading(), held()) is None


@pytest.mark.parametrize("mode", [mode for mode in LoopMode if mode not in (LoopMode.MAN, LoopMode.NOT_KNOWN)])
def test_a_mode_that_left_manual_is_a_takeover(mode: LoopMode) -> None:
    ours = held(mode=LoopMode.MAN, modes_may_read=(LoopMode.MAN,))
    assert mode.value in str(sign(reading(mode=mode), ours, found(mode=LoopMode.AUTO)))


def test_a_mode_that_could_not_be_read_is_no_sign() -> None:
    assert sign(reading(mode=LoopMode.NOT_KNOWN), held()) is None


def test_until_manual_is_read_back_the_mode_as_found_is_no_surprise() -> None:
    asked = Held(mode=LoopMode.MAN, token=TOKEN, modes_may_read=(LoopMode.AUTO, LoopMode.MAN))
    as_found = found(mode=LoopMode.AUTO)
    assert sign(reading(mode=LoopMode.AUTO, op_pct=77.0), asked, as_found) is None
    assert sign(reading(mode=LoopMode.MAN, op_pct=77.0), asked, as_found) is None
    assert sign(reading(mode=LoopMode.CAS), asked, as_found) is not None


@pytest.mark.parametrize(
    ("sp_pct", "is_sign"), [(40.0, False), (40.009, False), (40.02, True), (None, False), (nan, False)]
)
def test_a_setpoint_that_we_did_not_move_is_a_takeover_unless_it_tracks(sp_pct: float | None, is_sign: bool) -> None:
    assert (sign(reading(sp_pct=sp_pct), held()) is not None) is is_sign
    assert sign(reading(sp_pct=sp_pct), held(), tracks=True) is None
    assert sign(reading(sp_pct=sp_pct), held(), found(sp_pct=None)) is None


@pytest.mark.parametrize(("holder", "is_sign"), [(TOKEN, False), (0, False), (None, False), (99, True)])
def test_another_holder_of_the_guard_is_a_takeover(holder: int | None, is_sign: bool) -> None:
    assert (sign(reading(guard=guard(holder=holder)), held()) is not None) is is_sign


@pytest.mark.parametrize(
    ("op_pct", "is_sign"),
    [
        (50.0 + RESOLUTION_PCT, False),
        (50.0 - RESOLUTION_PCT, False),
        (nextafter(50.0 + RESOLUTION_PCT, 99.0), True),
        (nextafter(50.0 - RESOLUTION_PCT, 0.0), True),
        (60.0, True),
        (None, False),
        (nan, False),
    ],
)
def test_once_seen_our_output_may_not_change(op_pct: float | None, is_sign: bool) -> None:
    assert (sign(reading(op_pct=op_pct), held()) is not None) is is_sign


@pytest.mark.parametrize(
    ("op_pct", "is_sign"), [(50.0, False), (53.0, False), (60.0, False), (60.05, False), (60.1, True), (49.9, True)]
)
def test_until_a_move_is_seen_the_output_may_lie_anywhere_on_its_way(op_pct: float, is_sign: bool) -> None:
    moving, _ = drive(held(), 60.0, 50.0)
    assert (sign(reading(op_pct=op_pct), moving) is not None) is is_sign


def test_a_move_that_was_not_seen_yet_stays_possible_after_the_next_one() -> None:
    moving, _ = drive(held(), 60.0, 50.0)
    moving, _ = drive(moving, 45.0, 50.0)
    assert sign(reading(op_pct=60.0), moving) is None
    assert sign(reading(op_pct=44.0), moving) is not None


@pytest.mark.parametrize(
    ("mode", "op_pct", "is_sign"),
    [(LoopMode.MAN, 50.0, False), (LoopMode.MAN, 55.0, True), (LoopMode.AUTO, 55.0, False)],
)
def test_before_we_drive_it_the_output_is_the_operators_in_manual_and_the_blocks_in_automatic(
    mode: LoopMode, op_pct: float, is_sign: bool
) -> None:
    untouched = Held(token=TOKEN)
    assert (sign(reading(mode=mode, op_pct=op_pct), untouched, found(mode=mode)) is not None) is is_sign


def test_a_hold_whose_modes_are_not_known_explains_only_the_mode_asked_last() -> None:
    recovered = held(mode=LoopMode.MAN, modes_may_read=())
    assert sign(reading(mode=LoopMode.MAN), recovered, found(mode=LoopMode.AUTO)) is None
    assert sign(reading(mode=LoopMode.AUTO), recovered, found(mode=LoopMode.AUTO)) is not None


def test_a_hold_whose_range_is_not_known_explains_only_its_last_write() -> None:
    recovered = held(op_may_read_pct=None)
    assert recovered.has_op_in_reach(50.0, 0.05)
    assert not recovered.has_op_in_reach(50.1, 0.05)
    assert not Held().has_op_in_reach(50.0, 0.05)
