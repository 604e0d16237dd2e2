"""The small parts of the service: the grid of scans, deafness, words, people, the workplace, the worker."""

import asyncio
import getpass
from dataclasses import replace
from datetime import UTC
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.config.types import Configuration, LoopConfig, ModbusEndpoint, OpcUaEndpoint
from autotune.errors import ConfigError, LoopBusy, SheetError
from autotune.experiment.events import HandBackEnded, HandBackResult
from autotune.experiment.machine import begin
from autotune.experiment.phases import Phase
from autotune.experiment.state import EndKind, Experiment, record
from autotune.identify.findings import Findings
from autotune.identify.measure import measure
from autotune.loop.outcome import Refusal, Trip
from autotune.loop.settings import BlockFields, DerivativeKind, GainKind, GainPer, IntegralKind
from autotune.service.clock import TICK_S, utc_now
from autotune.service.deaf import to_the_end
from autotune.service.estimator import InlineEstimator, WorkerEstimator
from autotune.service.persons import Person, person_at_the_terminal
from autotune.service.scan_grid import ScanGrid
from autotune.service.sheet_mapping import controller_line, field_units, fields_of, settings_quantities
from autotune.service.words import end_in_words
from autotune.service.workplace import new_token, open_workplace
from tests.experiment.bench import plan_for
from tests.fakes.plant import WITH_GUARD, WITHOUT_GUARD, PlantInMemory
from tests.fakes.virtual_time import run_virtual
from tests.field.loops import at_endpoint
from tests.service.bench import begin as begin_test
from tests.service.bench import run, workplace_at


@given(
    start_s=st.floats(0.0, 1e6),
    scan_s=st.floats(0.01, 10.0),
    waits=st.lists(st.floats(0.0, 5.0), min_size=1, max_size=30),
)
def test_a_grid_hands_out_each_instant_once_and_counts_every_one_it_skips(
    start_s: float, scan_s: float, waits: list[float]
) -> None:
    grid = ScanGrid(start_s, scan_s)
    now_s, taken, missed = start_s, 0, 0
    for wait in waits:
        now_s = max(now_s + wait * scan_s, grid.due_s)
        due_s = grid.due_s
        skipped = grid.take(now_s)
        taken, missed = taken + 1, missed + skipped
        assert skipped >= 0
        assert grid.due_s > due_s
        assert grid.due_s == start_s + (taken + missed) * scan_s  # absolute: nothing adds up
        assert grid.due_s >= now_s - 1e-6 * scan_s - 1e-9 * now_s


def test_a_scan_taken_a_little_early_by_the_timer_is_not_taken_twice() -> None:
    grid = ScanGrid(0.0, 0.1)
    assert grid.take(0.0) == 0
    assert grid.take(0.1 - 1e-12) == 0
    assert grid.due_s == pytest.approx(0.2)


def test_deaf_work_goes_on_through_cancellations_and_raises_the_last_of_them() -> None:
    heard: list[str] = []

    async def main() -> None:
        done = asyncio.Event()

        async def work() -> str:
            await asyncio.sleep(1.0)
            done.set()
            return "done"

        task = asyncio.ensure_future(to_the_end(work(), lambda: heard.append("cancel")))
        for _ in range(3):
            await asyncio.sleep(0.1)
            task.cancel()
        with pytest.raises(asyncio.CancelledError):
            await task
        assert done.is_set()

    run_virtual(main())
    assert heard == ["cancel"] * 3


def test_deaf_work_that_was_left_alone_gives_its_result_and_its_fault() -> None:
    async def main() -> None:
        async def give(fault: Exception | None) -> str:
            await asyncio.sleep(0.1)
            if fault is not None:
                raise fault
            return "done"

        assert await to_the_end(give(None), lambda: None) == "done"
        with pytest.raises(ZeroDivisionError):
            await to_the_end(give(ZeroDivisionError()), lambda: None)
        task = asyncio.ensure_future(to_the_end(give(ZeroDivisionError()), lambda: None))
        await asyncio.sleep(0.05)
        task.cancel()
        with pytest.raises(ZeroDivisionError):  # the fault says more than the cancellation
            await task

    run_virtual(main())


ABORTED = replace(begin(plan_for()), phase=Phase.ABORTED)
BACK = HandBackEnded(1.0, HandBackResult.RESTORED, "as found: output 45.00 %, setpoint 50.00 %, mode AUTO")


def _touched(phase: Phase, **changes: object) -> Experiment:
    as_found = run(begin_test(WITHOUT_GUARD)).experiment.as_found
    return replace(begin(plan_for()), phase=phase, as_found=as_found, hand_back=BACK, **changes)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("experiment", "words"),
    [
        (
            replace(ABORTED, trip=Trip("PV_RANGE", "PV left its limits", 1.0)),
            "Stopped by PV_RANGE: PV left its limits.",
        ),
        (replace(ABORTED, refusals=(Refusal("A", "a", "x"), Refusal("B", "b", "y"))), "Refused. A: a; x. B: b; y."),
        (ABORTED, "Nothing was changed."),
        (replace(ABORTED, because="finished early by R. Lind"), "Finished early by R. Lind."),
        (begin(plan_for()), ""),
    ],
)
def test_an_untouched_end_is_told_in_words(experiment: Experiment, words: str) -> None:
    assert words in end_in_words(experiment)


@pytest.mark.parametrize(
    ("phase", "words"),
    [
        (Phase.COMPLETE, "The loop is back: restored; as found: output 45.00 %"),
        (Phase.RELEASED, "Somebody took the loop; it is theirs"),
        (Phase.STRANDED, "THE LOOP WAS NOT SHOWN TO BE AS FOUND. Go to the panel now and enter by hand: as found"),
    ],
)
def test_what_became_of_a_touched_loop_is_told_in_words(phase: Phase, words: str) -> None:
    assert words in end_in_words(_touched(phase))
    assert "Seen enough: 0 cycles agree." in end_in_words(_touched(phase, end=EndKind.ENOUGH))


def test_a_person_without_an_account_is_typed_and_not_authenticated() -> None:
    assert str(person_at_the_terminal("R. Lind")) == "R. Lind (typed, not authenticated)"
    assert person_at_the_terminal().name == getpass.getuser()
    assert str(Person("R. Lind", is_authenticated=True)) == "R. Lind"


def test_the_clock_is_in_utc_and_its_tick_is_short() -> None:
    assert utc_now().tzinfo is UTC
    assert 0.0 < TICK_S < 0.1


def test_a_token_is_never_nobody_and_fits_its_register() -> None:
    tokens = {new_token() for _ in range(100)}
    assert len(tokens) == 100
    assert all(1 <= token <= 2**32 - 1 for token in tokens)


def test_an_unknown_loop_is_told_with_those_there_are(tmp_path: Path) -> None:
    workplace = workplace_at(PlantInMemory(), tmp_path, WITH_GUARD)
    assert workplace.loop("TIC-204") is WITH_GUARD
    with pytest.raises(ConfigError, match=r"no loop is called 'TIC-205'; use one of TIC-204"):
        workplace.loop("TIC-205")


def _over_opc_ua(loop: LoopConfig) -> LoopConfig:
    return replace(loop, controller=replace(loop.controller, endpoint=OpcUaEndpoint("opc.tcp://10.0.0.8:4840")))


def test_loops_of_one_controller_or_one_unit_have_one_master_on_this_machine(tmp_path: Path) -> None:
    workplace = replace(workplace_at(PlantInMemory(), tmp_path, WITH_GUARD), wall_clock=utc_now)
    elsewhere = replace(WITH_GUARD, name="TIC-9", unit="elsewhere")
    same_unit = at_endpoint(replace(WITH_GUARD, name="TIC-8"), ModbusEndpoint("10.0.0.9", 502, 1))
    other = _over_opc_ua(replace(elsewhere, name="TIC-7"))
    with workplace.hold(WITH_GUARD, "a test"):
        for loop in (elsewhere, same_unit):
            with pytest.raises(LoopBusy, match="a test"):
                workplace.hold(loop, "another")
        with workplace.hold(other, "another"):
            pass


def _configured(data_dir: Path) -> Configuration:
    return Configuration(Path("plant.toml"), data_dir, (WITH_GUARD,), (WITH_GUARD.controller,), 1, "c" * 64)


def test_a_store_is_begun_only_where_that_was_asked_for(tmp_path: Path) -> None:
    configuration = _configured(tmp_path / "kept")
    with pytest.raises(SheetError):
        open_workplace(configuration, may_create=False).store.list()
    assert open_workplace(configuration, may_create=True).store.list() == ()
    assert open_workplace(configuration, may_create=False).store.list() == ()
    assert open_workplace(configuration, may_create=True).data_dir == tmp_path / "kept"


def test_a_place_that_can_not_hold_a_store_is_told(tmp_path: Path) -> None:
    (tmp_path / "a file").write_text("")
    with pytest.raises(SheetError, match="choose another data_dir"):
        open_workplace(_configured(tmp_path / "a file" / "kept"), may_create=True)


def test_a_controller_is_named_with_how_it_is_reached() -> None:
    assert controller_line(WITH_GUARD) == "skid PLC, Modbus/TCP 127.0.0.1:1, device 17"
    assert controller_line(_over_opc_ua(WITH_GUARD)) == "skid PLC, OPC UA opc.tcp://10.0.0.8:4840"


@pytest.mark.parametrize(
    ("gain_kind", "gain_per", "unit"),
    [
        (GainKind.GAIN, GainPer.PERCENT, "%/%"),
        (GainKind.GAIN, GainPer.ENGINEERING_UNIT, "%/degC"),
        (GainKind.PROPORTIONAL_BAND, GainPer.PERCENT, "%"),
        (GainKind.PROPORTIONAL_BAND, GainPer.ENGINEERING_UNIT, "degC"),
    ],
)
def test_settings_carry_the_units_of_their_block(gain_kind: GainKind, gain_per: GainPer, unit: str) -> None:
    block = replace(WITH_GUARD.block, gain_kind=gain_kind, gain_per=gain_per)
    assert field_units(block, "degC") == (unit, "s", "s")
    for integral in IntegralKind:
        for derivative in DerivativeKind:
            units = field_units(replace(block, integral_kind=integral, derivative_kind=derivative), "degC")
            assert all(units)


@given(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6), st.none() | st.floats(-1e6, 1e6))
def test_settings_on_a_sheet_are_the_settings_that_were_read(
    gain: float, integral: float, derivative: float | None
) -> None:
    fields = BlockFields(gain, integral, derivative)
    assert fields_of(settings_quantities(WITH_GUARD, fields)) == fields


def test_settings_that_were_not_read_are_none() -> None:
    assert settings_quantities(WITH_GUARD, None) == ()
    assert fields_of(()) is None


def test_the_worker_process_finds_what_the_calling_process_finds() -> None:
    recorded = record(run(begin_test(WITH_GUARD)).experiment)
    assert recorded is not None
    here = asyncio.run(InlineEstimator().measure(recorded))
    assert isinstance(here, Findings)
    assert here == measure(recorded)
    there = asyncio.run(WorkerEstimator().measure(recorded))
    assert isinstance(there, Findings)
    assert there.describing_function == here.describing_function
    assert there.ultimate.method == here.ultimate.method
    # the worker sums on one thread: the last digits of a fit may differ
    assert there.ultimate.ultimate_gain.best == pytest.approx(here.ultimate.ultimate_gain.best, rel=1e-3)
    assert there.ultimate.ultimate_period_s.best == pytest.approx(here.ultimate.ultimate_period_s.best, rel=1e-3)
