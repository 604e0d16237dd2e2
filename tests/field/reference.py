"""Checks from outside, as stored in ``tests/reference/checks.json``."""

import json
from pathlib import Path
from typing import Any

_CHECKS = {
    check["id"]: check
    for check in json.loads((Path(__file__).parents[1] / "reference" / "checks.json").read_text(encoding="utf-8"))
}


def expected(identifier: str) -> Any:
    """What the source of a check expects."""
    return _CHECKS[identifier]["expected"]


def inputs(identifier: str) -> Any:
    """What the source of a check starts from."""
    return _CHECKS[identifier]["inputs"]


def octets(written: str) -> bytes:
    """Octets as standards print them: ``01 0A FF``."""
    return bytes.fromhex(written)
