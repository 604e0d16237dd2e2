"""A ``LoopLink`` over OPC UA.

Every request has its own deadline; after one miss the connection is gone and only ``connect`` opens a
new one.  Nothing is retried.  Each connection finds its nodes afresh and refuses to go on where a name
leads to another node than before: what may be written stays what it was.
"""

import asyncio
import time
from collections.abc import Mapping, Sequence
from datetime import datetime

from asyncua import ua
from asyncua.ua.attribute_ids import AttributeIds

from autotune.config.types import OpcUaEndpoint, OpcUaTag
from autotune.errors import LinkClosed, LinkError, LinkRefused, WriteForbidden
from autotune.field.back_off import BackOff
from autotune.field.facts import NodeFact, ServerFacts
from autotune.field.link import RawValue, Reading, ReadReport
from autotune.field.opc_ua.describe import describe
from autotune.field.opc_ua.nodes import FoundNode, find_nodes
from autotune.field.opc_ua.opening import Opening
from autotune.field.opc_ua.session import ServerRefused, Session
from autotune.field.opc_ua.status import is_surely_undone
from autotune.field.opc_ua.variants import held_type_of, to_answer, to_reading
from autotune.field.opc_ua.writing import judge_write, split_writes
from autotune.field.write_list import WriteList
from autotune.loop.quality import Quality
from autotune.loop.sample import Stamp
from autotune.loop.write import WriteOutcome, WriteReport


class OpcUaLink:
    """One session with one OPC UA server for the named ``tags``; writes what ``write_list`` permits.

    Links to the same server may share one ``back_off``, so that together they keep its gap.
    """

    def __init__(
        self,
        endpoint: OpcUaEndpoint,
        tags: Sequence[tuple[str, OpcUaTag]],
        write_list: WriteList,
        back_off: BackOff | None = None,
    ) -> None:
        self._endpoint = endpoint
        self._tags = dict(tags)
        self._write_list = write_list
        self._opening = Opening(endpoint)
        self._session: Session | None = None
        self._nodes: dict[str, FoundNode] = {}
        self._barred: frozenset[ua.NodeId] = frozenset()
        self._one_at_a_time = asyncio.Lock()
        self._back_off = back_off or BackOff(endpoint.connect_gap_s)

    @property
    def is_connected(self) -> bool:
        """Whether requests can be sent now; after any missed answer it is ``False``."""
        return self._session is not None and self._session.is_open

    async def connect(self) -> None:
        """Open a fresh session and find the tags' nodes; a former session is dropped.

        Waits until the endpoint's gap since the last attempt has passed; the gap doubles with every
        connection that never answered a request, up to eightfold.  Raises ``LinkTimeout``, or ``LinkClosed``
        when the server can't be trusted, doesn't trust us, or a name leads to another node than before.
        """
        loop = asyncio.get_running_loop()
        async with self._one_at_a_time:
            self._drop()
            await asyncio.sleep(self._back_off.wait_s(loop.time()))
            self._back_off.attempted(loop.time())
            session = await self._opening.open()
            try:
                self._take(await find_nodes(session, self._tags))
                self._barred = await self._find_barred(session)
            except LinkRefused as refusal:
                session.drop()
                raise LinkClosed(f"{refusal} (finding the nodes)") from refusal
            except BaseException:
                session.drop()
                raise
            self._session = session

    async def read(self, names: Sequence[str]) -> ReadReport:
        """Read the named tags in one request; a node that has no good number says so in its reading.

        Raises ``LinkTimeout``, ``LinkClosed`` or ``LinkRefused``; after the first two the connection is gone.
        """
        async with self._one_at_a_time:
            session = self._live_session()
            known = [name for name in dict.fromkeys(names) if self._nodes[name].node_id is not None]
            params = ua.ReadParameters(
                TimestampsToReturn=ua.TimestampsToReturn.Source,
                NodesToRead=[
                    ua.ReadValueId(NodeId=self._nodes[name].node_id, AttributeId=AttributeIds.Value) for name in known
                ],
            )
            if not known:
                now_s = asyncio.get_running_loop().time()
                return ReadReport({name: self._unfound(name) for name in names}, Stamp.at(now_s))
            try:
                answers, sent = await session.ask_timed(session.client.uaclient.read(params))
            except LinkError as fault:
                raise _told(fault, f"reading {', '.join(known)}") from fault
            self._back_off.answered()
        if len(answers) != len(known):
            raise LinkRefused(
                f"{self._endpoint.url} answered {len(answers)} of {len(known)} nodes; its OPC UA is faulty"
            )
        read = {name: self._to_reading(name, answer, sent) for name, answer in zip(known, answers, strict=True)}
        return ReadReport({name: read[name] if name in read else self._unfound(name) for name in names}, sent)

    async def write(self, values: Mapping[str, RawValue]) -> WriteReport:
        """Write the named tags in the given order, those of one output move in one request.

        ``REFUSED`` only when surely nothing changed: once a part was applied, or the status leaves it open,
        what isn't ``APPLIED`` is ``NOT_HEARD``.  Raises ``WriteForbidden`` before anything is sent.
        A cancelled write may have landed; the connection is gone then.
        """
        for name, raw in values.items():
            self._permit(name, raw)
        async with self._one_at_a_time:
            started_s = asyncio.get_running_loop().time()
            if not self.is_connected:
                return WriteReport(WriteOutcome.NOT_HEARD, Stamp.at(started_s), self._not_connected())
            answers = {name: self._to_answer(name, raw) for name, raw in values.items()}
            earliest_s: float | None = None
            applied: list[str] = []
            for part in split_writes(list(answers)):
                begun_s = asyncio.get_running_loop().time()
                earliest_s = begun_s if earliest_s is None else earliest_s
                outcome, detail, sent = await self._write_part({name: answers[name] for name in part}, applied)
                if outcome is not WriteOutcome.APPLIED:
                    return WriteReport(outcome, Stamp(earliest_s, sent.latest_s), detail)
                applied += part
        latest_s = asyncio.get_running_loop().time()
        return WriteReport(WriteOutcome.APPLIED, Stamp(started_s if earliest_s is None else earliest_s, latest_s))

    async def close(self) -> None:
        """Give the session back to the server and close; never raises and may be called again."""
        session, self._session = self._session, None
        if session is not None:
            await session.close()

    async def facts(self) -> ServerFacts:
        """What the server tells about the tags' nodes, and the certificates in use.  Raises as ``read``."""
        async with self._one_at_a_time:
            session = self._live_session()
            found = {name: (node.node_id, node.name) for name, node in self._nodes.items() if node.node_id is not None}
            described = {fact.name: fact for fact in await describe(session, found)}
        nodes = tuple(
            described[name] if name in described else NodeFact(name, node.name, fault=node.fault)
            for name, node in self._nodes.items()
        )
        return ServerFacts(nodes, self._opening.certificates)

    def _drop(self) -> None:
        if self._session is not None:
            self._session.drop()
            self._session = None

    def _live_session(self) -> Session:
        if self._session is None or not self._session.is_open:
            raise LinkClosed(self._not_connected())
        return self._session

    def _not_connected(self) -> str:
        return f"{self._endpoint.url} is not connected; nothing was sent"

    def _take(self, found: Mapping[str, FoundNode]) -> None:
        for name, node in found.items():
            former = self._nodes.get(name)
            if former is not None and former.node_id is not None and node.node_id not in (None, former.node_id):
                raise LinkClosed(
                    f"{self._endpoint.url}: {node.name} of {name!r} now leads to {node.node_id}, before to "
                    f"{former.node_id}; the server was changed: check the configuration, then start anew"
                )
        for name, node in found.items():
            former = self._nodes.get(name)
            held = node.held or (None if former is None else former.held)
            self._nodes[name] = FoundNode(node.node_id, node.name, held, node.fault)

    async def _find_barred(self, session: Session) -> frozenset[ua.NodeId]:
        """The nodes that the site never lets write, whatever name leads to them."""
        told = {text: OpcUaTag(text) for text in self._endpoint.never_written}
        found = (await find_nodes(session, told)).values() if told else ()
        return frozenset(node.node_id for node in found if node.node_id is not None)

    def _unfound(self, name: str) -> Reading:
        return Reading(None, Quality.BAD, reason=self._nodes[name].fault)

    def _to_reading(self, name: str, answer: ua.DataValue, sent: Stamp) -> Reading:
        held = held_type_of(answer)
        node = self._nodes[name]
        if held is not None and node.held is None:
            self._nodes[name] = FoundNode(node.node_id, node.name, held, node.fault)
        return to_reading(answer, self._source_s(answer.SourceTimestamp, sent))

    def _source_s(self, source_time: datetime | None, sent: Stamp) -> float | None:
        """The source's time on our clock, where the file says what it is and it can be: never after the reply."""
        if not self._endpoint.source_time_is_sampling or source_time is None:
            return None
        age_s = time.time() - source_time.timestamp()
        return None if age_s < 0 else min(asyncio.get_running_loop().time() - age_s, sent.latest_s)

    def _permit(self, name: str, raw: RawValue) -> None:
        tag = self._tags.get(name)
        if tag is None:
            raise WriteForbidden(f"{self._endpoint.url}: {name!r} is no tag of this link")
        self._write_list.check(name, tag, raw)
        node = self._nodes.get(name)
        if node is not None and node.held is not None:
            self._to_answer(name, raw)

    def _to_answer(self, name: str, raw: RawValue) -> ua.DataValue:
        node, told = self._nodes[name], self._tags[name].type
        if node.node_id is None or node.held is None:
            raise WriteForbidden(
                f"{name!r} can't be written: {node.fault or 'its type is not known, it never held a number'}"
            )
        if node.node_id in self._barred:
            raise WriteForbidden(f"{name!r} is {node.name}, which the site's limits never let write")
        if told is not None and told is not node.held:
            raise WriteForbidden(
                f"{name!r} is a {told.value} in the file, but {node.name} holds a {node.held.value}; correct the type"
            )
        try:
            return to_answer(node.held, raw)
        except WriteForbidden as fault:
            raise WriteForbidden(f"{name!r}: {fault}") from fault

    async def _write_part(
        self, part: Mapping[str, ua.DataValue], applied: Sequence[str]
    ) -> tuple[WriteOutcome, str, Stamp]:
        """One request: its outcome, what to tell, and its span."""
        loop = asyncio.get_running_loop()
        begun_s = loop.time()
        before = f"; {', '.join(applied)} had been applied before" if applied else ""
        params = ua.WriteParameters(
            NodesToWrite=[
                ua.WriteValue(NodeId=self._nodes[name].node_id, AttributeId=AttributeIds.Value, Value=answer)
                for name, answer in part.items()
            ]
        )
        try:
            session = self._live_session()
            codes, sent = await session.ask_timed(session.client.uaclient.write(params))
        except ServerRefused as fault:
            is_refused = is_surely_undone(fault.code) and not applied
            outcome = WriteOutcome.REFUSED if is_refused else WriteOutcome.NOT_HEARD
            return outcome, f"{fault} (writing {', '.join(part)}){before}", Stamp(begun_s, loop.time())
        except LinkError as fault:
            sent = Stamp(begun_s, loop.time())
            return WriteOutcome.NOT_HEARD, f"{fault} (writing {', '.join(part)}){before}", sent
        self._back_off.answered()
        where = {name: self._nodes[name].name for name in part}
        return *judge_write(self._endpoint.url, where, [code.value for code in codes], applied), sent


def _told(fault: LinkError, doing: str) -> LinkError:
    if isinstance(fault, ServerRefused):
        return ServerRefused(f"{fault} ({doing})", fault.code)
    return type(fault)(f"{fault} ({doing})")
