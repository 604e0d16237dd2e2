"""A change of settings from the sheet to its addendum, in virtual time (S4)."""

import asyncio
from collections.abc import Awaitable, Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from autotune.config.types import LoopConfig
from autotune.confirmed_write.confirmation import GOOD_FOR_S
from autotune.confirmed_write.phases import Phase
from autotune.confirmed_write.plan import FieldLimit, WritePlan
from autotune.errors import LinkError, RecordNotKept, SheetError
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockFields
from autotune.service.changing import ChangeEnd, SettingsChange, digest_to_type, earlier_settings
from autotune.service.journal_intents import open_intents
from autotune.service.persons import Person
from autotune.service.recovery import close_write_intents, open_write_intents, recover
from autotune.service.sheet_mapping import settings_quantities
from autotune.service.workplace import Workplace
from autotune.sheet import schema
from autotune.sheet.store import SheetStore, StoredSheet
from tests.fakes.link import FakeLink, Fault, FaultKind
from tests.fakes.plant import WITH_GUARD, PlantInMemory
from tests.fakes.virtual_time import run_virtual
from tests.service.bench import workplace_at
from tests.service.test_testing import supervise

R_LIND = Person("R. Lind")
OLD, NEW = BlockFields(0.375, 1.5, 0.0), BlockFields(0.625, 2.5, 0.25)
NAME = "tyreus-luyben-pid"

LOOP = WITH_GUARD


class Place:
    """A workplace with one sheet that proposes ``NEW`` for a controller that holds ``OLD``."""

    def __init__(self, folder: Path, sheet: schema.Sheet, loop: LoopConfig = LOOP, **changes: object) -> None:
        self.plant = PlantInMemory()
        self.workplace: Workplace = workplace_at(self.plant, folder, loop)
        self.loop = loop
        proposal = schema.Proposal(
            name=NAME, title="a title", source="a source", settings=settings_quantities(loop, NEW), gain_factor=1.0
        )
        bare = schema.Proposal(name="none-pi", title="t", source="s", not_proposed_because="NO_DATA: too few")
        self.sheet = sheet.model_copy(update={"proposals": (proposal, bare), **changes})
        self.workplace.store.append(self.sheet)

    @property
    def stored(self) -> StoredSheet:
        return self.workplace.store.get(self.sheet.sheet_id)

    @property
    def link(self) -> FakeLink:
        return self.plant.links[-1]

    @property
    def held(self) -> BlockFields:
        settings = self.plant.loop.block.settings
        return BlockFields(settings.gain, settings.integral, settings.derivative)


@pytest.fixture(scope="module")
def sheet(tmp_path_factory: pytest.TempPathFactory) -> schema.Sheet:
    return supervise(LOOP, tmp_path_factory.mktemp("tested")).sheet


@pytest.fixture
def place(tmp_path: Path, sheet: schema.Sheet) -> Place:
    return Place(tmp_path, sheet)


def change(place: Place, act: Callable[[SettingsChange], Awaitable[Any]], **how: Any) -> Any:
    async def main() -> Any:
        await asyncio.sleep(1.0)
        async with SettingsChange(place.workplace, place.loop) as one:
            return await act(one)

    return run_virtual(main(), within_s=600.0, **how)


async def planned(one: SettingsChange, place: Place) -> WritePlan:
    plan = await one.plan_proposal(place.stored, NAME)
    assert isinstance(plan, WritePlan), plan
    return plan


def write_it(place: Place) -> Callable[[SettingsChange], Awaitable[ChangeEnd | Refusal]]:
    async def act(one: SettingsChange) -> ChangeEnd | Refusal:
        plan = await planned(one, place)
        return await one.write("write", place.sheet.sheet_id, plan, digest_to_type(plan), R_LIND)

    return act


def test_a_confirmed_proposal_is_written_read_back_and_kept(place: Place) -> None:
    ended = change(place, write_it(place))
    assert isinstance(ended, ChangeEnd)
    assert (ended.state.phase, ended.is_read_back_equal) == (Phase.WRITTEN, True)
    assert place.held == NEW
    (kept,) = place.stored.addenda
    assert isinstance(kept, schema.Change)
    assert (kept.kind, kept.result, kept.source) == ("write", "WRITTEN", NAME)
    assert kept.person is not None
    assert kept.person.name == "R. Lind"
    assert [write.name for write in kept.writes] == list(kept.order)
    assert [one.amount for one in kept.read_back] == [0.625, 2.5, 0.25]
    assert kept.plan_digest.startswith(kept.confirmation_digest.replace("-", ""))
    assert place.workplace.store.head_hash() == ended.addendum_hash
    assert open_intents(place.workplace.data_dir) == ()


class FullStore:
    """The store of a place, with no room left for more."""

    def __init__(self, store: SheetStore) -> None:
        self._store = store

    def get(self, sheet_id: str) -> StoredSheet:
        return self._store.get(sheet_id)

    def append_addendum(self, addendum: schema.Addendum) -> str:
        raise SheetError(f"the disk is full; nothing can be added to {addendum.sheet_id}")


@pytest.mark.parametrize("is_seen", [True, False])
def test_how_a_write_ended_is_told_though_its_addendum_can_not_be_kept(place: Place, is_seen: bool) -> None:
    place.workplace = replace(place.workplace, store=FullStore(place.workplace.store))  # type: ignore[arg-type]

    async def act(one: SettingsChange) -> ChangeEnd | Refusal:
        plan = await planned(one, place)
        if not is_seen:
            place.link.read_faults |= {number: Fault(FaultKind.SILENT) for number in range(4, 500)}
        return await one.write("write", place.sheet.sheet_id, plan, digest_to_type(plan), R_LIND)

    with pytest.raises(RecordNotKept, match=r"disk is full.*jsonl") as raised:
        change(place, act)
    assert str(raised.value).startswith("WRITTEN. " if is_seen else "UNVERIFIED. ")
    assert raised.value.is_stranded is not is_seen


@pytest.mark.parametrize(
    ("name", "code", "remedy"),
    [("no-such-rule", "NO_SUCH_PROPOSAL", f"use one of: {NAME}"), ("none-pi", "NO_SUCH_PROPOSAL", NAME)],
)
def test_a_proposal_that_the_sheet_lacks_is_refused_with_those_there_are(
    place: Place, name: str, code: str, remedy: str
) -> None:
    refusal = change(place, lambda one: one.plan_proposal(place.stored, name))
    assert isinstance(refusal, Refusal)
    assert refusal.code == code
    assert remedy in refusal.remedy


def test_another_configuration_is_refused(tmp_path: Path, sheet: schema.Sheet) -> None:
    place = Place(tmp_path, sheet, configuration_digest="d" * 64)
    refusal = change(place, lambda one: one.plan_proposal(place.stored, NAME))
    assert isinstance(refusal, Refusal)
    assert refusal.code == "CONFIGURATION_CHANGED"


def test_settings_that_somebody_changed_since_the_test_are_refused(place: Place) -> None:
    place.plant.loop.block.settings = replace(place.plant.loop.block.settings, integral=9.0)
    refusal = change(place, lambda one: one.plan_proposal(place.stored, NAME))
    assert isinstance(refusal, Refusal)
    assert refusal.code == "SETTINGS_CHANGED"
    assert "integral 9" in refusal.reason


@pytest.mark.parametrize(
    ("changes", "code"),
    [
        ({"is_writing_settings_allowed": False}, "WRITING_FORBIDDEN"),
        ({"field_limits": (("gain", FieldLimit(high=0.5)),)}, "FIELD_LIMIT"),
    ],
)
def test_what_the_site_forbids_is_refused(
    changes: dict[str, Any], code: str, tmp_path: Path, sheet: schema.Sheet
) -> None:
    place = Place(tmp_path, sheet, replace(LOOP, **changes))
    refusal = change(place, lambda one: one.plan_proposal(place.stored, NAME))
    assert isinstance(refusal, Refusal)
    assert refusal.code == code


def test_a_wrong_digest_writes_nothing_and_may_be_typed_again(place: Place) -> None:
    async def act(one: SettingsChange) -> None:
        plan = await planned(one, place)
        refused = await one.write("write", place.sheet.sheet_id, plan, "0000-0000", R_LIND)
        assert isinstance(refused, Refusal)
        assert refused.code == "DIGEST_WRONG"
        assert place.link.requests("write") == []
        assert isinstance(await one.write("write", place.sheet.sheet_id, plan, digest_to_type(plan), R_LIND), ChangeEnd)

    change(place, act)


def test_a_digest_is_good_for_one_write_only(place: Place) -> None:
    async def act(one: SettingsChange) -> None:
        plan = await planned(one, place)
        typed = digest_to_type(plan)
        assert isinstance(await one.write("write", place.sheet.sheet_id, plan, typed, R_LIND), ChangeEnd)
        before = len(place.link.log)
        again = await one.write("write", place.sheet.sheet_id, plan, typed, R_LIND)
        assert isinstance(again, Refusal)
        assert again.code == "CONFIRMATION_USED"
        assert len(place.link.log) == before

    change(place, act)


@pytest.mark.parametrize(("after_s", "is_good"), [(GOOD_FOR_S - 1.0, True), (GOOD_FOR_S + 1.0, False)])
def test_the_time_of_a_digest_runs_from_when_its_numbers_were_read(place: Place, after_s: float, is_good: bool) -> None:
    async def act(one: SettingsChange) -> None:
        plan = await planned(one, place)
        await asyncio.sleep(after_s)
        ended = await one.write("write", place.sheet.sheet_id, plan, digest_to_type(plan), R_LIND)
        assert isinstance(ended, ChangeEnd) is is_good
        if isinstance(ended, Refusal):
            assert ended.code == "CONFIRMATION_EXPIRED"
            assert place.link.requests("write") == []

    change(place, act)


def test_a_plan_of_somebody_else_is_no_plan_of_this_change(place: Place) -> None:
    async def act(one: SettingsChange) -> None:
        plan = replace(await planned(one, place), proposal="another")
        refused = await one.write("write", place.sheet.sheet_id, plan, digest_to_type(plan), R_LIND)
        assert isinstance(refused, Refusal)
        assert refused.code == "CONFIRMATION_USED"

    change(place, act)


def test_a_refusal_that_had_moved_the_mode_leaves_a_note(place: Place) -> None:
    """The settings are changed by somebody between the plan and the write's own look in manual."""

    def meddle(_number: int) -> None:
        if place.plant.mode is LoopMode.MAN:
            place.plant.loop.block.settings = replace(place.plant.loop.block.settings, integral=9.0)

    refused = change(place, write_it(place), on_pass=meddle)
    assert isinstance(refused, Refusal)
    assert place.plant.mode is LoopMode.AUTO
    (note,) = place.stored.addenda
    assert isinstance(note, schema.Note)
    assert "had been asked to manual" in note.text
    assert refused.code in note.text


def test_a_refusal_that_touched_nothing_leaves_no_addendum(place: Place) -> None:
    async def act(one: SettingsChange) -> ChangeEnd | Refusal:
        plan = await planned(one, place)
        place.plant.loop.block.settings = replace(place.plant.loop.block.settings, integral=9.0)
        return await one.write("write", place.sheet.sheet_id, plan, digest_to_type(plan), R_LIND)

    assert isinstance(change(place, act), Refusal)
    assert place.stored.addenda == ()


def test_a_cancellation_puts_back_keeps_the_addendum_and_is_raised(place: Place) -> None:
    async def act(one: SettingsChange) -> None:
        plan = await planned(one, place)
        task = asyncio.ensure_future(one.write("write", place.sheet.sheet_id, plan, digest_to_type(plan), R_LIND))
        while len(place.link.requests("write")) < 2:
            await asyncio.wait({task}, timeout=0.005)
        task.cancel()
        await asyncio.wait({task})
        assert task.cancelled()

    change(place, act)
    (kept,) = place.stored.addenda
    assert isinstance(kept, schema.Change)
    assert kept.result == "PUT_BACK"
    assert place.held == OLD
    assert place.plant.mode is LoopMode.AUTO


def test_asking_to_put_back_before_anything_is_written_does_nothing(place: Place) -> None:
    async def act(one: SettingsChange) -> WritePlan:
        one.put_back("SIGINT")
        return await planned(one, place)

    assert isinstance(change(place, act), WritePlan)


def test_our_own_fault_in_the_middle_is_kept_as_unverified_and_raised(place: Place) -> None:
    def break_it(_number: int) -> None:
        for link in place.plant.links:
            if len(link.requests("write")) == 2:
                link.read = None  # type: ignore[method-assign, assignment]

    with pytest.raises(TypeError):
        change(place, write_it(place), on_pass=break_it)
    (kept,) = place.stored.addenda
    assert isinstance(kept, schema.Change)
    assert kept.result == "UNVERIFIED"
    assert "broken off by TypeError" in kept.text
    assert len(open_write_intents(place.workplace, place.loop)) == 1


def test_earlier_settings_are_restored_with_the_same_confirmation(place: Place) -> None:
    change(place, write_it(place))
    sheet_id, settings = earlier_settings(place.workplace, place.loop, None)
    assert sheet_id == place.sheet.sheet_id

    async def act(one: SettingsChange) -> ChangeEnd | Refusal:
        plan = await one.plan_restore(settings, f"as found on {sheet_id}")
        assert isinstance(plan, WritePlan)
        return await one.write("restore", sheet_id, plan, digest_to_type(plan), R_LIND)

    assert isinstance(change(place, act), ChangeEnd)
    assert place.held == OLD
    assert [one.kind for one in place.stored.addenda] == ["write", "restore"]


def test_a_restore_of_what_is_held_already_has_nothing_to_write(place: Place) -> None:
    _, settings = earlier_settings(place.workplace, place.loop, place.sheet.sheet_id)
    refusal = change(place, lambda one: one.plan_restore(settings, "as found"))
    assert isinstance(refusal, Refusal)
    assert refusal.code == "NOTHING_TO_WRITE"


def test_incomplete_settings_are_no_settings(place: Place) -> None:
    refusal = change(place, lambda one: one.plan_restore((), "as found"))
    assert isinstance(refusal, Refusal)
    assert refusal.code == "NO_SETTINGS"


def test_a_missing_sheet_and_one_without_settings_are_told(tmp_path: Path, sheet: schema.Sheet) -> None:
    place = Place(tmp_path, sheet, as_found=None)
    with pytest.raises(SheetError, match="no sheet TIC-204-none"):
        earlier_settings(place.workplace, place.loop, "TIC-204-none")
    with pytest.raises(SheetError, match="holds no settings as found"):
        earlier_settings(place.workplace, place.loop, None)


def test_a_settings_register_that_holds_no_number_is_told(place: Place) -> None:
    place.plant.loop.block.settings = replace(place.plant.loop.block.settings)
    opened = place.plant.open_link

    def open_link(loop: LoopConfig) -> FakeLink:
        link = opened(loop)
        refresh = link.on_read

        def on_read() -> None:
            refresh()
            link.image["gain"] = float("nan")

        link.on_read = on_read
        return link

    place.workplace = replace(place.workplace, open_link=open_link)
    with pytest.raises(LinkError, match="a settings register holds no number"):
        change(place, lambda one: one.plan_proposal(place.stored, NAME))


class TestAWriteThatBrokeOff:
    """Only looked at by the next process, never continued."""

    @staticmethod
    def _died(place: Place) -> list[str]:
        """A write whose process died after its first field had gone out: its journal has no end."""

        def pull(_number: int) -> None:
            for link in place.plant.links:
                if any("integral" in request.names for request in link.requests("write")):
                    link.is_reachable = False

        change(place, write_it(place), on_pass=pull)
        (file,) = (place.workplace.data_dir / "journals").glob("*-write.jsonl")
        lines = file.read_text("utf-8").splitlines(keepends=True)
        file.write_text("".join(line for line in lines if '"kind":"end"' not in line), "utf-8")
        return []

    @staticmethod
    def _recovered(place: Place) -> tuple[bool, str]:
        said: list[str] = []

        async def main() -> bool:
            await asyncio.sleep(20.0)
            return await recover(place.workplace, place.loop, said.append)

        return run_virtual(main()), " ".join(said)

    def test_half_written_settings_send_a_person_to_the_panel(self, place: Place) -> None:
        self._died(place)
        is_settled, said = self._recovered(place)
        assert not is_settled
        assert "GO TO THE PANEL. TIC-204 is in MAN" in said
        assert "as found gain 0.375" in said
        assert place.link.requests("write") == []

    @pytest.mark.parametrize(("held", "which"), [(OLD, "as found"), (NEW, f"those of {NAME}")])
    def test_all_old_or_all_new_in_automatic_is_settled(self, place: Place, held: BlockFields, which: str) -> None:
        self._died(place)
        block = place.plant.loop.block
        block.settings = replace(
            block.settings, gain=held.gain, integral=held.integral, derivative=held.derivative or 0.0
        )
        block.mode = type(block.mode).AUTO
        is_settled, said = self._recovered(place)
        assert is_settled
        assert f"holds the settings {which}" in said
        assert open_intents(place.workplace.data_dir) == ()

    def test_a_controller_that_can_not_be_read_stays_open(self, place: Place) -> None:
        self._died(place)
        opened = place.plant.open_link

        def open_link(loop: LoopConfig) -> FakeLink:
            link = opened(loop)
            link.read_faults[1] = Fault(FaultKind.SILENT)
            return link

        place.workplace = replace(place.workplace, open_link=open_link)
        is_settled, said = self._recovered(place)
        assert not is_settled
        assert "can't be read" in said

    def test_it_is_closed_once_the_settings_were_restored(self, place: Place) -> None:
        self._died(place)
        assert len(open_write_intents(place.workplace, place.loop)) == 1

        async def main() -> None:
            close_write_intents(place.workplace, place.loop)

        run_virtual(main())
        assert open_write_intents(place.workplace, place.loop) == ()
