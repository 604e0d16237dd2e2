"""Showing that the settings can be written, before any output moves.

A protocol without access rights on its registers (Modbus has none) tells only by a write whether a setting can be
written.  So each register gets back exactly the raw number that was just read from it: the controller holds
afterwards what it held before.  It happens only with a person's permission and where the loop's file says so.
"""

import asyncio

from autotune.config.types import LoopConfig, ModbusTag
from autotune.errors import LinkError, WriteForbidden
from autotune.field.link import LoopLink, RawValue
from autotune.field.translate import settings_tags
from autotune.loop.outcome import Refusal
from autotune.loop.write import WriteOutcome, WriteReport
from autotune.service.journal import Journal
from autotune.service.test_log import TestLog, WriteBack


async def prove_writable(loop: LoopConfig, link: LoopLink, journal: Journal, log: TestLog) -> Refusal | None:
    """Write each setting back as just read; why the test must not begin, or ``None`` when all were taken.

    Every write goes through the link's write list and stands in the journal before it is sent and in ``log``
    afterwards.  A write that is not answered is not repeated.  Raises ``JournalError``: then nothing was sent.
    """
    names = settings_tags(loop)
    try:
        found = await _read(link, names)
        for name in names:
            refusal = await _prove(loop, link, journal, log, name)
            if refusal is not None:
                return refusal
        left = await _read(link, names)
    except LinkError as fault:
        return Refusal("LINK", str(fault), "see LINK in the list of codes")
    changed = [name for name in names if left[name] != found[name]]
    if changed:
        return Refusal(
            "SETTINGS_CHANGED",
            f"{_listed(changed)} of {loop.name} changed while it was shown that they can be written: "
            + ", ".join(f"{name} {found[name]} to {left[name]} raw" for name in changed),
            "somebody is at the settings, or a register holds another number than it is given: compare with the panel",
        )
    return None


async def _prove(loop: LoopConfig, link: LoopLink, journal: Journal, log: TestLog, name: str) -> Refusal | None:
    """One register, read afresh so that the least time lies between its reading and its write."""
    raw = (await _read(link, (name,)))[name]
    journal.record("note", {"writes back": name, "raw": raw}, t_s=_now_s(), durable=True)
    try:
        report = await link.write({name: raw})
    except WriteForbidden as forbidden:
        return Refusal(
            "SETTING_NOT_ALLOWED",
            f"the number that {name} holds may not be written: {forbidden}",
            f"compare {name}_range of the block and the tag {name} with the panel",
        )
    journal.record("note", {"wrote back": name, "outcome": report.outcome.value}, t_s=_now_s())
    log.add_write(WriteBack(name), {name: raw}, report)
    return _judge(loop, name, report)


def _judge(loop: LoopConfig, name: str, report: WriteReport) -> Refusal | None:
    match report.outcome:
        case WriteOutcome.APPLIED:
            return None
        case WriteOutcome.REFUSED:
            return Refusal(
                "SETTING_READ_ONLY",
                f"{name} of {loop.name} at {_place(loop, name)} can't be written: {report.detail}",
                'open it for writing in the PLC or correct its tag; with write_settings = "never" the loop can be '
                "tested and settings entered by hand",
            )
        case WriteOutcome.NOT_HEARD:
            return Refusal(
                "SETTING_NOT_HEARD",
                f"writing {name} of {loop.name} back was not answered: {report.detail}",
                "the number written is the one that was there; check the link, then compare with the panel",
            )


async def _read(link: LoopLink, names: tuple[str, ...]) -> dict[str, RawValue]:
    if not link.is_connected:
        await link.connect()
    report = await link.read(names)
    numbers = {name: report.readings[name].raw for name in names}
    known = {name: raw for name, raw in numbers.items() if raw is not None}
    if len(known) < len(names):
        raise LinkError(f"{_listed([name for name in names if name not in known])}: no number; compare with the panel")
    return known


def _place(loop: LoopConfig, name: str) -> str:
    tag = loop.tag(name)
    if isinstance(tag, ModbusTag):
        return f"{tag.table.value} register {tag.address} (counted from 0)"
    return str(tag)


def _listed(names: list[str]) -> str:
    return ", ".join(names)


def _now_s() -> float:
    return asyncio.get_running_loop().time()
