"""What tests/conftest.py promises, shown on small suites that pytest runs in a process of its own."""

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]

LEAVES_A_TASK = """
import asyncio

KEPT = []

async def test_that_leaves_a_task():
    KEPT.append(asyncio.create_task(asyncio.sleep(60), name="forgotten"))
"""

LEAVES_A_TASK_IN_A_FIXTURE = """
import asyncio
import pytest

@pytest.fixture
async def plant():
    return asyncio.create_task(asyncio.sleep(60), name="forgotten")

async def test_whose_fixture_leaves_a_task(plant):
    assert not plant.done()
"""

LEAVES_NOTHING = """
import asyncio
import pytest
from hypothesis import given, strategies

@pytest.fixture
async def plant():
    task = asyncio.create_task(asyncio.sleep(60))
    yield task
    task.cancel()
    await asyncio.wait([task])

async def test_whose_fixture_ends_its_task(plant):
    assert not plant.done()

@given(strategies.integers())
async def test_of_an_async_property(number):
    assert await asyncio.sleep(0, number) == number

def test_without_a_loop():
    with pytest.raises(RuntimeError):
        asyncio.get_running_loop()
"""


def _run(folder: Path, suite: str) -> str:
    (folder / "pyproject.toml").write_text((ROOT / "pyproject.toml").read_text())
    (folder / "tests").mkdir()
    (folder / "tests" / "conftest.py").write_text((ROOT / "tests" / "conftest.py").read_text())
    (folder / "tests" / "test_small.py").write_text(suite)
    run = subprocess.run(
        [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider"],
        check=False,
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=120,
    )
    return run.stdout


@pytest.mark.parametrize("suite", [LEAVES_A_TASK, LEAVES_A_TASK_IN_A_FIXTURE], ids=["test", "fixture"])
def test_a_task_that_outlives_its_test_is_an_error(tmp_path: Path, suite: str) -> None:
    report = _run(tmp_path, suite)
    assert "left behind: ['forgotten']" in report
    assert "1 passed, 1 error" in report


def test_a_suite_that_ends_its_tasks_passes(tmp_path: Path) -> None:
    assert "3 passed" in _run(tmp_path, LEAVES_NOTHING)
