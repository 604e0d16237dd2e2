"""Independent scenarios side by side, since most of their time is waiting for a plant.

A module names its own in ``SCENARIOS``.  Those that the selected tests need are run together, before the first of
these tests; each test then looks at how its scenario ended.
"""

import asyncio
from collections.abc import Awaitable, Callable, Mapping
from pathlib import Path
from typing import Any, Generic, TypeVar

T = TypeVar("T")
Scenario = Callable[[Path], Awaitable[T]]
"""What happens, given an empty folder of its own."""

AT_ONCE = 14


class Outcomes(Generic[T]):
    """How each scenario of a module ended, by its name."""

    def __init__(self, ended: Mapping[str, T | BaseException]) -> None:
        self._ended = ended

    def of(self, name: str) -> T:
        """What a scenario brought; raises what it raised."""
        outcome = self._ended[name]
        if isinstance(outcome, BaseException):
            raise outcome
        return outcome


class Together:
    """All scenarios that were run."""

    def __init__(self, ended: Mapping[tuple[str, str], Any]) -> None:
        self._ended = ended

    def of(self, module: str, scenarios: Mapping[str, Scenario[T]]) -> Outcomes[T]:
        """Those of one module."""
        return Outcomes({name: self._ended[module, name] for name in scenarios if (module, name) in self._ended})


def run_together(scenarios: Mapping[tuple[str, str], Scenario[Any]], folder: Path) -> Together:
    """Run the scenarios, by module and name, ``AT_ONCE`` of them at a time and in the order given."""
    return Together(asyncio.run(_run(scenarios, folder)))


async def _run(scenarios: Mapping[tuple[str, str], Scenario[Any]], folder: Path) -> dict[tuple[str, str], Any]:
    room = asyncio.Semaphore(AT_ONCE)

    async def one(number: int, scenario: Scenario[Any]) -> Any:
        own = folder / str(number)
        own.mkdir()
        async with room:
            return await scenario(own)

    ended = await asyncio.gather(
        *(one(number, scenario) for number, scenario in enumerate(scenarios.values())), return_exceptions=True
    )
    return dict(zip(scenarios, ended, strict=True))
