"""The soft plant of a rehearsal over OPC UA: secured, pinned, with a user, and read from end to end."""

import stat
from pathlib import Path

import pytest

from autotune.cli.soft_plant import Link, rehearsal
from autotune.config.types import MessageSecurity, OpcUaEndpoint
from autotune.field import open_link
from autotune.service.check import check_loop
from autotune.service.readiness import Level

pytestmark = pytest.mark.socket


async def test_the_plant_of_a_rehearsal_over_opc_ua_is_secured_and_fit_to_test_once_enabled(tmp_path: Path) -> None:
    async with rehearsal(Link.OPC_UA, tmp_path) as started:
        loop = started.configuration.loop("TIC-204")
        assert loop is not None
        endpoint = loop.controller.endpoint
        assert isinstance(endpoint, OpcUaEndpoint)
        assert endpoint.security is MessageSecurity.SIGN_AND_ENCRYPT
        assert len(endpoint.server_thumbprint) == 64
        link = open_link(loop)
        before = await check_loop(loop, link, open_link, look_s=0.5)
        assert [one.code for one in before.findings if one.level is Level.STOP] == ["GUARD_NOT_ENABLED"]
        assert (await started.plant.press("enable TIC-204"))["ok"]
        after = await check_loop(loop, link, open_link, look_s=0.5)
        await link.close()
    assert after.is_fit, after.findings
    assert [one.code for one in after.findings if one.level is Level.CAUTION] == []
    assert rights_of_secrets(tmp_path) == [0o600] * 3


def rights_of_secrets(folder: Path) -> list[int]:
    """Of our key, of the password, and of the plant's list of users."""
    secrets = [folder / "pki" / "autotune-key.pem", *folder.glob("soft-plant-*.txt")]
    return [stat.S_IMODE(path.stat().st_mode) for path in secrets]
