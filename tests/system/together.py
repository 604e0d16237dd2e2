"""Independent scenarios side by side, since most of their time is waiting for a plant."""

import asyncio
from collections.abc import Awaitable, Callable, Mapping
from typing import TypeVar

import pytest

T = TypeVar("T")
Scenario = Callable[[], Awaitable[T]]

AT_ONCE = 12


class Outcomes(dict[str, T | BaseException]):
    """How each scenario ended, by its name."""

    def of(self, name: str) -> T:
        """What a scenario brought; raises what it raised."""
        outcome = self[name]
        if isinstance(outcome, BaseException):
            raise outcome
        return outcome


def run_together(
    request: pytest.FixtureRequest, scenarios: Mapping[str, Scenario[T]], at_once: int = AT_ONCE
) -> Outcomes[T]:
    """Run the scenarios that the selected tests of this module name in brackets, ``at_once`` of them at a time."""
    names = {
        name for item in request.session.items if item.path == request.path for name in scenarios if name in item.name
    }
    return asyncio.run(_run({name: scenarios[name] for name in scenarios if name in names}, at_once))


async def _run(scenarios: Mapping[str, Scenario[T]], at_once: int) -> Outcomes[T]:
    room = asyncio.Semaphore(at_once)

    async def one(scenario: Scenario[T]) -> T:
        async with room:
            return await scenario()

    ended = await asyncio.gather(*(one(scenario) for scenario in scenarios.values()), return_exceptions=True)
    return Outcomes(zip(scenarios, ended, strict=True))
