"""README and DEVELOPERS say what the code says."""

import re

import pytest

from tests.meta.generated import DOCUMENT, PARTS, with_parts
from tests.meta.source import ROOT, text_of

COMMAND = re.compile(r"<!-- command: (\w+) -->\s*```\w*\n(.*?)\n```", re.DOTALL)


def test_the_generated_parts_of_the_document_are_up_to_date() -> None:
    now = text_of(DOCUMENT)
    assert with_parts(now) == now, "run python -m tests.meta.generated --write"


def test_the_readme_has_the_two_commands_that_the_check_run_takes_from_it() -> None:
    commands = dict(COMMAND.findall(text_of(ROOT / "README.md")))
    assert commands.keys() == {"rehearse", "tests"}
    assert commands["rehearse"].endswith("autotune rehearse")
    assert commands["tests"].endswith("pytest")
    assert all("-c constraints.txt" in command for command in commands.values())


def test_a_stale_part_is_seen_and_its_surroundings_stay() -> None:
    text = "before\n<!-- generated: a -->\nold\n<!-- end -->\nafter <!-- end -->\n"
    assert with_parts(text, {"a": lambda: r"new \1"}) == text.replace("old", r"new \1")


@pytest.mark.parametrize("name", PARTS)
def test_a_part_without_its_markers_is_an_error(name: str) -> None:
    with pytest.raises(LookupError, match=name):
        with_parts("no markers here", {name: PARTS[name]})


@pytest.mark.parametrize("name", PARTS)
def test_a_part_is_drawn_between_its_markers(name: str) -> None:
    empty = f"<!-- generated: {name} -->\n<!-- end -->\n"
    assert len(with_parts(empty, {name: PARTS[name]}).splitlines()) > len(empty.splitlines()) + 10
