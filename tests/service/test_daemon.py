"""The daemon over its own sockets, on the soft plant's fast loop."""

import asyncio
import stat
from base64 import b64decode
from collections.abc import Awaitable, Callable, Mapping
from pathlib import Path

import pytest

from autotune.errors import LoopBusy
from autotune.service.testing import SupervisedTest
from tests.service.daemon_bench import NAME, PERMISSION, SECRET, served
from tests.system.bench import bench_workplace
from tests.system.plant import LOOP, as_real, moved

pytestmark = pytest.mark.socket

AT_ONCE = 2


async def a_whole_test_is_started_watched_and_found_in_the_archive(folder: Path) -> None:
    async with served(folder) as at:
        assert (await at.start_test()) == {"answer": {"text": "the test has begun"}}
        cycling = await at.until_live(lambda live: live["test"] and live["test"]["cycles"])
        assert cycling["loop"]["doing"] == "test"
        assert cycling["test"]["hysteresis_eu"] > 0.0
        assert len(cycling["trend"]["t_s"]) == len(cycling["trend"]["pv_eu"])
        ended = await at.until_live(lambda live: live["sheet"])
        assert ended["test"]["phase"] == "COMPLETE", ended["test"]["because"]
        whole = await at.until_live(lambda live: live["trend"])
        assert whole["trend"]["first"] == 0
        assert len(whole["trend"]["t_s"]) > len(cycling["trend"]["t_s"])
        assert len(whole["trend"]["switches"]) > 2 * len(cycling["test"]["cycles"])
        kept = (await at.ask("open_sheet", sheet=ended["sheet"]))["answer"]["sheet"]
        assert kept["outcome"]["ended"] == "COMPLETE"
        assert "P. Owner" in kept["permission"]["text"]
        lines = (await at.ask("list_sheets", loop=LOOP))["answer"]["sheets"]
        assert [line["sheet"] for line in lines] == [ended["sheet"]]
        page = (await at.ask("export_sheet", sheet="last", what="page"))["answer"]
        assert "TEST SHEET" in page["content"]
        paper = (await at.ask("export_sheet", sheet="last", what="pdf"))["answer"]
        assert b64decode(paper["content"]).startswith(b"%PDF-")


async def settings_are_written_by_who_signed_in_and_types_the_digest(folder: Path) -> None:
    async with served(folder) as at:
        await at.start_test()
        sheet = (await at.until_live(lambda live: live["sheet"]))["sheet"]
        kept = (await at.ask("open_sheet", sheet=sheet))["answer"]["sheet"]
        proposal = next(one["name"] for one in kept["proposals"] if one["settings"])
        assert (await at.ask("plan_change", sheet=sheet, proposal=proposal))["refusal"]["code"] == "SIGN_IN"
        session = await at.sign_in()
        before = await at.plant.state()
        plan = (await at.ask_console("plan_change", session=session, sheet=sheet, proposal=proposal))["answer"]
        confirmation = {"session": session, "loop": LOOP, "secret": SECRET}
        mistyped = await at.ask_console("confirm_change", **confirmation, typed="0000-0000")
        assert mistyped["refusal"]["code"] == "DIGEST_WRONG"
        assert not moved(before, await at.plant.state())
        guessed = await at.ask_console("confirm_change", **{**confirmation, "secret": "guessed"}, typed=plan["digest"])
        assert guessed["refusal"]["code"] == "WRONG_SECRET"
        written = (await at.ask_console("confirm_change", **confirmation, typed=plan["digest"]))["answer"]
        assert written["outcome"] == "WRITTEN"
        assert written["read_back_equal"]
        wanted = {line["label"]: line["will_hold"] for line in plan["lines"] if line["is_changed"]}
        assert {one["label"]: one["amount"] for one in written["read_back"]}.items() >= wanted.items()
        back = (await at.ask_console("plan_restore", session=session, sheet=sheet))["answer"]
        again = (await at.ask_console("confirm_change", **confirmation, typed=back["digest"]))["answer"]
        assert again["outcome"] == "WRITTEN"
        after = await at.plant.state()
        assert [as_real(after[name]) for name in ("gain", "integral")] == [
            as_real(before[name]) for name in ("gain", "integral")
        ]
        assert [entry["person"] for entry in (await at.ask("open_sheet", sheet=sheet))["answer"]["addenda"]] == [
            {"name": NAME, "is_authenticated": True}
        ] * 2


async def an_abort_at_a_locked_screen_hands_the_loop_back(folder: Path) -> None:
    async with served(folder) as at:
        session = await at.sign_in()
        before = await at.plant.state()
        await at.start_test()
        await at.until_live(lambda live: live["test"] and live["test"]["phase"] == "TESTING")
        found = at.sessions.find(session)
        assert found is not None
        found.is_locked = True
        assert (await at.ask_console("finish_test", session=session, loop=LOOP))["refusal"]["code"] == "LOCKED"
        assert (await at.ask_console("abort_test", loop=LOOP))["refusal"]["code"] == "SIGN_IN"
        assert "answer" in await at.ask_console("abort_test", session=session, loop=LOOP)
        ended = await at.until_live(lambda live: live["sheet"])
        assert ended["test"]["phase"] == "ABORTED"
        after = await at.plant.state()
        assert (after["mode"], round(after["op"])) == (before["mode"], round(before["op"]))


async def a_stop_hands_the_loop_back_and_keeps_the_sheet(folder: Path) -> None:
    async with served(folder) as at:
        before = await at.plant.state()
        await at.start_test()
        await at.until_live(lambda live: live["test"] and live["test"]["phase"] == "TESTING")
        await at.daemon.stop()
        after = await at.plant.state()
        assert (after["mode"], after["holder"]) == (before["mode"], 0)
        assert (await at.ask("open_sheet", sheet="last"))["answer"]["sheet"]["outcome"]["ended"] == "ABORTED"


async def while_it_serves_nobody_else_on_this_machine_is_master(folder: Path) -> None:
    async with served(folder) as at:
        workplace, loop = bench_workplace(folder, at.plant.port)
        with pytest.raises(LoopBusy, match=r"serves bench\.toml; use its page http"):
            await SupervisedTest(workplace, loop).__aenter__()


async def a_start_without_what_permission_needs_moves_nothing(folder: Path) -> None:
    async with served(folder) as at:
        await at.plant.press(f"enable {LOOP}")
        looked = (await at.ask("look", loop=LOOP))["answer"]
        asked = {"loop": LOOP, "typed_loop": LOOP, "accepted": looked["cautions"], **PERMISSION}
        before = await at.plant.state()
        lacking: list[dict[str, object]] = [{"typed_loop": "TIC-2"}, {"accepted": []}, {"permit": ""}]
        refusals = [(await at.ask("start_test", **{**asked, **other}))["refusal"]["code"] for other in lacking]
        assert refusals == ["NAME_WRONG", "CAUTION_NEW", "NOT_UNDERSTOOD"]
        session = await at.sign_in()
        told = await at.ask_console("start_test", **asked, session=session, secret="guessed")
        assert told["refusal"]["code"] == "WRONG_SECRET"
        assert not moved(before, await at.plant.state())


async def a_daemon_that_only_watches_knows_no_word_that_writes(folder: Path) -> None:
    async with served(folder, is_watch_only=True) as at:
        await at.plant.press(f"enable {LOOP}")
        before = await at.plant.state()
        looked = (await at.ask("look", loop=LOOP))["answer"]
        assert looked["check"]["fit"]
        session = await at.sign_in()
        acts = {
            "start_test": {"typed_loop": LOOP, "accepted": looked["cautions"], "secret": SECRET, **PERMISSION},
            "abort_test": {},
            "confirm_change": {"typed": "0000-0000", "secret": SECRET},
            "drop_plan": {},
        }
        for act, fields in acts.items():
            told = await at.ask_console(act, session=session, loop=LOOP, **fields)
            assert told["refusal"]["code"] == "NOT_UNDERSTOOD", act
        assert at.daemon.tables == {}
        assert not moved(before, await at.plant.state())


async def the_sockets_are_for_their_owner_only(folder: Path) -> None:
    async with served(folder) as at:
        assert {stat.S_IMODE(file.stat().st_mode) for file in (at.local, at.console)} == {0o600}


async def the_rounds_tell_loops_and_controllers(folder: Path) -> None:
    async with served(folder) as at:
        line = (await at.until_live(lambda live: live["loop"]["read_utc"]))["loop"]
        assert line["mode"] == "AUTO"
        assert [one["label"] for one in line["settings"]][:2] == ["GAIN", "TI"]
        controller = (await at.ask("list_controllers"))["answer"]["controllers"][0]
        assert controller["readings"] >= 1
        assert controller["missed"] == 0


STORIES: Mapping[str, Callable[[Path], Awaitable[None]]] = {
    story.__name__.replace("_", " "): story
    for story in (
        a_whole_test_is_started_watched_and_found_in_the_archive,
        settings_are_written_by_who_signed_in_and_types_the_digest,
        an_abort_at_a_locked_screen_hands_the_loop_back,
        a_stop_hands_the_loop_back_and_keeps_the_sheet,
        while_it_serves_nobody_else_on_this_machine_is_master,
        a_start_without_what_permission_needs_moves_nothing,
        a_daemon_that_only_watches_knows_no_word_that_writes,
        the_sockets_are_for_their_owner_only,
        the_rounds_tell_loops_and_controllers,
    )
}


@pytest.fixture(scope="module")
def ended(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Mapping[str, object]:
    """How each story that was asked for ended, two at a time: most of their time is waiting for a plant."""
    folder = tmp_path_factory.mktemp("daemon")
    asked = {name for item in request.session.items for name in STORIES if name in item.name}

    async def all_of_them() -> list[object]:
        room = asyncio.Semaphore(AT_ONCE)

        async def one(number: int, name: str) -> None:
            async with room:
                await STORIES[name](folder / str(number))

        return await asyncio.gather(*(one(*named) for named in enumerate(sorted(asked))), return_exceptions=True)

    return dict(zip(sorted(asked), asyncio.run(all_of_them()), strict=True))


@pytest.mark.parametrize("story", STORIES)
def test_over_its_own_sockets(ended: Mapping[str, object], story: str) -> None:
    if isinstance(fault := ended[story], BaseException):
        raise fault
