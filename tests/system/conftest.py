"""One run of all scenarios for the tests of this folder."""

import pytest

from tests.system.together import Scenario, Together, run_together


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
    return run_together(wanted, tmp_path_factory.mktemp("together"))
