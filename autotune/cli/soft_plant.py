"""The soft plant of a rehearsal, as a process of its own, and how a rehearsal reaches it over each protocol."""

import asyncio
import json
import os
import secrets
import shutil
import socket
import sys
from collections.abc import AsyncIterator, Sequence
from contextlib import asynccontextmanager
from dataclasses import dataclass
from enum import Enum
from pathlib import Path
from typing import Any

from autotune.config.bundled import bundled_path
from autotune.config.documents import Override
from autotune.config.load import load
from autotune.config.types import Configuration
from autotune.errors import LinkClosed

RIG = "juice-skid"
_USER = "autotune"


class Link(Enum):
    """The protocol of a rehearsal."""

    MODBUS = "modbus"
    OPC_UA = "opc-ua"


_FILES = {Link.MODBUS: "rehearsal.toml", Link.OPC_UA: "rehearsal-opc-ua.toml"}


class SoftPlant:
    """The soft plant as a process of its own; its panel is a line each way."""

    def __init__(self, process: asyncio.subprocess.Process) -> None:
        self._process = process

    async def answer(self) -> dict[str, Any]:
        """The next line that the plant says.  Raises ``LinkClosed`` when it has ended."""
        line = b"" if self._process.stdout is None else await self._process.stdout.readline()
        if not line:
            raise LinkClosed("the soft plant ended by itself; run 'python -m simulator juice-skid' to see why")
        answer: dict[str, Any] = json.loads(line)
        return answer

    async def press(self, line: str) -> dict[str, Any]:
        """One line at the plant's own panel, and its answer."""
        if self._process.stdin is not None:
            self._process.stdin.write(f"{line}\n".encode())
            await self._process.stdin.drain()
        return await self.answer()


@dataclass(frozen=True, slots=True)
class Rehearsal:
    """A running soft plant and the configuration that reaches it."""

    plant: SoftPlant
    configuration: Configuration


@asynccontextmanager
async def rehearsal(link: Link, folder: Path) -> AsyncIterator[Rehearsal]:
    """Start the soft plant on a free port of this machine, its records in ``folder``; it ends with the block."""
    options: tuple[str, ...] = ("--modbus", "0")
    if link is Link.OPC_UA:
        options = await asyncio.to_thread(_make_trusted, folder)
    async with _process(options) as plant:
        ready = await plant.answer()
        yield Rehearsal(plant, load(bundled_path(_FILES[link]), _overrides(link, folder, ready)))


@asynccontextmanager
async def _process(options: Sequence[str]) -> AsyncIterator[SoftPlant]:
    process = await asyncio.create_subprocess_exec(
        sys.executable, "-m", "simulator", RIG, *options, "--until-eof",
        stdin=asyncio.subprocess.PIPE, stdout=asyncio.subprocess.PIPE, start_new_session=True,
    )  # fmt: skip
    try:
        yield SoftPlant(process)
    finally:
        if process.returncode is None:
            process.terminate()
        await process.wait()


def _make_trusted(folder: Path) -> tuple[str, ...]:
    """Our certificate among the plant's trusted ones and a password that both know; the plant's options."""
    from autotune.field.opc_ua.certificates import own_certificate  # loads asyncua, which Modbus does without

    own = own_certificate(folder / "pki")
    plants_pki = folder / "soft-plant"
    (plants_pki / "trusted").mkdir(parents=True)
    shutil.copy(own.path, plants_pki / "trusted")
    password = secrets.token_urlsafe(16)
    _write_secret(_password_file(folder), f"{password}\n")
    _write_secret(folder / "soft-plant-users.txt", f"{_USER}:{password}:operate\n")
    users = str(folder / "soft-plant-users.txt")
    return "--opc-ua", "0", "--opc-ua-pki", str(plants_pki), "--opc-ua-users", users, "--opc-ua-anonymous", "none"


def _overrides(link: Link, folder: Path, ready: dict[str, Any]) -> dict[str, Override]:
    if link is Link.MODBUS:
        return {"controller.skid.port": int(ready["modbus_port"]), "data_dir": str(folder)}
    return {
        "controller.skid.url": str(ready["opc_ua_url"]),
        "controller.skid.server_thumbprint": str(ready["opc_ua_thumbprint"]),
        "controller.skid.server_name": socket.gethostname(),
        "controller.skid.user": _USER,
        "controller.skid.password_from": f"file:{_password_file(folder)}",
        "data_dir": str(folder),
    }


def _password_file(folder: Path) -> Path:
    return folder / "soft-plant-password.txt"


def _write_secret(path: Path, text: str) -> None:
    opened = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    with os.fdopen(opened, "w", encoding="utf-8") as file:
        file.write(text)
