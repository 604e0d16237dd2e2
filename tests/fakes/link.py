"""A controller in memory behind a ``LoopLink``, for tests in virtual time.

It keeps to the rules of the real link (``tests/field/link_conformance.py`` runs on both): its own
deadline per request, no retry, one miss drops the connection, a write that nobody heard of may have
landed.  Requests travel by timers of the running loop, so there is no task to leave behind.
"""

import asyncio
from collections import deque
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from enum import Enum
from math import isfinite
from typing import Literal

from autotune.config.types import LoopConfig, ModbusEndpoint, ModbusTag, Tag
from autotune.errors import LinkClosed, LinkError, LinkRefused, LinkTimeout, WriteForbidden
from autotune.field.codec import from_words, to_reading, to_words
from autotune.field.link import RawValue, Reading, ReadReport
from autotune.field.modbus.requests import plan_writes
from autotune.field.write_list import build_write_list
from autotune.loop.quality import Quality
from autotune.loop.sample import Stamp
from autotune.loop.write import WriteOutcome, WriteReport


class FaultKind(Enum):
    """What goes wrong with one request; a late one is answered after all, if its deadline allows."""

    LATE = "late"
    SILENT = "silent"
    CLOSED = "closed"
    REFUSED = "refused"
    HELD = "held"  # until release(), or its deadline


@dataclass(frozen=True, slots=True)
class Fault:
    """A fault of one request: it reaches the controller after ``delay_s``, if it ``lands`` at all."""

    kind: FaultKind
    delay_s: float = 0.0
    lands: bool = True


@dataclass(frozen=True, slots=True)
class LoggedRequest:
    """One request as it left us; ``values`` is empty but for a write."""

    kind: Literal["connect", "read", "write"]
    t_s: float
    names: tuple[str, ...] = ()
    values: tuple[tuple[str, RawValue], ...] = ()


class FakeLink:
    """One connection to a controller whose memory is ``image``: raw values by tag name.

    ``qualities`` overrules the quality of a tag.  ``on_write`` is called with each write that lands, after
    the image has taken it; ``on_read`` just before the image is read.  ``latency_s`` is the time of every
    request's way there.  ``read_faults``, ``write_faults`` and ``connect_faults`` hit the request of that
    number, counted from 1; ``next_faults`` the next reads and writes, before those.  While ``is_reachable``
    is ``False`` the cable is pulled.  A write that was cancelled or missed on its way lands nevertheless,
    unless its fault says otherwise.
    """

    def __init__(self, loop: LoopConfig, image: Mapping[str, RawValue] | None = None) -> None:
        self.image: dict[str, RawValue] = dict(image or {})
        self.qualities: dict[str, Quality] = {}
        self.on_read: Callable[[], None] = lambda: None
        self.on_write: Callable[[Mapping[str, RawValue]], None] = lambda _values: None
        self.latency_s = 0.0
        self.is_reachable = True
        self.read_faults: dict[int, Fault] = {}
        self.write_faults: dict[int, Fault] = {}
        self.connect_faults: dict[int, Fault] = {}
        self.next_faults: deque[Fault] = deque()
        self.log: list[LoggedRequest] = []
        self.held = asyncio.Event()
        self._released: list[Callable[[], None]] = []
        self._timeout_s = loop.controller.endpoint.request_timeout_s
        self._endpoint = loop.controller.endpoint
        self._tags: dict[str, Tag] = dict(loop.tags)
        self._write_list = build_write_list(loop)
        self._is_connected = False
        self._pending: asyncio.Future[float] | None = None
        self._one_at_a_time = asyncio.Lock()

    @property
    def is_connected(self) -> bool:
        """Whether requests can be sent now."""
        return self._is_connected

    def requests(self, kind: Literal["connect", "read", "write"]) -> list[LoggedRequest]:
        """The logged requests of one kind, in order of time."""
        return [request for request in self.log if request.kind == kind]

    def release(self) -> None:
        """Let held requests reach the controller, now."""
        self.held.clear()
        released, self._released = self._released, []
        for land in released:
            land()

    def cut(self) -> None:
        """The controller closes the connection, now."""
        self._is_connected = False
        if self._pending is not None and not self._pending.done():
            self._pending.set_exception(LinkClosed("the fake controller closed the connection"))

    async def connect(self) -> None:
        """As ``LoopLink.connect``, without a gap between connections."""
        async with self._one_at_a_time:
            self._is_connected = False
            await self._travel(self._next_fault("connect", self.connect_faults), lambda: None)
            self._is_connected = True

    async def read(self, names: Sequence[str]) -> ReadReport:
        """As ``LoopLink.read``; one request, whatever the names."""
        async with self._one_at_a_time:
            self._check_connected()
            sent_s = _now_s()
            fault = self._next_fault("read", self.read_faults, tuple(names))
            readings: dict[str, Reading] = {}

            def land() -> None:
                self.on_read()
                if all(name in self.image for name in names):
                    readings.update((name, self._to_reading(name)) for name in names)

            replied_s = await self._travel(fault, land)
        if len(readings) < len(set(names)):
            raise LinkRefused(f"the fake controller refused to read {', '.join(names)}")
        return ReadReport(readings, Stamp(sent_s, replied_s))

    async def write(self, values: Mapping[str, RawValue]) -> WriteReport:
        """As ``LoopLink.write``; split into requests as Modbus would be."""
        for name, raw in values.items():
            if name not in self._tags:
                raise WriteForbidden(f"{name!r} is no tag of this link")
            self._write_list.check(name, self._tags[name], raw)
        parts = self._split(values)
        async with self._one_at_a_time:
            started_s = _now_s()
            for number, part in enumerate(parts):
                report = await self._write_part(part)
                if report.outcome is not WriteOutcome.APPLIED:
                    outcome = WriteOutcome.NOT_HEARD if number else report.outcome
                    return WriteReport(outcome, Stamp(started_s, report.sent.latest_s), report.detail)
            return WriteReport(WriteOutcome.APPLIED, Stamp(started_s, _now_s()))

    async def close(self) -> None:
        """As ``LoopLink.close``."""
        self.cut()

    async def _write_part(self, part: Mapping[str, RawValue]) -> WriteReport:
        sent_s = _now_s()

        def land() -> None:
            self.image.update((name, _as_held(self._tags[name], raw)) for name, raw in part.items())
            self.on_write(part)

        try:
            self._check_connected()
            fault = self._next_fault("write", self.write_faults, tuple(part), tuple(part.items()))
            replied_s = await self._travel(fault, land)
        except LinkRefused as refusal:
            return WriteReport(WriteOutcome.REFUSED, Stamp(sent_s, _now_s()), str(refusal))
        except LinkError as trouble:
            return WriteReport(WriteOutcome.NOT_HEARD, Stamp(sent_s, _now_s()), str(trouble))
        return WriteReport(WriteOutcome.APPLIED, Stamp(sent_s, replied_s))

    def _split(self, values: Mapping[str, RawValue]) -> list[dict[str, RawValue]]:
        writes = [(name, tag, raw) for name, raw in values.items() if isinstance(tag := self._tags[name], ModbusTag)]
        if not isinstance(self._endpoint, ModbusEndpoint) or len(writes) < len(values):
            return [dict(values)]
        return [{name: values[name] for name in request.names} for request in plan_writes(self._endpoint, writes)]

    def _check_connected(self) -> None:
        if not self._is_connected:
            raise LinkClosed("the fake controller is not connected; nothing was sent")

    def _next_fault(
        self,
        kind: Literal["connect", "read", "write"],
        faults: Mapping[int, Fault],
        names: tuple[str, ...] = (),
        values: tuple[tuple[str, RawValue], ...] = (),
    ) -> Fault:
        self.log.append(LoggedRequest(kind, _now_s(), names, values))
        if not self.is_reachable:
            return Fault(FaultKind.SILENT, lands=False)
        if kind != "connect" and self.next_faults:
            return self.next_faults.popleft()
        return faults.get(len(self.requests(kind)), Fault(FaultKind.LATE))

    async def _travel(self, fault: Fault, land: Callable[[], None]) -> float:
        """Let a request go its way; the time of its answer.  Whatever else becomes of it drops the connection."""
        loop = asyncio.get_running_loop()
        pending: asyncio.Future[float] = loop.create_future()
        self._pending = pending

        def arrive() -> None:
            if fault.lands and fault.kind is not FaultKind.REFUSED:
                land()
            if pending.done() or fault.kind is FaultKind.SILENT:
                return
            if fault.kind is FaultKind.CLOSED:
                self.cut()
            elif fault.kind is FaultKind.REFUSED:
                pending.set_exception(LinkRefused("the fake controller refused the request"))
            else:
                pending.set_result(loop.time())

        def miss() -> None:
            if not pending.done():
                pending.set_exception(LinkTimeout(f"no answer from the fake controller within {self._timeout_s:g} s"))

        if fault.kind is FaultKind.HELD:
            self._released.append(arrive)
            self.held.set()
        else:
            loop.call_at(loop.time() + self.latency_s + fault.delay_s, arrive)
        deadline = loop.call_at(loop.time() + self._timeout_s, miss)
        try:
            return await pending
        except LinkRefused:
            raise
        except BaseException:
            self._is_connected = False
            if pending.done() and not pending.cancelled():
                pending.exception()  # heard, though a cancel in the same pass came first
            raise
        finally:
            deadline.cancel()
            self._pending = None

    def _to_reading(self, name: str) -> Reading:
        raw = self.image[name]
        reading = to_reading(self._tags[name], raw if isfinite(raw) else None)
        quality = self.qualities.get(name, reading.quality)
        return Reading(None if quality is Quality.BAD else reading.raw, quality)


def _as_held(tag: Tag, raw: RawValue) -> RawValue:
    """A raw value as a register of its type holds it."""
    if not isinstance(tag, ModbusTag) or isinstance(raw, bool):
        return raw
    held = from_words(tag, to_words(tag, raw))
    return raw if held is None else held


def _now_s() -> float:
    return asyncio.get_running_loop().time()
