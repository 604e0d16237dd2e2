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

QUIET_MODULES = ("test_findings_over_the_wire",)
"""Those whose figures need a machine that keeps its scans: they run first, and alone."""

MODULES_OF_COMMANDS = ("test_whole_job", "test_at_the_terminal", "test_own_death", "test_commands")
"""Those that start the command line as a process, the longest first."""

AT_ONCE = {"commands": 4, "tests in this process": 5}
"""How many of a kind run at a time: a command costs a second of computing before it begins."""


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
    """Run the scenarios, by module and name: first the quiet ones, then no more of a kind at a time than is good."""
    quiet = {key: scenario for key, scenario in scenarios.items() if key[0] in QUIET_MODULES}
    first = {module: place for place, module in enumerate(MODULES_OF_COMMANDS)}
    others = sorted((key for key in scenarios if key not in quiet), key=lambda key: first.get(key[0], len(first)))
    ended = asyncio.run(_run(quiet, folder / "quiet"))
    ended |= asyncio.run(_run({key: scenarios[key] for key in others}, folder / "others"))
    return Together(ended)


async def _run(scenarios: Mapping[tuple[str, str], Scenario[Any]], folder: Path) -> dict[tuple[str, str], Any]:
    rooms = {kind: asyncio.Semaphore(places) for kind, places in AT_ONCE.items()}

    async def one(number: int, module: str, scenario: Scenario[Any]) -> Any:
        own = folder / str(number)
        own.mkdir(parents=True)
        async with rooms["commands" if module in MODULES_OF_COMMANDS else "tests in this process"]:
            return await scenario(own)

    ended = await asyncio.gather(
        *(one(number, key[0], scenario) for number, (key, scenario) in enumerate(scenarios.items())),
        return_exceptions=True,
    )
    return dict(zip(scenarios, ended, strict=True))
