"""The hand-back: read, decide, write, read again, until it is shown or its time is over."""

import asyncio
from collections.abc import Awaitable, Callable

from autotune.errors import LinkError
from autotune.experiment.commands import HandBack
from autotune.experiment.events import HandBackEnded
from autotune.experiment.hand_back import HandBackDone, HandBackWrites, hand_back_overdue, next_hand_back_step
from autotune.experiment.held import Held
from autotune.experiment.plan import TestPlan
from autotune.field.translate import WireCommand
from autotune.loop.limits import AsFound
from autotune.loop.sample import Sample
from autotune.loop.write import WriteOutcome, WriteReport
from autotune.service.reading import LoopReader


class HandBackRun:
    """Gives one loop back.  It raises nothing: whatever fails becomes the reason of a hand-back not confirmed.

    It is deaf: a cancellation costs it the request that it was just making, and nothing else.

    ``write`` performs one command on the wire, behind its gate and its journal.  ``samples`` are the readings
    it made, ``held`` what our last writes were.
    """

    def __init__(
        self,
        plan: TestPlan,
        as_found: AsFound,
        held: Held,
        reader: LoopReader,
        write: Callable[[WireCommand], Awaitable[WriteReport]],
    ) -> None:
        self.held = held
        self.samples: list[Sample] = []
        self._plan = plan
        self._as_found = as_found
        self._reader = reader
        self._write = write
        self._doubt = "the loop could not be read"

    async def run(self) -> HandBackEnded:
        """Read, decide and write until it is over, at most ``hand_back_within_s``."""
        loop = asyncio.get_running_loop()
        overdue_s = loop.time() + self._plan.hand_back_within_s
        while loop.time() < overdue_s:
            try:
                done = await self._advance()
                if done is not None:
                    return HandBackEnded(loop.time(), done.result, done.detail)
                await asyncio.sleep(self._plan.scan_s)
            except asyncio.CancelledError:
                self._doubt = "the hand-back was interrupted"
        done = hand_back_overdue(self._as_found, self._doubt)
        return HandBackEnded(loop.time(), done.result, done.detail)

    async def _advance(self) -> HandBackDone | None:
        try:
            sample = await self._reader.read_sample()
            self.samples.append(sample)
            decided = next_hand_back_step(self._plan, self._as_found, self.held, sample)
            if isinstance(decided, HandBackDone):
                return decided
            await self._perform(decided)
        except LinkError as fault:
            self._doubt = str(fault)
        except Exception as fault:  # noqa: BLE001 - no fault of our own may end a hand-back before its time
            self._doubt = f"{type(fault).__name__}: {fault}"
        return None

    async def _perform(self, decided: HandBackWrites) -> None:
        self.held = decided.held
        self._doubt = "the loop did not yet read as found"
        for command in decided.commands:
            if isinstance(command, HandBack):
                continue  # a hand-back never asks for another
            report = await self._write(command)
            if report.outcome is not WriteOutcome.APPLIED:
                self._doubt = f"{type(command).__name__} was {report.outcome.value}: {report.detail}"
                return
