"""A served plant for the tests of this folder."""

from collections.abc import AsyncIterator
from dataclasses import dataclass

import pytest

from simulator.faults import WireFaults
from simulator.modbus_server import PlantServer
from simulator.plc import Plc
from simulator.registers import Registers
from simulator.rig import load_rig


@dataclass(frozen=True, slots=True)
class Served:
    """A juice skid whose scans the test does itself, behind a real socket."""

    plc: Plc
    wire: WireFaults
    server: PlantServer


@pytest.fixture
async def served() -> AsyncIterator[Served]:
    plc, wire = load_rig("juice-skid").build(), WireFaults()
    server = PlantServer(Registers(plc, word_order="big"), wire, device_id=17)
    await server.start()
    yield Served(plc, wire, server)
    await server.stop()
