"""The judge of the campaign can say no: what was written, what was shown, and how a loop was left."""

from dataclasses import replace
from math import nan
from typing import Any

import pytest

from tests.faults.evidence import End, Evidence, judge, pv_beyond_pct, seconds_to_safe
from tests.faults.wire import Shown, Write

FOUND: dict[str, Any] = {
    "mode": "AUTO", "sp": 50.0, "op": 45.0, "gain": 0.8, "integral": 2.25, "derivative": 0.125,
    "guard_state": "idle", "boot_count": 1, "true_pv_pct": 50.0,
}  # fmt: skip
NEW = {"gain": 0.4, "integral": 1.5, "derivative": 0.0}
LOUD = "TIC-1: not confirmed; as found: output 45.00 %, setpoint 50.00 %, mode AUTO"
TEST = Evidence(
    found=FOUND, left=FOUND, taken={}, wanted=None, struck_s=10.0, word="ABORTED", exit_code=1, said="",
    writes=(Write(1.0, {"holder_request": 7.0}), Write(2.0, {"mode": 0}), Write(3.0, {"op_request": 53.0})), shown=(),
)  # fmt: skip
SETTINGS = replace(TEST, wanted=NEW, word="WRITTEN", exit_code=0, left=FOUND | NEW, writes=(Write(1.0, {"mode": 0}),))


def left(**changes: Any) -> dict[str, Any]:
    return FOUND | changes


def test_a_loop_that_reads_as_found_is_restored_whatever_its_output_in_automatic() -> None:
    assert judge(TEST).end is End.RESTORED
    assert judge(replace(TEST, left=left(op=61.0))).end is End.RESTORED


@pytest.mark.parametrize(
    "change", [{"mode": "MAN"}, {"sp": 50.1}, {"gain": 0.81}, {"derivative": 0.0}, {"guard_state": "armed"}]
)
def test_a_loop_that_does_not_read_as_found_is_silent_unless_told_loudly(change: dict[str, Any]) -> None:
    changed = replace(TEST, left=left(**change))
    assert judge(changed).end is End.SILENT
    assert judge(replace(changed, exit_code=4)).end is End.SILENT
    assert judge(replace(changed, said=LOUD)).end is End.SILENT
    assert judge(replace(changed, exit_code=4, said=LOUD)).end is End.STRANDED


def test_an_output_left_in_manual_counts_where_manual_was_found() -> None:
    manual = replace(TEST, found=FOUND | {"mode": "MAN"})
    assert judge(replace(manual, left=left(mode="MAN"))).end is End.RESTORED
    assert judge(replace(manual, left=left(mode="MAN", op=46.0))).end is End.SILENT


def test_a_loop_with_somebody_else_is_released_only_where_that_was_said_or_could_not_be_seen() -> None:
    taken = {"op": 33.0, "mode": "MAN"}
    theirs = replace(TEST, taken=taken, left=left(**taken), word="RELEASED")
    assert judge(theirs).end is End.RELEASED
    assert judge(replace(theirs, left=left())).end is End.RESTORED
    seen = replace(theirs, word="ABORTED", shown=(Shown(11.0, {"mode": 0, "op": 33.0}),))
    assert judge(seen).end is End.SILENT
    assert judge(replace(seen, left=left())).end is End.RESTORED
    assert judge(replace(theirs, word="ABORTED")).end is End.RELEASED


def test_released_is_a_complaint_where_nobody_took_the_loop() -> None:
    assert judge(TEST).complaints == ()
    assert judge(replace(TEST, word="RELEASED")).complaints == ("said RELEASED, though nobody had taken the loop",)


@pytest.mark.parametrize("word", ["WRITTEN", "PUT_BACK", "REFUSED", "UNVERIFIED"])
@pytest.mark.parametrize("settings", [NEW, {}, {"gain": 0.4}])
def test_settings_are_all_old_or_all_new_and_as_they_were_said_to_be(word: str, settings: dict[str, float]) -> None:
    true: dict[str, list[dict[str, float]]] = {"WRITTEN": [NEW], "UNVERIFIED": [NEW, {}]}
    is_true = settings in true.get(word, [{}])
    end = judge(replace(SETTINGS, word=word, left=left(**settings))).end
    assert end is (End.RESTORED if is_true else End.SILENT)


@pytest.mark.parametrize(
    "numbers",
    [
        {"op_request": 54.0}, {"op_request": 36.0}, {"op_request": nan}, {"op": 45.0}, {"mode": 2}, {"sp": 50.0},
        {"gain": 0.8}, {"holder": 7.0}, {"heartbeat": 3, "sequence": 1, "op_request": 80.0, "holder_request": 7.0},
    ],
)  # fmt: skip
def test_a_write_that_a_test_may_never_send_is_counted(numbers: dict[str, float]) -> None:
    verdict = judge(replace(TEST, writes=(Write(1.0, numbers),)))
    assert verdict.beyond_limits == 1
    assert len(verdict.complaints) == 1


@pytest.mark.parametrize(
    "numbers", [{"op_request": 53.0}, {"op_request": 37.0}, {"mode": 0}, {"mode": 1}, {"heartbeat": 9}]
)
def test_a_write_that_a_test_may_send_is_not(numbers: dict[str, float]) -> None:
    assert judge(replace(TEST, writes=(Write(1.0, numbers),))).beyond_limits == 0


def test_other_addresses_are_counted_and_without_a_guard_so_is_its_mailbox() -> None:
    assert judge(replace(TEST, writes=(Write(1.0, {}, (50,)),))).beyond_limits == 1
    bare = replace(TEST, has_guard=False)
    assert judge(replace(bare, writes=(Write(1.0, {"op": 53.0}),))).beyond_limits == 0
    assert judge(replace(bare, writes=(Write(1.0, {"holder_request": 7.0}),))).beyond_limits == 1


def test_settings_are_written_only_with_the_numbers_as_found_or_as_confirmed() -> None:
    for number, beyond in ((0.4, 0), (0.8, 0), (0.5, 1)):
        assert judge(replace(SETTINGS, writes=(Write(1.0, {"gain": number}),))).beyond_limits == beyond
    assert judge(replace(SETTINGS, writes=(Write(1.0, {"op": 45.0}),))).beyond_limits == 1


@pytest.mark.parametrize(
    ("taken", "shown"),
    [
        ({}, {"guard_state": 2}),
        ({}, {"boot_count": 2}),
        ({"mode": "AUTO"}, {"mode": 1}),
        ({"sp": 50.5}, {"sp": 50.5}),
        ({"op": 33.0, "mode": "MAN"}, {"op": 33.0, "mode": 0}),
    ],
)
def test_a_write_after_the_loss_was_shown_is_counted_and_a_release_is_not(
    taken: dict[str, Any], shown: dict[str, float]
) -> None:
    ours = Shown(5.0, {"mode": 0, "op": 53.0, "guard_state": 1})
    lost = replace(TEST, taken=taken, shown=(ours, Shown(11.0, shown)))
    assert judge(lost).writes_after_release == 0
    before, release, after = Write(10.5, {"mode": 0}), Write(12.0, {"holder_request": 0.0}), Write(12.0, {"mode": 1})
    for write, count in ((before, 0), (release, 0), (after, 1)):
        assert judge(replace(lost, writes=(*TEST.writes, write))).writes_after_release == count


def test_a_mode_as_found_is_no_loss_before_manual_was_ever_shown() -> None:
    waiting = replace(SETTINGS, taken={"mode": "AUTO"}, writes=(Write(1.0, {"mode": 0}), Write(12.0, {"mode": 1})))
    assert judge(replace(waiting, shown=(Shown(11.0, {"mode": 1}),))).writes_after_release == 0
    assert judge(replace(waiting, shown=(Shown(5.0, {"mode": 0}), Shown(11.0, {"mode": 1})))).writes_after_release == 1


def test_what_happens_before_the_first_write_is_as_found() -> None:
    early = replace(TEST, taken={"sp": 50.5}, left=left(sp=50.5), writes=(Write(12.0, {"mode": 0}),))
    verdict = judge(replace(early, shown=(Shown(11.0, {"sp": 50.5}),)))
    assert (verdict.end, verdict.writes_after_release) == (End.RESTORED, 0)


def test_an_output_moved_before_the_test_drove_it_is_no_loss() -> None:
    moved = {"op": 33.0, "mode": "MAN"}
    early = replace(TEST, taken=moved, writes=(*TEST.writes[:2], Write(12.0, {"op_request": 45.0})))
    verdict = judge(replace(early, shown=(Shown(11.0, {"op": 33.0, "mode": 0}),)))
    assert (verdict.end, verdict.writes_after_release) == (End.RESTORED, 0)


def test_times_and_excursions_are_counted_from_the_strike() -> None:
    driven = left(mode="MAN", guard_state="armed", true_pv_pct=59.5)
    seen = [(1.0, driven), (9.0, left(true_pv_pct=80.0)), (10.5, driven), (11.0, left(mode="MAN")), (11.25, left())]
    assert seconds_to_safe(seen, TEST) == 1.25
    assert seconds_to_safe(seen[:4], TEST) is None
    assert seconds_to_safe(seen[4:], TEST) == 0.0
    assert pv_beyond_pct(seen, 10.0) == 1.5
    assert pv_beyond_pct(seen[4:], 10.0) == 0.0
