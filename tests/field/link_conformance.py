"""What every ``LoopLink`` keeps to, whatever its protocol: derive a test class and give it a ``bench``.

The loop is ``GUARDED`` of ``tests.field.loops``.
"""

import asyncio
from enum import Enum
from math import nan
from typing import Protocol

import pytest

from autotune.errors import LinkClosed, LinkRefused, LinkTimeout, WriteForbidden
from autotune.field.link import LoopLink, RawValue
from autotune.loop.quality import Quality
from autotune.loop.write import WriteOutcome

PROMPT_S = 10.0
"""No test waits that long but where something hangs."""


class Bench(Protocol):
    """A link and the controller at its other end."""

    @property
    def link(self) -> LoopLink: ...

    def held(self, name: str) -> RawValue:
        """What the controller holds."""
        ...


class Trouble(Enum):
    """What happens to a request; a silent one is carried out, but nobody says so."""

    NONE = "none"
    SILENT = "silent"
    CLOSED = "closed"
    REFUSED = "refused"


class TroubledBench(Bench, Protocol):
    """A bench whose controller can be made to fail."""

    heard: asyncio.Event

    def trouble(self, *troubles: Trouble) -> None:
        """What happens to the next requests, in their order."""
        ...

    def hang_up(self) -> None:
        """The controller closes the connection."""
        ...


def is_connected(bench: Bench) -> bool:
    """Asked anew each time: what a request does to it is what the tests are about."""
    return bench.link.is_connected


class LinkConformance:
    """Rules that need no fault at the other end."""

    async def test_a_new_link_is_not_connected_and_sends_nothing(self, bench: Bench) -> None:
        assert not is_connected(bench)
        with pytest.raises(LinkClosed):
            await bench.link.read(["pv"])
        report = await bench.link.write({"sp": 61.0})
        assert report.outcome is WriteOutcome.NOT_HEARD
        assert bench.held("sp") != 61.0

    async def test_a_closed_link_can_be_closed_again_and_connected_afresh(self, bench: Bench) -> None:
        await bench.link.close()
        await bench.link.connect()
        assert is_connected(bench)
        await bench.link.close()
        await bench.link.close()
        assert not is_connected(bench)
        await bench.link.connect()
        assert (await bench.link.read(["sp"])).readings["sp"].raw == bench.held("sp")

    async def test_it_reads_what_the_controller_holds_in_the_order_asked_for(self, bench: Bench) -> None:
        await bench.link.connect()
        names = ("mode", "sp", "boot_count", "gain")
        report = await bench.link.read(names)
        assert tuple(report.readings) == names
        assert [report.readings[name].raw for name in names] == [bench.held(name) for name in names]
        assert {report.readings[name].quality for name in names} == {Quality.GOOD}

    async def test_stamps_span_request_and_reply_on_the_loops_clock(self, bench: Bench) -> None:
        now_s = asyncio.get_running_loop().time
        await bench.link.connect()
        before_s = now_s()
        reading = (await bench.link.read(["pv", "sp"])).sent
        between_s = now_s()
        writing = (await bench.link.write({"sp": 61.0})).sent
        assert before_s <= reading.earliest_s <= reading.latest_s <= between_s
        assert between_s <= writing.earliest_s <= writing.latest_s <= now_s()

    async def test_an_applied_write_is_held_by_the_controller_and_reads_back(self, bench: Bench) -> None:
        await bench.link.connect()
        report = await bench.link.write({"sp": 61.5, "gain": 2.25})
        assert report.outcome is WriteOutcome.APPLIED
        assert (bench.held("sp"), bench.held("gain")) == (61.5, 2.25)
        readings = (await bench.link.read(["sp", "gain"])).readings
        assert (readings["sp"].raw, readings["gain"].raw) == (61.5, 2.25)

    async def test_a_real_is_held_as_the_nearest_single(self, bench: Bench) -> None:
        await bench.link.connect()
        await bench.link.write({"sp": 50.1})
        nearest = 13133414 * 2.0**-18  # the single next to 50.1, after IEEE 754
        assert (await bench.link.read(["sp"])).readings["sp"].raw == nearest

    @pytest.mark.parametrize(
        ("name", "raw"),
        [("pv", 50.0), ("op", 95.0), ("op", nan), ("sp", 200.0), ("mode", 7), ("enable", 1), ("nobody", 1.0)],
    )
    async def test_what_is_not_on_the_write_list_is_not_sent(self, bench: Bench, name: str, raw: RawValue) -> None:
        """S10."""
        await bench.link.connect()
        found = bench.held("sp")
        with pytest.raises(WriteForbidden):
            await bench.link.write({"sp": 61.0, name: raw})
        assert bench.held("sp") == found
        assert is_connected(bench)

    async def test_requests_at_the_same_time_go_one_after_the_other(self, bench: Bench) -> None:
        await bench.link.connect()
        reports = await asyncio.gather(
            bench.link.read(["sp"]), bench.link.write({"gain": 3.0}), bench.link.read(["gain"])
        )
        assert reports[0].sent.latest_s <= reports[1].sent.latest_s <= reports[2].sent.latest_s
        assert reports[2].readings["gain"].raw == 3.0


class TroubledLinkConformance(LinkConformance):
    """Rules for when the controller or the wire fails."""

    @pytest.mark.parametrize(("trouble", "fault"), [(Trouble.SILENT, LinkTimeout), (Trouble.CLOSED, LinkClosed)])
    async def test_a_read_that_gets_no_answer_is_an_error_and_ends_the_connection(
        self, bench: TroubledBench, trouble: Trouble, fault: type[Exception]
    ) -> None:
        await bench.link.connect()
        bench.trouble(trouble)
        async with asyncio.timeout(PROMPT_S):
            with pytest.raises(fault):
                await bench.link.read(["pv"])
        assert not is_connected(bench)
        with pytest.raises(LinkClosed):
            await bench.link.read(["pv"])

    @pytest.mark.parametrize("trouble", [Trouble.SILENT, Trouble.CLOSED])
    async def test_a_write_that_nobody_answers_is_not_heard_of_though_it_may_have_landed(
        self, bench: TroubledBench, trouble: Trouble
    ) -> None:
        """S8."""
        await bench.link.connect()
        bench.trouble(trouble)
        now_s = asyncio.get_running_loop().time
        begun_s = now_s()
        async with asyncio.timeout(PROMPT_S):
            report = await bench.link.write({"sp": 61.0})
        assert report.outcome is WriteOutcome.NOT_HEARD
        assert report.detail
        assert begun_s <= report.sent.earliest_s <= report.sent.latest_s <= now_s()
        assert bench.held("sp") == 61.0
        assert not is_connected(bench)

    async def test_a_refused_read_is_an_error_and_keeps_the_connection(self, bench: TroubledBench) -> None:
        await bench.link.connect()
        bench.trouble(Trouble.REFUSED)
        with pytest.raises(LinkRefused):
            await bench.link.read(["pv"])
        assert is_connected(bench)
        await bench.link.read(["pv"])

    async def test_a_refused_write_changed_nothing_and_keeps_the_connection(self, bench: TroubledBench) -> None:
        await bench.link.connect()
        found = bench.held("sp")
        bench.trouble(Trouble.REFUSED)
        report = await bench.link.write({"sp": 61.0})
        assert report.outcome is WriteOutcome.REFUSED
        assert bench.held("sp") == found
        assert is_connected(bench)

    async def test_the_first_part_that_is_not_applied_stops_the_rest_and_is_no_refusal(
        self, bench: TroubledBench
    ) -> None:
        await bench.link.connect()
        found = bench.held("mode")
        bench.trouble(Trouble.NONE, Trouble.REFUSED)
        report = await bench.link.write({"sp": 61.0, "gain": 2.25, "mode": 0})
        assert report.outcome is WriteOutcome.NOT_HEARD
        assert bench.held("sp") == 61.0
        assert bench.held("gain") != 2.25
        assert bench.held("mode") == found

    async def test_nothing_is_sent_twice(self, bench: TroubledBench) -> None:
        """S8."""
        await bench.link.connect()
        bench.trouble(Trouble.SILENT, Trouble.CLOSED)
        assert (await bench.link.write({"sp": 61.0})).outcome is WriteOutcome.NOT_HEARD
        await bench.link.connect()
        with pytest.raises(LinkClosed):  # by the second trouble, which no retry has used up
            await bench.link.read(["sp"])

    @pytest.mark.parametrize("trouble", [Trouble.SILENT, Trouble.CLOSED])
    async def test_after_a_loss_a_fresh_connection_works(self, bench: TroubledBench, trouble: Trouble) -> None:
        await bench.link.connect()
        bench.trouble(trouble)
        await bench.link.write({"sp": 61.0})
        await bench.link.connect()
        assert (await bench.link.read(["sp"])).readings["sp"].raw == 61.0

    async def test_a_connection_closed_while_idle_is_seen_by_the_next_request(self, bench: TroubledBench) -> None:
        await bench.link.connect()
        bench.hang_up()
        async with asyncio.timeout(PROMPT_S):
            with pytest.raises(LinkClosed):
                await bench.link.read(["pv"])
        assert not is_connected(bench)

    async def test_a_cancelled_read_ends_the_connection_and_leaves_no_task(self, bench: TroubledBench) -> None:
        await bench.link.connect()
        tasks_before = asyncio.all_tasks()
        bench.trouble(Trouble.SILENT)
        reading = asyncio.ensure_future(bench.link.read(["pv"]))
        await bench.heard.wait()
        reading.cancel()
        with pytest.raises(asyncio.CancelledError):
            await reading
        assert not is_connected(bench)
        assert asyncio.all_tasks() <= tasks_before

    async def test_a_cancelled_write_may_have_landed_so_it_raises_and_ends_the_connection(
        self, bench: TroubledBench
    ) -> None:
        """S8."""
        await bench.link.connect()
        tasks_before = asyncio.all_tasks()
        bench.trouble(Trouble.SILENT)
        writing = asyncio.ensure_future(bench.link.write({"sp": 61.0}))
        await bench.heard.wait()
        writing.cancel()
        with pytest.raises(asyncio.CancelledError):
            await writing
        assert bench.held("sp") == 61.0
        assert not is_connected(bench)
        assert asyncio.all_tasks() <= tasks_before
