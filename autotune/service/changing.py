"""A change of settings from the sheet to its addendum: plan, confirm, write, read back, keep."""

import asyncio
from collections.abc import Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Literal

from autotune.config.types import LoopConfig
from autotune.confirmed_write.confirmation import GOOD_FOR_S, check_confirmation, confirm, digest, short_digest
from autotune.confirmed_write.limits import changed_fields, check_plan, write_order
from autotune.confirmed_write.phases import Phase
from autotune.confirmed_write.plan import Confirmation, WritePlan
from autotune.confirmed_write.state import WritePace, WriteState
from autotune.errors import RecordNotKept, SheetError
from autotune.field.link import LoopLink
from autotune.field.translate import held_fields
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockFields
from autotune.service.deaf import to_the_end
from autotune.service.journal import FileJournal
from autotune.service.persons import Person
from autotune.service.reading import LoopReader
from autotune.service.recovery import fields_in_words
from autotune.service.sheet_mapping import TimeAxis, fields_of, person_line, settings_quantities
from autotune.service.workplace import Workplace
from autotune.service.writer import SettingsWriter
from autotune.sheet import schema
from autotune.sheet.store import StoredSheet


@dataclass(frozen=True, slots=True)
class ChangeEnd:
    """A confirmed change after its end."""

    state: WriteState
    addendum_hash: str

    @property
    def is_read_back_equal(self) -> bool:
        """Whether the last reading holds exactly the confirmed numbers."""
        read = self.state.last_read
        return read is not None and not changed_fields(self.state.plan.fields, read.fields)


class SettingsChange:
    """One change of one loop's settings, held by one master.

    Use: ``async with SettingsChange(...) as change``, ``plan_proposal`` or ``plan_restore``, show the plan and
    have its short digest typed, then ``write``.  Raises ``LoopBusy`` on entry when another master holds the loop.
    """

    def __init__(self, workplace: Workplace, loop: LoopConfig) -> None:
        self.loop = loop
        self._workplace = workplace
        self._link: LoopLink = workplace.open_link(loop)
        self._reader = LoopReader(loop, self._link)
        self._shown_s: dict[str, float] = {}
        self._spent: set[Confirmation] = set()
        self._writer: SettingsWriter | None = None

    async def __aenter__(self) -> "SettingsChange":
        self._lock = self._workplace.hold(self.loop, f"change of settings of {self.loop.name}")
        return self

    async def __aexit__(self, *_: object) -> None:
        await self._link.close()
        self._lock.release()

    async def plan_proposal(self, stored: StoredSheet, name: str) -> WritePlan | Refusal:
        """The plan of writing a sheet's proposal.  Raises ``LinkError``.

        Refused when the loop or its block is described otherwise than on the sheet, and when the
        controller no longer holds what the test found: then the proposal was judged against other settings.
        """
        if stored.sheet.outcome.ended != "COMPLETE":
            return Refusal(
                "TEST_NOT_COMPLETE",
                f"the test ended {stored.sheet.outcome.ended}, so nothing is written from its sheet",
                "mend what stopped it and test again",
            )
        proposal = next((one for one in stored.sheet.proposals if one.name == name and one.settings), None)
        if proposal is None:
            known = ", ".join(one.name for one in stored.sheet.proposals if one.settings) or "none"
            return Refusal("NO_SUCH_PROPOSAL", f"the sheet has no proposal {name!r}", f"use one of: {known}")
        if stored.sheet.configuration_digest != self._workplace.configuration.digest:
            return Refusal(
                "CONFIGURATION_CHANGED",
                "the configuration is not the one that the test was made with",
                "test again with this configuration, or load the configuration of the sheet",
            )
        present = await self._reader.read_settings()
        found = None if stored.sheet.as_found is None else fields_of(stored.sheet.as_found.settings)
        if found is not None and changed_fields(found, present):
            return Refusal(
                "SETTINGS_CHANGED",
                f"the controller holds {fields_in_words(present)}, the test found {fields_in_words(found)}",
                "somebody changed them since: ask who and why, then test again",
            )
        return self._plan(name, fields_of(proposal.settings), present)

    async def plan_restore(self, settings: tuple[schema.Quantity, ...], source: str) -> WritePlan | Refusal:
        """The plan of writing earlier settings back.  Raises ``LinkError``."""
        return self._plan(source, fields_of(settings), await self._reader.read_settings())

    def _plan(self, name: str, wanted: BlockFields | None, present: BlockFields) -> WritePlan | Refusal:
        if wanted is None:
            return Refusal("NO_SETTINGS", "no complete settings are kept there", "choose another sheet")
        if not self.loop.is_writing_settings_allowed:
            return Refusal(
                "WRITING_FORBIDDEN",
                f"the configuration does not allow settings of {self.loop.name} to be written",
                "enter the values by hand at the panel",
            )
        wanted = held_fields(self.loop, wanted)
        plan = WritePlan(
            loop=self.loop.name,
            proposal=name,
            as_found=present,
            fields=wanted,
            order=write_order(present, wanted, self.loop.block),
            block_digest=self.loop.block_digest,
            configuration_digest=self.loop.digest,
            limits=self.loop.field_limits,
            write_in_manual=self.loop.write_in_manual,
            sp_tracks_in_manual=self.loop.block.sp_tracks_in_manual,
        )
        self._shown_s[digest(plan)] = asyncio.get_running_loop().time()
        return check_plan(plan) or plan

    def put_back(self, by: str) -> None:
        """Ask a write that is under way to put the settings as found back; does nothing when none is."""
        if self._writer is not None:
            self._writer.stop(by)

    async def write(
        self, kind: Literal["write", "restore"], sheet_id: str, plan: WritePlan, typed: str, person: Person
    ) -> ChangeEnd | Refusal:
        """Write what was confirmed by the digest typed, read it back and keep the addendum.

        ``kind`` is ``write`` or ``restore``.  The digest is good for one write, within ``GOOD_FOR_S`` of the plan
        being made, since the numbers are compared from then on.  A refusal wrote no setting; it is kept as a note
        only where the mode had been changed meanwhile.  A cancellation is heard as "put back", and raised only when
        the addendum is kept.  Raises ``JournalError`` before anything is written.
        """
        axis = TimeAxis(asyncio.get_running_loop().time(), self._workplace.wall_clock())
        confirmation = self._confirm(plan, typed, person, axis.start_s)
        if isinstance(confirmation, Refusal):
            return confirmation
        work = self._write(kind, sheet_id, axis, plan, confirmation, person)
        return await to_the_end(work, lambda: self.put_back("the service is stopping"))

    def _confirm(self, plan: WritePlan, typed: str, person: Person, now_s: float) -> Confirmation | Refusal:
        shown_s = self._shown_s.get(digest(plan))
        if shown_s is None:
            return Refusal("CONFIRMATION_USED", "a confirmation is good for one write only", "show the numbers again")
        confirmation = confirm(plan, typed, person.name, now_s, shown_s + GOOD_FOR_S - now_s)
        if isinstance(confirmation, Refusal):
            return confirmation
        del self._shown_s[digest(plan)]
        return check_confirmation(plan, confirmation, frozenset(self._spent), now_s) or confirmation

    async def _write(
        self,
        kind: Literal["write", "restore"],
        sheet_id: str,
        axis: TimeAxis,
        plan: WritePlan,
        confirmation: Confirmation,
        person: Person,
    ) -> ChangeEnd | Refusal:
        tail = self._workplace.new_token()
        journal_id = f"{schema.sheet_id(self.loop.name, axis.start_utc, tail)}-{kind}"
        journal = FileJournal.create(self._workplace.data_dir, journal_id, wall_clock=self._workplace.wall_clock)
        writer = self._writer = SettingsWriter(self.loop, self._link, journal)
        spent = frozenset(self._spent)
        self._spent.add(confirmation)
        try:
            state = await writer.write(plan, confirmation, spent, self._pace())
        except BaseException as fault:
            if writer.state is not None and writer.has_written:
                broken = f"broken off by {type(fault).__name__}: {fault}"
                await self._keep(self._addendum(kind, sheet_id, axis, writer.state, writer, person, broken))
            raise
        finally:
            journal.close()
        if isinstance(state, Refusal):
            return state
        if state.phase is Phase.REFUSED:
            if state.is_taken:
                await self._keep(self._note(sheet_id, state, person))
            return state.because[0]
        addendum = self._addendum(kind, sheet_id, axis, state, writer, person)
        try:
            return ChangeEnd(state, await self._keep(addendum))
        except SheetError as fault:
            is_stranded = state.phase is Phase.UNVERIFIED
            told = f"{state.phase.name}. {addendum.text}{' Go to the panel now.' if is_stranded else ''}"
            lost = f"Its record could not be kept ({fault}); its journal is {journal.file}"
            raise RecordNotKept(f"{told} {lost}", is_stranded=is_stranded) from fault

    async def _keep(self, addendum: schema.Addendum) -> str:
        return await self._workplace.in_thread(self._workplace.store.append_addendum, addendum)

    def _note(self, sheet_id: str, state: WriteState, person: Person) -> schema.Note:
        """No setting was written, but the mode was changed and given back: that isn't nothing."""
        reasons = "; ".join(str(refusal) for refusal in state.because)
        bump = "" if state.op_bump_pct is None else f"; the output moved by {state.op_bump_pct:+.2f} % meanwhile"
        return schema.Note(
            sheet_id=sheet_id,
            utc=self._workplace.wall_clock(),
            person=person_line(person),
            text=f"{state.plan.proposal} was not written, though the loop had been asked to manual for it and given "
            f"back: {reasons}{bump}",
        )

    def _pace(self) -> WritePace:
        """Settle for two scans of the slower of us and the PLC, so that a reading can show what was written."""
        slower_s = max(self.loop.scan_s, self.loop.controller.plc_scan_s or 0.0)
        return replace(WritePace(), settle_s=2.0 * slower_s)

    def _addendum(
        self,
        kind: Literal["write", "restore"],
        sheet_id: str,
        axis: TimeAxis,
        state: WriteState,
        writer: SettingsWriter,
        person: Person,
        broken: str | None = None,
    ) -> schema.Change:
        plan = state.plan
        told = (*(str(refusal) for refusal in state.because), *writer.faults, *((broken,) if broken else ()))
        read_back = None if state.last_read is None else state.last_read.fields
        return schema.Change(
            kind=kind,
            sheet_id=sheet_id,
            utc=self._workplace.wall_clock(),
            person=person_line(person),
            text="; ".join(told),
            source=plan.proposal,
            as_found=settings_quantities(self.loop, plan.as_found),
            wanted=settings_quantities(self.loop, plan.fields),
            order=plan.order,
            plan_digest=digest(plan),
            configuration_digest=plan.configuration_digest,
            confirmation_digest=state.confirmation.digest,
            confirmed_utc=axis.utc(state.confirmation.given_s),
            writes=tuple(
                schema.FieldWrite(
                    name=write.name,
                    amount=write.number,
                    outcome=write.report.outcome.name,
                    utc=axis.utc(write.t_s),
                    detail=write.report.detail,
                )
                for write in writer.writes
            ),
            read_back=settings_quantities(self.loop, read_back),
            result=_RESULTS.get(state.phase, "UNVERIFIED"),  # a write that broke off was shown to be nothing
            op_bump_pct=state.op_bump_pct,
        )


_RESULTS: Mapping[Phase, Literal["WRITTEN", "PUT_BACK", "UNVERIFIED"]] = MappingProxyType(
    {Phase.WRITTEN: "WRITTEN", Phase.PUT_BACK: "PUT_BACK", Phase.UNVERIFIED: "UNVERIFIED"}
)


def earlier_settings(
    workplace: Workplace, loop: LoopConfig, sheet_id: str | None
) -> tuple[str, tuple[schema.Quantity, ...]]:
    """The settings as found on a sheet, or on the loop's newest one; the sheet's id beside them.

    Raises ``SheetError`` when there is no such sheet or it holds no settings.
    """
    lines = [line for line in workplace.store.list(loop.name) if sheet_id in {None, line.sheet_id}]
    if not lines:
        raise SheetError(f"no sheet {sheet_id or 'of ' + loop.name}; `autotune sheet list` shows those there are")
    stored = workplace.store.get(lines[-1].sheet_id)
    if stored.sheet.as_found is None or not stored.sheet.as_found.settings:
        raise SheetError(f"{stored.sheet.sheet_id} holds no settings as found; choose another sheet")
    return stored.sheet.sheet_id, stored.sheet.as_found.settings


def digest_to_type(plan: WritePlan) -> str:
    """What a person types to confirm this plan."""
    return short_digest(plan)
