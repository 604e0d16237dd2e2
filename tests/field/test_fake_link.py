"""The fake keeps to the rules of the real link, and to its own promises in virtual time."""

import asyncio
from math import nan

import pytest

from autotune.config.types import DataType
from autotune.errors import LinkRefused, LinkTimeout
from autotune.field.link import RawValue, Reading
from autotune.loop.quality import Quality
from autotune.loop.write import WriteOutcome
from tests.fakes.link import FakeLink, Fault, FaultKind
from tests.fakes.virtual_time import run_virtual
from tests.field.link_conformance import Trouble, TroubledLinkConformance
from tests.field.loops import GUARDED, holding, with_tags

IMAGE: dict[str, RawValue] = {
    **dict.fromkeys((name for name, _ in GUARDED.tags), 0),
    "pv": 75.0,
    "sp": 72.0,
    "op": 40.0,
    "mode": 1,
    "boot_count": 3,
    "gain": 1.5,
}

KINDS = {
    Trouble.NONE: FaultKind.LATE,
    Trouble.SILENT: FaultKind.SILENT,
    Trouble.CLOSED: FaultKind.CLOSED,
    Trouble.REFUSED: FaultKind.REFUSED,
}


class FakeBench:
    def __init__(self) -> None:
        self.link = FakeLink(GUARDED, IMAGE)
        self.heard = asyncio.Event()
        self.link.on_read = self.heard.set
        self.link.on_write = lambda _written: self.heard.set()

    def held(self, name: str) -> RawValue:
        return self.link.image[name]

    def trouble(self, *troubles: Trouble) -> None:
        self.link.next_faults.extend(Fault(KINDS[trouble]) for trouble in troubles)

    def hang_up(self) -> None:
        self.link.cut()


class TestFakeLink(TroubledLinkConformance):
    @pytest.fixture
    async def bench(self) -> FakeBench:
        return FakeBench()


async def connected(latency_s: float = 0.0) -> FakeLink:
    link = FakeLink(GUARDED, IMAGE)
    link.latency_s = latency_s
    await link.connect()
    return link


def test_latency_and_delay_pass_on_the_loops_clock() -> None:
    async def main() -> None:
        link = await connected(0.01)
        link.read_faults[1] = Fault(FaultKind.LATE, delay_s=0.02)
        late = await link.read(["pv"])
        prompt = await link.read(["pv"])
        assert late.sent.width_s == pytest.approx(0.03)
        assert prompt.sent.width_s == pytest.approx(0.01)

    run_virtual(main())


def test_a_request_later_than_its_deadline_is_missed_and_lands_nevertheless() -> None:
    async def main() -> None:
        link = await connected()
        link.write_faults[1] = Fault(FaultKind.LATE, delay_s=60.0)
        report = await link.write({"op": 45.0})
        assert report.outcome is WriteOutcome.NOT_HEARD
        assert report.sent.width_s == pytest.approx(0.05)
        assert link.image["op"] == 40.0
        await asyncio.sleep(60.0)
        assert link.image["op"] == 45.0

    run_virtual(main())


def test_a_write_that_never_arrives_changes_nothing() -> None:
    async def main() -> None:
        link = await connected()
        link.write_faults[1] = Fault(FaultKind.SILENT, lands=False)
        assert (await link.write({"op": 45.0})).outcome is WriteOutcome.NOT_HEARD
        assert link.image["op"] == 40.0

    run_virtual(main())


def test_a_held_write_waits_for_its_release_or_its_deadline() -> None:
    async def main() -> None:
        link = await connected()
        link.write_faults[1] = link.write_faults[2] = Fault(FaultKind.HELD)
        writing = asyncio.ensure_future(link.write({"op": 45.0}))
        await link.held.wait()
        assert link.image["op"] == 40.0
        link.release()
        assert (await writing).outcome is WriteOutcome.APPLIED
        assert link.image["op"] == 45.0
        assert (await link.write({"op": 46.0})).outcome is WriteOutcome.NOT_HEARD
        assert link.image["op"] == 45.0
        link.release()
        assert link.image["op"] == 46.0

    run_virtual(main())


def test_a_pulled_cable_swallows_everything_until_it_is_back() -> None:
    async def main() -> None:
        link = await connected()
        link.is_reachable = False
        assert (await link.write({"op": 45.0})).outcome is WriteOutcome.NOT_HEARD
        with pytest.raises(LinkTimeout):
            await link.connect()
        assert not link.is_connected
        link.is_reachable = True
        await link.connect()
        assert (await link.read(["op"])).readings["op"].raw == 40.0

    run_virtual(main())


def test_hooks_see_each_request_that_lands() -> None:
    async def main() -> None:
        link = await connected()
        landed: list[dict[str, RawValue]] = []
        link.on_write = lambda written: landed.append(dict(written))

        def count_scans() -> None:
            link.image["boot_count"] = int(link.image["boot_count"]) + 1

        link.on_read = count_scans
        await link.write({"holder_request": 4711, "heartbeat": 1, "op_request": 45.0, "sequence": 1})
        await link.write({"sp": 61.0, "gain": 2.0})
        assert (await link.read(["boot_count"])).readings["boot_count"].raw == 4
        assert landed == [
            {"holder_request": 4711, "heartbeat": 1, "op_request": 45.0, "sequence": 1},
            {"sp": 61.0},
            {"gain": 2.0},
        ]
        assert [request.kind for request in link.log] == ["connect", "write", "write", "write", "read"]

    run_virtual(main())


def test_the_image_tells_quality_and_what_does_not_exist() -> None:
    async def main() -> None:
        link = await connected()
        link.image["pv"] = nan
        link.qualities["op"] = Quality.FORCED
        link.qualities["sp"] = Quality.BAD
        readings = (await link.read(["pv", "op", "sp"])).readings
        assert readings == {
            "pv": Reading(None, Quality.BAD),
            "op": Reading(40.0, Quality.FORCED),
            "sp": Reading(None, Quality.BAD),
        }
        del link.image["pv"]
        with pytest.raises(LinkRefused):
            await link.read(["pv"])

    run_virtual(main())


def test_the_image_holds_what_a_register_of_its_type_would() -> None:
    async def main() -> None:
        link = FakeLink(with_tags(GUARDED, {"gain": holding(40, DataType.LREAL)}), IMAGE)
        await link.connect()
        await link.write({"sp": 50.1, "gain": 1.1})
        assert link.image["sp"] == 13133414 * 2.0**-18  # the single next to 50.1
        assert link.image["gain"] == 1.1

    run_virtual(main())
