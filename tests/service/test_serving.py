"""Around the daemon: where its page may lie, locks in the house, and what a service manager hears."""

import asyncio
import os
import socket
from pathlib import Path

import pytest

from autotune.errors import ConfigError, LoopBusy
from autotune.service.console_keeper import PageAddress, bind_page, is_loopback
from autotune.service.locks import HouseLocks, Tenant
from autotune.service.service_notice import feed_watchdog, notify

TENANT = Tenant("somebody", 1, "here", "2026-12-01T00:00:00+00:00", "test of TIC-1")


@pytest.mark.parametrize("host", ["0.0.0.0", "::", "192.0.2.7", "plant.example"])  # noqa: S104 - must be refused
def test_plain_http_is_for_this_machine_only(host: str) -> None:
    with pytest.raises(ConfigError, match="plain HTTP would show secrets"):
        bind_page(PageAddress(host, 0))


@pytest.mark.parametrize(("host", "is_ours"), [("127.0.0.1", True), ("::1", True), ("localhost", True), ("x", False)])
def test_loopback_is_known_by_name_and_number(host: str, is_ours: bool) -> None:
    assert is_loopback(host) is is_ours


def test_a_port_that_is_taken_and_a_certificate_that_is_not_there_are_told(tmp_path: Path) -> None:
    with bind_page(PageAddress(port=0)) as first:
        port = first.getsockname()[1]
        with pytest.raises(ConfigError, match=f"port {port}"):
            bind_page(PageAddress(port=port))
    missing = tmp_path / "none.pem"
    with pytest.raises(ConfigError, match="is no file"):
        bind_page(PageAddress("0.0.0.0", 0, missing, missing))  # noqa: S104 - refused for its certificate


def test_in_the_house_one_loop_keeps_its_endpoint_and_unit_until_it_lets_go() -> None:
    house = HouseLocks()
    first = house.hold(Path(), (("loop", "TIC-1"), ("endpoint", "plc:502"), ("unit", "skid")), TENANT)
    for thing in (("loop", "TIC-1"), ("endpoint", "plc:502"), ("unit", "skid")):
        with pytest.raises(LoopBusy, match="test of TIC-1"):
            house.hold(Path(), (("loop", "TIC-2"), thing), TENANT)
    house.hold(Path(), (("loop", "TIC-2"),), TENANT).release()
    first.release()
    house.hold(Path(), (("endpoint", "plc:502"),), TENANT).release()


async def test_the_watchdog_is_fed_only_while_tests_keep_their_scan(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    manager = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
    manager.bind(str(tmp_path / "notify"))
    manager.setblocking(False)
    monkeypatch.setenv("NOTIFY_SOCKET", str(tmp_path / "notify"))
    monkeypatch.setenv("WATCHDOG_USEC", "60000")
    running = asyncio.get_running_loop()
    in_time = True
    notify("READY=1")
    feeding = asyncio.ensure_future(feed_watchdog(lambda: in_time))
    async with asyncio.timeout(20.0):
        assert await running.sock_recv(manager, 100) == b"READY=1"
        assert await running.sock_recv(manager, 100) == b"WATCHDOG=1"
        in_time = False
        while True:  # what was sent before
            try:
                manager.recv(100)
            except BlockingIOError:
                break
        with pytest.raises(TimeoutError):
            async with asyncio.timeout(0.3):
                await running.sock_recv(manager, 100)
        in_time = True
        assert await running.sock_recv(manager, 100) == b"WATCHDOG=1"
    feeding.cancel()
    await asyncio.wait({feeding})
    manager.close()


def test_without_a_service_manager_nothing_is_sent(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("NOTIFY_SOCKET", raising=False)
    assert "NOTIFY_SOCKET" not in os.environ
    notify("READY=1")
