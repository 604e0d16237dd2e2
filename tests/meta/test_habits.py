"""Tests use fakes that are verified, never sleep, can fail, and say why they skip."""

import ast

import pytest

from tests.meta.habits import faults
from tests.meta.source import modules, name_of, tree_of


def test_no_test_breaks_the_habits() -> None:
    paths = modules("tests")
    assert paths
    found = [f"{name_of(path)}:{line}: {fault}" for path in paths for line, fault in faults(tree_of(path))]
    assert not found, "\n".join(found)


@pytest.mark.parametrize(
    "source",
    [
        "from unittest import mock",
        "from unittest.mock import Mock",
        "import unittest.mock",
        "def test_it(mocker): mocker.patch('x')",
        "def test_it(monkeypatch): monkeypatch.setattr(room, 'clock', None)",
        "import time\ntime.sleep(1)",
        "from time import sleep",
        "assert True",
        "assert 'it works'",
        "assert (found == 1, 'a tuple')",
        "assert found == found",
        "assert found == 2 or True",
        "def test_it():\n    '''Some day.'''",
        "def test_it(): ...",
        "@pytest.mark.skip\ndef test_it(): assert f()",
        "@pytest.mark.xfail(strict=True)\ndef test_it(): assert f()",
        "@pytest.mark.skipif(True, reason='')\ndef test_it(): assert f()",
        "pytest.skip()",
    ],
)
def test_each_bad_habit_is_seen(source: str) -> None:
    assert len(faults(ast.parse(source))) == 1


@pytest.mark.parametrize(
    "source",
    [
        "def test_it(monkeypatch): monkeypatch.setenv('CI', '1'); assert f()",
        "import time\nassert time.perf_counter() > 0",
        "assert found == wanted, 'a message'",
        "@pytest.mark.skipif(sys.platform == 'win32', reason='no signals there')\ndef test_it(): assert f()",
        "pytest.skip('no second network address on this machine')",
    ],
)
def test_a_good_habit_is_left_alone(source: str) -> None:
    assert faults(ast.parse(source)) == []
