"""Everything that one test read, wrote and lived through, with its stamps: what the sheet tells."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

from autotune.experiment.commands import Command
from autotune.field.link import RawValue
from autotune.loop.sample import Sample
from autotune.loop.write import WriteReport

StoryKind = Literal["trip", "operator", "phase", "link", "note"]


@dataclass(frozen=True, slots=True)
class WriteBack:
    """A setting written back with the number it holds, to show that it can be written."""

    name: str


@dataclass(frozen=True, slots=True)
class LoggedWrite:
    """One write request: why, what was sent raw, and what became of it."""

    command: Command | WriteBack
    values: Mapping[str, RawValue]
    report: WriteReport


@dataclass(frozen=True, slots=True)
class StoryLine:
    """Something that happened at ``t_s``; ``by`` says who, ``code`` is a trip's."""

    t_s: float
    kind: StoryKind
    text: str
    code: str | None = None
    by: str | None = None


class TestLog:
    """Append-only, in order of time."""

    __test__ = False  # not a test case, whatever a test collector makes of the name

    def __init__(self) -> None:
        self._samples: list[Sample] = []
        self._writes: list[LoggedWrite] = []
        self._story: list[StoryLine] = []

    def add_sample(self, sample: Sample) -> None:
        """Append one reading."""
        self._samples.append(sample)

    def add_write(self, command: Command | WriteBack, values: Mapping[str, RawValue], report: WriteReport) -> None:
        """Append one write request."""
        self._writes.append(LoggedWrite(command, dict(values), report))

    def add_story(
        self, t_s: float, kind: StoryKind, text: str, *, code: str | None = None, by: str | None = None
    ) -> None:
        """Append something that happened."""
        self._story.append(StoryLine(t_s, kind, text, code, by))

    def since(self, sample: int, write: int) -> tuple[tuple[Sample, ...], tuple[LoggedWrite, ...]]:
        """The readings and write requests from these numbers on, for who has told the earlier ones."""
        return tuple(self._samples[sample:]), tuple(self._writes[write:])

    @property
    def samples(self) -> tuple[Sample, ...]:
        """All readings."""
        return tuple(self._samples)

    @property
    def writes(self) -> tuple[LoggedWrite, ...]:
        """All write requests."""
        return tuple(self._writes)

    @property
    def story(self) -> tuple[StoryLine, ...]:
        """All that happened."""
        return tuple(self._story)
