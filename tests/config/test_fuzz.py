"""Whatever a file holds, the answer is a configuration or complaints: never another exception."""

import copy
import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from autotune.config.bundled import bundled_path
from autotune.config.load import load
from autotune.config.test_plan import plan_for
from autotune.config.types import Configuration
from autotune.errors import ConfigError
from tests.config.toml_text import to_toml

EXAMPLES = ("example-modbus.toml", "example-opc-ua.toml")
NAMES = (*EXAMPLES, "site-limits.toml")
DOCUMENTS: dict[str, dict[str, Any]] = {name: tomllib.loads(bundled_path(name).read_text("utf-8")) for name in NAMES}

TEXTS = st.text(st.characters(exclude_categories=["Cs"]), max_size=12)
NUMBERS = st.one_of(
    st.integers(-3, 70_000),
    st.sampled_from([10**40, -(2**63), 40_001, 65_535, 65_536]),
    st.floats(),
    st.sampled_from([0.0, -0.0, 1e-300, 1e300, 0.1]),
)
CONTENTS = st.recursive(
    st.one_of(
        st.booleans(),
        NUMBERS,
        TEXTS,
        st.sampled_from(["from 0", "never", "REAL", "coil", "TIC-204", "plc1", "opc-ua", "ns=2;s=x", "/2:a"]),
    ),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3),
        st.dictionaries(st.one_of(TEXTS, st.sampled_from(["name", "low", "address"])), inner, max_size=3),
    ),
    max_leaves=5,
)


def places(content: Any, way: tuple[str | int, ...] = ()) -> list[tuple[str | int, ...]]:
    """The way to every key and list entry of a document."""
    parts = content.items() if isinstance(content, dict) else enumerate(content) if isinstance(content, list) else ()
    return [found for key, part in parts for found in [(*way, key), *places(part, (*way, key))]]


PLACES = [(name, way) for name in NAMES for way in places(DOCUMENTS[name])]


@st.composite
def changes(draw: st.DrawFn) -> list[tuple[str, tuple[str | int, ...], str, Any]]:
    """One to four keys replaced, taken out, renamed or added to."""
    kinds = st.sampled_from(["replace", "take out", "rename", "add"])
    picked = draw(st.lists(st.tuples(st.sampled_from(PLACES), kinds), min_size=1, max_size=4))
    return [(name, way, kind, draw(CONTENTS)) for (name, way), kind in picked]


def change(document: Any, way: tuple[str | int, ...], kind: str, content: Any) -> None:
    for part in way[:-1]:
        try:
            document = document[part]
        except (KeyError, IndexError, TypeError):
            return  # an earlier change took it away
    last = way[-1]
    if isinstance(document, list) and isinstance(last, int) and last < len(document):
        document[last] = content
    elif isinstance(document, dict) and isinstance(last, str):
        if kind in ("take out", "rename"):
            content = document.pop(last, content)
        if kind == "replace":
            document[last] = content
        elif kind in ("rename", "add"):
            document[f"{last}x"] = content


def answer(path: Path) -> Configuration | ConfigError:
    """The configuration or the complaints; anything else that is raised fails the test."""
    try:
        return load(path)
    except ConfigError as error:
        return error


def judge(result: Configuration | ConfigError) -> None:
    """A configuration can be used; complaints are lines of four parts."""
    if isinstance(result, ConfigError):
        assert result.complaints
        for complaint in result.complaints:
            parts = (complaint.file, complaint.key, complaint.fault, complaint.remedy)
            assert all(parts), complaint
            assert all(letter.isprintable() for letter in str(complaint)), complaint
    else:
        assert all(plan_for(loop, 1).loop == loop.name for loop in result.loops)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("fuzz")


@given(changes())
@settings(suppress_health_check=[HealthCheck.too_slow])
def test_a_changed_document_gives_a_configuration_or_complaints(
    folder: Path, made: list[tuple[str, tuple[str | int, ...], str, Any]]
) -> None:
    documents = copy.deepcopy(DOCUMENTS)
    for name, way, kind, content in made:
        change(documents[name], way, kind, content)
    for name, document in documents.items():
        (folder / name).write_text(to_toml(document), "utf-8")
    for name in EXAMPLES:
        judge(answer(folder / name))


@given(st.binary(max_size=200))
def test_any_bytes_give_complaints(folder: Path, content: bytes) -> None:
    path = folder / "bytes.toml"
    path.write_bytes(content)
    result = answer(path)
    assert isinstance(result, ConfigError)
    judge(result)


@given(st.sampled_from(EXAMPLES), st.integers(0, 30_000), st.binary(max_size=3), st.integers(0, 3))
def test_damaged_bytes_give_a_configuration_or_complaints(
    folder: Path, name: str, at: int, put: bytes, taken: int
) -> None:
    content = bundled_path(name).read_bytes()
    (folder / NAMES[-1]).write_bytes(bundled_path(NAMES[-1]).read_bytes())
    at %= len(content)
    path = folder / name
    path.write_bytes(content[:at] + put + content[at + taken :])
    judge(answer(path))


def test_an_unchanged_document_is_still_right(folder: Path) -> None:
    for name, document in DOCUMENTS.items():
        (folder / name).write_text(to_toml(document), "utf-8")
    assert all(isinstance(answer(folder / name), Configuration) for name in EXAMPLES)
