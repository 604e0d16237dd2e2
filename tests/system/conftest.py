"""One run of all scenarios for the tests of this folder."""

import pytest

from tests.system.together import Scenario, Together, run_together

_LONGEST_FIRST = ("test_whole_job", "test_at_the_terminal", "test_own_death")


@pytest.fixture(scope="session")
def together(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Together:
    """The scenarios of the selected tests: the one that a test's ``name`` names, or else all of its module."""
    wanted: dict[tuple[str, str], Scenario[object]] = {}
    for item in request.session.items:
        module = getattr(item, "module", None)
        scenarios = getattr(module, "SCENARIOS", {})
        name = str(item.callspec.params.get("name")) if hasattr(item, "callspec") else ""
        for chosen in [name] if name in scenarios else scenarios:
            wanted[item.path.stem, chosen] = scenarios[chosen]
    ordered = sorted(wanted, key=lambda key: key[0] not in _LONGEST_FIRST)
    return run_together({key: wanted[key] for key in ordered}, tmp_path_factory.mktemp("together"))
