"""The link against a server of its library, troubled on purpose."""

from collections.abc import AsyncIterator, Iterator

import pytest

from autotune.config.types import DataType
from autotune.field import open_link
from autotune.field.link import RawValue
from tests.field.link_conformance import Trouble, TroubledLinkConformance
from tests.field.loops import GUARDED
from tests.field.ua_plant import UaPlant, Wire, in_the_plant

pytestmark = pytest.mark.socket

AT_REST: dict[str, RawValue] = {"pv": 48.5, "sp": 50.0, "op": 40.0, "mode": 1, "gain": 0.5, "integral": 1.5}
HELD = {
    name: (DataType.DINT if name == "mode" else tag.type or DataType.REAL, AT_REST.get(name, 0))
    for name, tag in GUARDED.tags
}
SILENCE_S = 0.5


@pytest.fixture(scope="module")
def plant() -> Iterator[UaPlant]:
    with UaPlant(HELD) as plant:
        yield plant


class UaBench:
    def __init__(self, plant: UaPlant, wire: Wire) -> None:
        self.plant = plant
        self.wire = wire
        self.heard = wire.heard
        self.loop = in_the_plant(GUARDED, wire.url, SILENCE_S)
        self.link = open_link(self.loop)

    def held(self, name: str) -> RawValue:
        return self.plant.held(name)

    def trouble(self, *troubles: Trouble) -> None:
        self.heard.clear()
        self.plant.script.extend(troubles)

    def hang_up(self) -> None:
        self.wire.hang_up()


@pytest.fixture
async def bench(plant: UaPlant) -> AsyncIterator[UaBench]:
    plant.reset()
    async with Wire(plant) as wire:
        bench = UaBench(plant, wire)
        yield bench
        await bench.link.close()


class TestOpcUaLink(TroubledLinkConformance):
    pass
