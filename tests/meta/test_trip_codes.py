"""Every reason to stop is made to happen by a test of the experiment."""

import re

from autotune.experiment.interlocks import TripCode
from tests.meta.source import modules, text_of


def test_every_trip_code_is_upper_case() -> None:
    assert [code.name for code in TripCode if not re.fullmatch(r"[A-Z]+(_[A-Z]+)*", code.name)] == []


def test_every_trip_code_is_named_by_a_test_of_the_experiment() -> None:
    source = "\n".join(text_of(path) for path in modules("tests/experiment"))
    unnamed = [code.name for code in TripCode if not re.search(rf"\bTripCode\.{code.name}\b|\"{code.name}\"", source)]
    assert not unnamed, unnamed
