"""Digests over what a configuration means, whatever its comments, spaces, order of keys or split into files."""

import hashlib
import json
from dataclasses import fields, is_dataclass
from enum import Enum
from typing import Any

from autotune.config.types import Controller, LoopConfig
from autotune.loop.settings import BlockDescription

_NOT_COVERED = ("digest", "block_digest", "folder", "pki_dir")


def canonical_text(content: object) -> str:
    """The canonical JSON of frozen types, as a digest covers it; neither digests nor places on the disk count."""
    return json.dumps(_canonical(content), sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


def digest_of(content: object) -> str:
    """Hex SHA-256 of ``canonical_text``."""
    return hashlib.sha256(canonical_text(content).encode()).hexdigest()


def block_digest(block: BlockDescription) -> str:
    """Binds a write of settings to the description that it was made for."""
    return digest_of(block)


def loop_digest(loop: LoopConfig) -> str:
    """Binds records to all that was told about the loop, its controller and the site's ceilings included."""
    return digest_of(loop)


def configuration_digest(
    loops: tuple[LoopConfig, ...], controllers: tuple[Controller, ...], concurrent_tests_at_most: int
) -> str:
    """The whole configuration; the order of its loops and the place of its files don't count."""
    by_name = {loop.name: loop for loop in loops}, {controller.name: controller for controller in controllers}
    return digest_of({"loops": by_name[0], "controllers": by_name[1], "tests": concurrent_tests_at_most})


def _canonical(content: object) -> Any:
    if is_dataclass(content) and not isinstance(content, type):
        told = {
            one.name: _canonical(getattr(content, one.name)) for one in fields(content) if one.name not in _NOT_COVERED
        }
        return {"kind": type(content).__name__, **told}
    if isinstance(content, Enum):
        return content.value
    if isinstance(content, dict):
        return {key: _canonical(part) for key, part in content.items()}
    if isinstance(content, tuple):
        return [_canonical(part) for part in content]
    return content
