"""The plant as a process of its own with its OPC UA face."""

import subprocess
from pathlib import Path

import pytest
from asyncua import ua
from asyncua.client.client import Client

from simulator.opc_ua_security import thumbprint
from tests.simulator.opc_ua import INT32, Identity, read, write
from tests.simulator.test_main import COMMAND, ROOT, answer, plant, read_registers, ready

pytestmark = pytest.mark.socket


async def test_both_faces_of_one_process_show_the_same_plant(tmp_path: Path) -> None:
    pki, users = tmp_path / "pki", tmp_path / "users"
    users.write_text("# the shift\nshift:ju:ice:operate\n", encoding="utf-8")
    identity = await Identity.make(tmp_path, "client")
    arguments = ["fast-loop", "--opc-ua", "0", "--modbus", "0", "--opc-ua-trust-all"]
    with plant(*arguments, "--opc-ua-pki", str(pki), "--opc-ua-users", str(users)) as running:
        told = ready(running)
        url, own = str(told["opc_ua_url"]), Path(str(told["opc_ua_certificate"]))
        assert own == pki / "own" / "certificate.der"
        assert told["opc_ua_thumbprint"] == thumbprint(own)
        security = f"Aes256Sha256RsaPss,SignAndEncrypt,{identity.certificate},{identity.key},{own}"
        for password in ("wrong", "ju:ice"):
            client = Client(url)
            client.application_uri = identity.uri
            client.set_user("shift")
            client.set_password(password)
            await client.set_security_string(security)
            if password == "wrong":
                with pytest.raises(ua.uaerrors.BadUserAccessDenied):
                    await client.connect()
                continue
            async with client:
                assert await write(client, ("TIC-1.mode", 0, INT32)) == [0]
                assert read_registers(told["modbus_port"], 6, 1) == (0,)
                assert answer(running, "op TIC-1 30") == {"ok": True, "op_pct": 30.0}
                while (await read(client, "TIC-1.op"))[0].Value != ua.Variant(30.0, ua.VariantType.Float):
                    pass
                answer(running, "fault plc-stop")
                clock = answer(running, "state")["plc_clock_ms"]
                [seen] = await read(client, "TIC-1.plc_clock_ms")
                assert seen.Value == ua.Variant(clock, ua.VariantType.UInt32)
        assert answer(running, "quit") == {"ok": True}
        assert running.wait(10.0) == 0
        assert running.stderr is not None
        assert running.stderr.read() == ""


def test_the_own_certificate_outlives_the_process_and_a_taken_port_is_told_in_one_line(tmp_path: Path) -> None:
    pki = ["--opc-ua-pki", str(tmp_path)]
    with plant("fast-loop", "--opc-ua", "0", *pki) as first:
        told = ready(first)
        assert told["modbus_port"] is None
        port = str(told["opc_ua_url"]).split(":")[2].split("/")[0]
        ended = subprocess.run(
            [*COMMAND, "fast-loop", "--opc-ua", port, *pki], cwd=ROOT, capture_output=True, text=True, check=False
        )
    assert ended.returncode == 3
    assert f"127.0.0.1:{port}" in ended.stderr
    assert "Traceback" not in ended.stderr
    assert thumbprint(Path(str(told["opc_ua_certificate"]))) == told["opc_ua_thumbprint"]


@pytest.mark.parametrize(
    ("arguments", "complaint"),
    [
        (["--opc-ua-user", "shift:juice"], "write NAME:PASSWORD:ROLE with the role read or operate"),
        (["--opc-ua-user", "shift:juice:admin"], "shift: write NAME:PASSWORD:ROLE"),
        (["--opc-ua-users", "no-such-file"], "no-such-file"),
        (["--opc-ua-user-certificate", "DEVELOPERS.md:operate"], "DEVELOPERS.md"),
        (["--opc-ua-user-certificate", "DEVELOPERS.md"], "write FILE:ROLE"),
    ],
)
def test_a_bad_option_ends_with_two_and_a_clear_line(arguments: list[str], complaint: str) -> None:
    ended = subprocess.run(
        [*COMMAND, "fast-loop", "--opc-ua", "0", *arguments], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert ended.returncode == 2
    assert complaint in ended.stderr
    assert "Traceback" not in ended.stderr
