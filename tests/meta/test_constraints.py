"""Every library that the project names has a tested version."""

import re
import tomllib

from tests.meta.source import ROOT, text_of


def test_every_named_library_is_pinned_to_one_version() -> None:
    project = tomllib.loads(text_of(ROOT / "pyproject.toml"))["project"]
    named = [*project["dependencies"], *project["optional-dependencies"]["test"]]
    pinned = re.findall(r"^([\w.-]+)==\S+$", text_of(ROOT / "constraints.txt"), re.MULTILINE)
    missing = {_plain(re.split(r"[<>=!~\[; ]", line)[0]) for line in named} - {_plain(name) for name in pinned}
    assert named
    assert not missing, missing


def _plain(name: str) -> str:
    return re.sub(r"[-_.]+", "-", name).lower()
