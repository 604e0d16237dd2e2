"""Check values from outside, by their id; each names its source in ``tests/reference/checks.json``."""

import json
from pathlib import Path
from typing import Any

CHECKS: dict[str, dict[str, Any]] = {
    check["id"]: check
    for check in json.loads((Path(__file__).parents[1] / "reference" / "checks.json").read_text(encoding="utf-8"))
}
