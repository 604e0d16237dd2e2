"""The bench: the fast loop's configuration with a mistake or a wish planted in it, and a workplace to use it."""

from collections.abc import Sequence
from pathlib import Path

from autotune.config.load import load
from autotune.config.types import LoopConfig
from autotune.design.proposal import ProposalSheet
from autotune.identify.findings import FindingsOrRefusal
from autotune.loop.outcome import Refusal
from autotune.loop.record import Record
from autotune.service.clock import utc_now
from autotune.service.estimator import Estimator
from autotune.service.persons import person_at_the_terminal
from autotune.service.proposing import DesignTask, proposals_for
from autotune.service.testing import Permission
from autotune.service.workplace import Workplace, open_workplace
from simulator.rig import find_rig
from tests.system.plant import LOOP

RIG = "fast-loop"
BENCH = Path(__file__).with_name("bench.toml")

Change = tuple[str, str]
"""A text of the bench's file that stands there once, and what takes its place."""

WITHOUT_CLOCK_TAGS: Sequence[Change] = (
    ('plc_clock_ms = { address = 8, type = "UDINT" }\n', ""),
    ('op_effect_ms = { address = 16, type = "UDINT" }\n', ""),
)
WITHOUT_GUARD: Sequence[Change] = (
    ("[loop.guard]\ntimeout_s = 1.0\n", ""),
    ('write_settings = "in manual"\n', 'write_settings = "in manual"\nwithout_guard = "with consent"\n'),
    *(
        (f'{name} = {{ address = {address}, type = "{kind}" }}\n', "")
        for name, address, kind in (
            ("heartbeat_echo", 11, "UINT"),
            ("guard_state", 12, "UINT"),
            ("guard_alarm", 13, "UINT"),
            ("holder", 14, "UDINT"),
            ("op_effect_ms", 16, "UDINT"),
            ("op_effect_count", 18, "UDINT"),
            ("guard_timeout_s", 20, "REAL"),
            ("enable", 22, "UINT"),
            ("stop", 23, "UINT"),
            ("test_active", 24, "UINT"),
            ("holder_request", 30, "UDINT"),
            ("heartbeat", 32, "UINT"),
            ("sequence", 33, "UINT"),
            ("op_request", 34, "REAL"),
        )
    ),
)


class NotMeasured:
    """Identifies nothing: for tests that are about the loop and not about its findings.

    Identification in this process would hold up the scans of every test beside this one.
    """

    async def measure(self, record: Record) -> FindingsOrRefusal:
        """No findings, with the reason."""
        return Refusal(
            "NOT_MEASURED", f"{len(record.samples)} samples were not to be identified", "choose another estimator"
        )

    async def propose(self, task: DesignTask) -> ProposalSheet:
        """As the product does, in this process."""
        return proposals_for(task)


def write_bench(folder: Path, port: int, changes: Sequence[Change] = ()) -> Path:
    """The bench's configuration in ``folder``, for the plant at ``port``."""
    text = BENCH.read_text("utf-8")
    for old, new in (("port = 50502", f"port = {port}"), *changes):
        assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times in {BENCH.name}"
        text = text.replace(old, new)
    folder.mkdir(parents=True, exist_ok=True)
    file = folder / "bench.toml"
    file.write_text(text, "utf-8")
    return file


def rig_with(folder: Path, changes: Sequence[Change]) -> str | Path:
    """The fast loop's rig, or a file in ``folder`` with changes in it."""
    if not changes:
        return RIG
    text = find_rig(RIG).read_text("utf-8")
    for old, new in changes:
        assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times in {RIG}"
        text = text.replace(old, new)
    folder.mkdir(parents=True, exist_ok=True)
    file = folder / "changed-loop.toml"
    file.write_text(text, "utf-8")
    return file


def bench_workplace(
    folder: Path, port: int, changes: Sequence[Change] = (), estimator: Estimator | None = None
) -> tuple[Workplace, LoopConfig]:
    """A workplace in this process; without an ``estimator`` its tests end without findings."""
    kept = open_workplace(load(write_bench(folder, port, changes)), may_create=True)
    workplace = Workplace(kept.configuration, kept.store, estimator=estimator or NotMeasured())
    return workplace, workplace.loop(LOOP)


def permission() -> Permission:
    """Somebody at the bench allows a test."""
    return Permission(person_at_the_terminal("R. Bench"), "bench permit 1", (), utc_now())
