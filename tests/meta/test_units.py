"""Every number of the pure rooms says its unit in its name."""

import ast
from fnmatch import fnmatchcase

import pytest

from tests.meta.source import PURE_ROOMS, modules, name_of, tree_of
from tests.meta.units import numbers_without_unit

EXCEPTIONS = {
    "autotune/loop/block_units.py *": "in the settings field's own unit, which the block's description tells",
    "autotune/loop/pid_block.py step -> float": "the second of the pair is OP in percent, as the docstring says",
    "autotune/loop/outcome.py Interval.*": "in the unit of the field that holds the interval",
    "autotune/loop/settings.py FieldRange.*": "in the settings field's own unit, which the block's description tells",
    "autotune/loop/settings.py BlockFields.*": "in the settings field's own unit, which the block's description tells",
    "autotune/loop/settings.py BlockDescription.*_off": "in the settings field's own unit",
    "autotune/confirmed_write/plan.py FieldLimit.*": "in the settings field's own unit",
    "autotune/confirmed_write/reasons.py not_held(*)": "numbers of a settings field, in the field's own unit",
    "autotune/experiment/trace.py Trace.recent": "pairs of t_s and pv_pct",
    "autotune/identify/fourier.py joined_mean -> float": "in the unit of the samples that it is given",
    "autotune/identify/shapes.py response(x)": "a frequency over another, as the docstring says",
    "autotune/identify/model.py ProcessModel.*ator": "coefficients of powers of s, as the docstring says",
    "autotune/identify/model.py ModelWithDraws.weights": "each a weight; the name is the plural",
    "autotune/identify/closed_forms.py ultimate_of* -> float": "ultimate gain and period, as the docstrings say",
    "autotune/identify/closed_forms.py first_crossing -> float": "rad/s, as the docstring says",
    "autotune/identify/closed_forms.py Rational.*": "its unit is in the docstring; w is written as in the formulas",
    "autotune/identify/describing_function.py * -> float": "a describing function is a gain, as the docstrings say",
    "autotune/identify/refusals.py samples_per_cycle -> float": "a count; its name says of what to what",
    "autotune/identify/output_error.py *misfit*": "a sum of squares of percents",
    "autotune/identify/output_error.py Fit.bic -> float": "an information criterion",
    "autotune/experiment/plan.py RelayPlan.hysteresis_per_noise": "a ratio; its name says of what to what",
}


def _found() -> list[str]:
    return [
        f"{name_of(path)} {place}" for path in modules(*PURE_ROOMS) for place in numbers_without_unit(tree_of(path))
    ]


def test_every_number_of_the_pure_rooms_carries_its_unit_or_a_written_reason() -> None:
    bare = [place for place in _found() if not any(fnmatchcase(place, pattern) for pattern in EXCEPTIONS)]
    assert not bare, "add a unit to the name, or a reason to EXCEPTIONS:\n" + "\n".join(bare)


def test_every_exception_still_excuses_something() -> None:
    found = _found()
    idle = [pattern for pattern in EXCEPTIONS if not any(fnmatchcase(place, pattern) for place in found)]
    assert not idle, idle


@pytest.mark.parametrize(
    ("source", "places"),
    [
        ("class A:\n    period: float", ["A.period"]),
        ("class A:\n    period_s: float\n    count: int\n    name: str", []),
        ("class A:\n    swings: tuple[float, ...]", ["A.swings"]),
        ("class A:\n    point: Interval | None = None", ["A.point"]),
        ("class A:\n    def width(self) -> 'float | None': ...", ["A.width -> float"]),
        ("def wait(delay: float, *, limit_s: float) -> None: ...", ["wait(delay)"]),
        ("def peak_sensitivity(frequency_rad_per_s: float) -> float: ...", []),
        ("def noise_pct_at_most(swings_pct_low: list[float]) -> float: ...", []),
        ("def _kernel(x: float) -> float: ...", []),
    ],
)
def test_the_look_for_units_sees_what_it_should(source: str, places: list[str]) -> None:
    assert list(numbers_without_unit(ast.parse(source))) == places
