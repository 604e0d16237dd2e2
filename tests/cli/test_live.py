"""The picture of a running test, in every phase, at the widths of a terminal, and in plain lines."""

import io
from dataclasses import replace

import pytest
from rich.cells import cell_len
from rich.console import Console

from autotune.cli.live import plain_line, screen
from autotune.experiment.phases import Phase
from autotune.experiment.picture import picture
from autotune.experiment.state import Experiment, Stage
from autotune.loop.sample import Sample
from tests.cli.bench import STYLES
from tests.fakes.plant import WITH_GUARD, WITHOUT_GUARD
from tests.service.bench import begin, run


@pytest.fixture(scope="module")
def moments() -> dict[Stage, tuple[Experiment, tuple[Sample, ...]]]:
    """The last moment of each stage of a whole test, with the readings so far."""
    seen: dict[Stage, tuple[Experiment, tuple[Sample, ...]]] = {}
    ran = begin(WITH_GUARD)

    def on_pass(_number: int) -> None:
        seen[ran.experiment.stage] = (ran.experiment, ran.runner.log.samples)

    run(ran, on_pass=on_pass)
    assert set(seen) == set(Stage)
    return seen


def drawn(experiment: Experiment, samples: tuple[Sample, ...], width: int) -> list[str]:
    buffer = io.StringIO()
    console = Console(file=buffer, width=width, height=60, force_terminal=True, color_system=None, highlight=False)
    console.push_theme(STYLES)
    console.print(screen(WITH_GUARD, picture(experiment), samples, width))
    return buffer.getvalue().splitlines()


@pytest.mark.parametrize("width", [40, 80, 110, 200])
@pytest.mark.parametrize("stage", list(Stage))
def test_every_stage_is_drawn_within_the_width(
    stage: Stage, width: int, moments: dict[Stage, tuple[Experiment, tuple[Sample, ...]]]
) -> None:
    experiment, samples = moments[stage]
    lines = drawn(experiment, samples, width)
    text = "\n".join(lines)
    assert max(cell_len(line) for line in lines) <= width
    if width >= 80:
        assert experiment.phase.value in text
        assert stage.value in text
        assert "Ctrl-C" in text
    if stage is Stage.CYCLING:
        assert any(0x2800 < ord(cell) <= 0x28FF for cell in text)
    if stage is Stage.WAITING:
        assert "waiting for readings" in text


@pytest.mark.parametrize("phase", list(Phase))
def test_every_phase_has_its_word_on_the_screen(
    phase: Phase, moments: dict[Stage, tuple[Experiment, tuple[Sample, ...]]]
) -> None:
    experiment, samples = moments[Stage.OVER]
    assert any(phase.value in line for line in drawn(replace(experiment, phase=phase), samples, 80))


def test_readings_without_numbers_are_left_out_of_the_trend(
    moments: dict[Stage, tuple[Experiment, tuple[Sample, ...]]],
) -> None:
    experiment, samples = moments[Stage.CYCLING]
    holes = tuple(replace(one, pv_pct=None, op_pct=None) for one in samples)
    assert not any(0x2800 < ord(cell) <= 0x28FF for line in drawn(experiment, holes, 80) for cell in line)


def test_a_plain_line_tells_time_phase_readings_and_the_last_cycle(
    moments: dict[Stage, tuple[Experiment, tuple[Sample, ...]]],
) -> None:
    experiment, _ = moments[Stage.CYCLING]
    line = plain_line(WITH_GUARD, picture(experiment))
    assert "TESTING" in line
    assert "relay cycles" in line
    assert "degC" in line
    assert "rough ultimate gain" in line
    bare = plain_line(WITHOUT_GUARD, picture(begin(WITHOUT_GUARD).experiment))
    assert "PV unknown  OP unknown" in bare
