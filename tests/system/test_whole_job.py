"""The whole job, as the first command of the README does it: one process, one soft plant, one JSON object."""

from dataclasses import dataclass
from pathlib import Path

import pytest

from autotune.sheet.sqlite_store import SqliteStore
from autotune.sheet.store import StoredSheet
from tests.system.command import Ran, run
from tests.system.together import Outcomes, Scenario, Together
from tests.system.true_plant import is_near, true_plant

pytestmark = pytest.mark.socket

LOOP = "TIC-204"
TRUE = true_plant("juice-skid", LOOP)


@dataclass(frozen=True, slots=True)
class Job:
    ran: Ran
    stored: StoredSheet
    damages: int


async def rehearsed(folder: Path) -> Job:
    kept = folder / "records"
    ran = await run("rehearse", "--scripted-operator", "--json", "--keep", kept, patience_s=300.0)
    store = SqliteStore(kept / "sheets.sqlite")
    return Job(ran, store.get(ran.answer["sheet"]), len(store.verify()))


SCENARIOS: dict[str, Scenario[Job]] = {"rehearsal": rehearsed}


@pytest.fixture(scope="module")
def job(together: Together) -> Job:
    outcomes: Outcomes[Job] = together.of(Path(__file__).stem, SCENARIOS)
    return outcomes.of("rehearsal")


def test_it_ends_with_zero_and_one_object_that_tells_it_all(job: Job) -> None:
    assert job.ran.code == 0
    assert job.ran.answer.keys() >= {"as_found", "as_left", "test", "proposal", "write", "loop_after", "sheet"}


def test_the_loop_is_found_and_left_in_automatic_at_its_setpoint(job: Job) -> None:
    found, left = job.ran.answer["as_found"], job.ran.answer["as_left"]
    assert (found["mode"], left["mode"]) == ("AUTO", "AUTO")
    assert found["sp_pct"] == left["sp_pct"]
    assert found["settings"] == pytest.approx({"gain": 0.8, "integral": 9.0, "derivative": 0.0})
    assert left["settings"] != found["settings"]


def test_the_intervals_reach_the_plants_true_ultimate_point(job: Job) -> None:
    told = job.ran.answer["test"]
    ultimate_gain, ultimate_period_s = TRUE.ultimate
    assert told["outcome"] == "COMPLETE"
    assert is_near(told["ultimate_gain_low"], told["ultimate_gain_high"], ultimate_gain)
    assert is_near(told["ultimate_period_low_s"], told["ultimate_period_high_s"], ultimate_period_s)
    assert told["ultimate_gain_low"] <= told["ultimate_gain"] <= told["ultimate_gain_high"]
    assert told["ultimate_gain_high"] < 2.0 * told["ultimate_gain_low"]


def test_what_was_confirmed_is_written_and_read_back_and_the_loop_is_steady(job: Job) -> None:
    assert job.ran.answer["write"]["outcome"] == "WRITTEN"
    assert job.ran.answer["write"]["read_back_equal"] is True
    after = job.ran.answer["loop_after"]
    assert (after["mode"], after["steady"]) == ("AUTO", True)


def test_the_sheet_is_kept_with_the_change_and_the_archive_verifies(job: Job) -> None:
    assert job.damages == 0
    sheet = job.stored.sheet
    assert (sheet.loop, sheet.outcome.ended) == (LOOP, "COMPLETE")
    assert [one.kind for one in job.stored.addenda] == ["write"]
    proposal = next(one for one in sheet.proposals if one.is_recommended)
    assert proposal.name == job.ran.answer["proposal"]
    written = [quantity.amount for quantity in proposal.settings]
    assert list(job.ran.answer["as_left"]["settings"].values()) == pytest.approx(written, rel=1e-6)


def test_the_settings_were_first_shown_to_be_writable(job: Job) -> None:
    proof = [(line.tag, line.outcome) for line in job.stored.sheet.writes if line.why == "WriteBack"]
    assert proof == [("gain", "APPLIED"), ("integral", "APPLIED"), ("derivative", "APPLIED")]
