"""What holds for every test: how hard properties are tried, and that no task outlives its test."""

import asyncio
import os
from collections.abc import AsyncIterator

import pytest
from hypothesis import settings

settings.register_profile("dev", max_examples=50, deadline=None)
settings.register_profile("ci", max_examples=150, deadline=None, print_blob=True)
settings.load_profile("ci" if os.environ.get("CI") else "dev")


@pytest.fixture
async def tasks_end_with_their_test() -> AsyncIterator[None]:
    """Fail an async test after which a task of its event loop is still at work."""
    yield
    left = asyncio.all_tasks() - {asyncio.current_task()}
    assert not left, f"left behind: {sorted(task.get_name() for task in left)}"


@pytest.fixture(autouse=True)
def async_tests_leave_no_task(request: pytest.FixtureRequest) -> None:
    """Ask for the check first of all fixtures, so that it looks after all others have ended."""
    if request.node.get_closest_marker("asyncio"):
        request.getfixturevalue("tasks_end_with_their_test")
