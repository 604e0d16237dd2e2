"""Answers to who only watches: nothing here can write."""

import asyncio
from base64 import b64encode
from collections.abc import AsyncIterator
from datetime import datetime
from typing import assert_never

from autotune.errors import SheetError
from autotune.paper.text import sheet_page
from autotune.service.answers import check_answer
from autotune.service.before_a_test import cautions_before, extremes, writes_of_a_test
from autotune.service.daemon import Daemon
from autotune.service.desk import LoopDesk
from autotune.service.live_answers import TrendTeller, sheet_line_answer, test_now_answer, utc_text
from autotune.service.local_api import Answer
from autotune.service.local_requests import (
    ExportSheet,
    ListControllers,
    ListLoops,
    ListSheets,
    Look,
    OpenSheet,
    Stream,
    WatchLoop,
    WatchLoops,
)
from autotune.service.local_views import (
    ControllerAnswer,
    ControllersAnswer,
    FileAnswer,
    LiveAnswer,
    LookAnswer,
    LoopLineAnswer,
    LoopsAnswer,
    SheetAnswer,
    SheetLinesAnswer,
)
from autotune.service.printing import pdf_of
from autotune.service.sheet_mapping import controller_line, settings_quantities
from autotune.service.workplace import endpoint_line
from autotune.sheet.export import samples_to_csv, to_json, writes_to_csv
from autotune.sheet.store import SheetLine, StoredSheet

LIVE_S = 0.2
"""How often a screen hears of a loop that is being tested."""
CALM_S = 1.0
"""How often it hears of everything else, so that silence always means a lost stream."""

Question = ListLoops | ListControllers | ListSheets | OpenSheet | ExportSheet | Look


class Watcher:
    """Tells what is going on in one daemon, and what is kept in its archive."""

    def __init__(self, daemon: Daemon) -> None:
        self._daemon = daemon
        self._workplace = daemon.workplace

    async def answer(self, question: Question, by: str) -> Answer:
        """The answer to one question.  Raises ``AutotuneError``."""
        match question:
            case ListLoops():
                return await self._loops()
            case ListControllers():
                return self._controllers()
            case ListSheets(loop=loop):
                lines = await self._workplace.in_thread(self._lines, loop)
                return SheetLinesAnswer(sheets=tuple(sheet_line_answer(line) for line in lines))
            case OpenSheet(sheet=sheet):
                stored = await self._workplace.in_thread(self._stored, sheet)
                return SheetAnswer(sheet=stored.sheet, addenda=stored.addenda, hash=stored.hash)
            case ExportSheet(what="pdf", sheet=sheet):
                return await self._printed(sheet)
            case ExportSheet():
                return await self._workplace.in_thread(self._export, question)
            case Look(loop=loop):
                return await self._look(self._daemon.desk(loop), by)
            case _:
                assert_never(question)

    def stream(self, stream: Stream) -> AsyncIterator[Answer]:
        """An answer at once, then at least one in each ``CALM_S``.  Raises ``AutotuneError``."""
        match stream:
            case WatchLoops():
                return self._stream_loops()
            case WatchLoop(loop=loop):
                return self._stream_loop(self._daemon.desk(loop))
            case _:
                assert_never(stream)

    async def _stream_loops(self) -> AsyncIterator[Answer]:
        while True:
            yield await self._loops()
            await asyncio.sleep(CALM_S)

    async def _stream_loop(self, desk: LoopDesk) -> AsyncIterator[Answer]:
        teller: TrendTeller | None = None
        while True:
            runner = desk.runner
            if runner is not None and (teller is None or teller.runner is not runner):
                teller = TrendTeller(desk.loop, runner)
            yield LiveAnswer(
                utc=utc_text(self._workplace.wall_clock()),
                loop=self._line(desk, None),
                test=None if runner is None else test_now_answer(desk.loop, desk.test_id, runner),
                trend=None if teller is None else teller.next(),
                sheet=desk.sheet_id,
                fault=desk.fault,
            )
            await asyncio.sleep(LIVE_S if desk.is_testing else CALM_S)

    async def _loops(self) -> LoopsAnswer:
        newest: dict[str, SheetLine] = {}
        for line in await self._workplace.in_thread(self._workplace.store.list):
            newest[line.loop] = line
        return LoopsAnswer(
            utc=utc_text(self._workplace.wall_clock()),
            loops=tuple(self._line(desk, newest.get(name)) for name, desk in self._daemon.desks.items()),
        )

    def _line(self, desk: LoopDesk, last: SheetLine | None) -> LoopLineAnswer:
        loop, reading = desk.loop, self._daemon.rounds.loops[desk.loop.name]
        sample = reading.sample
        pv_pct, sp_pct, op_pct = (None, None, None) if sample is None else (sample.pv_pct, sample.sp_pct, sample.op_pct)
        return LoopLineAnswer(
            loop=loop.name,
            service=loop.service,
            unit=loop.unit,
            controller=controller_line(loop),
            doing=desk.occupation.doing,
            by=desk.occupation.by,
            mode=None if sample is None else sample.mode.value,
            pv_eu=None if pv_pct is None else loop.pv_span.to_eu(pv_pct),
            sp_eu=None if sp_pct is None else loop.pv_span.to_eu(sp_pct),
            op_eu=None if op_pct is None else loop.op_span.to_eu(op_pct),
            pv_unit=loop.pv_span.unit,
            op_unit=loop.op_span.unit,
            settings=settings_quantities(loop, reading.settings),
            read_utc=None if reading.utc is None else utc_text(reading.utc),
            fault=reading.fault,
            is_settled=desk.is_settled,
            notes=tuple(desk.notes),
            last_sheet=None if last is None else sheet_line_answer(last),
        )

    def _controllers(self) -> ControllersAnswer:
        loops = self._workplace.configuration.loops
        lines = []
        for name, health in self._daemon.rounds.controllers.items():
            own = [loop for loop in loops if loop.controller.name == name]
            lines.append(
                ControllerAnswer(
                    controller=name,
                    endpoint=endpoint_line(own[0].controller.endpoint),
                    loops=tuple(loop.name for loop in own),
                    readings=health.readings,
                    missed=health.missed,
                    round_trip_s=health.round_trip_s,
                    heard_utc=None if health.heard_utc is None else utc_text(health.heard_utc),
                    fault=health.fault,
                    is_busy=any(self._daemon.desk(loop.name).occupation.doing for loop in own),
                )
            )
        return ControllersAnswer(utc=utc_text(self._workplace.wall_clock()), controllers=tuple(lines))

    async def _look(self, desk: LoopDesk, by: str) -> LookAnswer:
        looked = await desk.look(by)
        return LookAnswer(
            utc=utc_text(looked.utc),
            check=check_answer(looked.check),
            settings=settings_quantities(desk.loop, looked.check.settings),
            cautions=cautions_before(desk.loop, looked.check),
            extremes=extremes(desk.loop, looked.check),
            writes=writes_of_a_test(desk.loop),
        )

    def _lines(self, loop: str) -> tuple[SheetLine, ...]:
        return tuple(reversed(self._workplace.store.list(loop or None)))

    def _stored(self, name: str) -> StoredSheet:
        if name != "last":
            return self._workplace.store.get(name)
        lines = self._workplace.store.list()
        if not lines:
            raise SheetError(f"{self._workplace.data_dir}: no sheet is kept there yet; test a loop first")
        return self._workplace.store.get(max(lines, key=lambda line: line.started_utc).sheet_id)

    async def _printed(self, name: str) -> FileAnswer:
        stored = await self._workplace.in_thread(self._stored, name)
        pdf = await pdf_of(stored, await self._workplace.in_thread(self._workplace.store.head_hash))
        return FileAnswer(
            file_name=f"{stored.sheet.sheet_id}.pdf",
            media_type="application/pdf",
            content=b64encode(pdf).decode(),
            is_base64=True,
        )

    def _export(self, asked: ExportSheet) -> FileAnswer:
        stored = self._stored(asked.sheet)
        name = stored.sheet.sheet_id
        match asked.what:
            case "page":
                zone = datetime.now().astimezone().tzinfo
                page = sheet_page(stored) if zone is None else sheet_page(stored, zone)
                return FileAnswer(file_name=f"{name}.txt", media_type="text/plain", content=page)
            case "samples":
                return FileAnswer(
                    file_name=f"{name}-samples.csv", media_type="text/csv", content=samples_to_csv(stored)
                )
            case "writes":
                return FileAnswer(file_name=f"{name}-writes.csv", media_type="text/csv", content=writes_to_csv(stored))
            case _:
                return FileAnswer(file_name=f"{name}.json", media_type="application/json", content=to_json(stored))
