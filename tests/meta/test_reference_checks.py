"""The backbone of the checks from outside is in use: each is named by a test that draws on it."""

import json
import re

from tests.meta.source import ROOT, modules, name_of, text_of

BACKBONE = (
    *(f"DF-{number:02}" for number in range(1, 9)),
    *(f"RL-{number:02}" for number in range(1, 16)),
    *("CF-3", "CF-4", "CF-5", "CF-6", "CF-8", "CF-I", "CF-D"),
    *("TR-ZNU", "TR-MOD", "TR-TL", "WX-SEB1"),
    *(f"PF-{number:02}" for number in range(1, 11)),
    *(f"ST-MB{number}" for number in range(1, 7)),
    *("ST-FP", "ST-43", "TF-01"),
)


def _named_ids() -> set[str]:
    sources = [text_of(path) for path in modules("tests") if not name_of(path).startswith("tests/meta/")]
    return {identifier for source in sources for identifier in re.findall(r"\b[A-Z]{2}-[A-Z0-9]+\b", source)}


def test_every_check_of_the_backbone_is_among_the_reference_checks() -> None:
    stored = {check["id"] for check in json.loads(text_of(ROOT / "tests/reference/checks.json"))}
    assert set(BACKBONE) <= stored


def test_every_check_of_the_backbone_is_named_by_a_test() -> None:
    unused = sorted(set(BACKBONE) - _named_ids())
    assert not unused, unused
