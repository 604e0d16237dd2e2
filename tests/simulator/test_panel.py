"""The panel's lines and the faults that can be switched there."""

from math import isnan

import pytest

from simulator.block import Mode
from simulator.faults import ENDLESS, FAULTS, WireFaults
from simulator.panel import COMMANDS, Panel
from simulator.rig import load_rig
from simulator.transmitter import TransmitterFault
from simulator.valve import ValveFault


@pytest.fixture
def panel() -> Panel:
    return Panel(load_rig("juice-skid").build(), WireFaults())


def scan(panel: Panel) -> None:
    panel.plc.scan(round(panel.plc.t_s + 0.05, 3))


def test_enable_stop_and_unstop_reach_the_guard(panel: Panel) -> None:
    loop = panel.plc.loops["TIC-204"]
    assert panel.answer("enable TIC-204") == {"ok": True}
    scan(panel)
    assert loop.guard.is_enabled
    assert panel.answer("stop TIC-204") == {"ok": True}
    assert loop.is_stop_pressed
    assert panel.answer("unstop TIC-204") == {"ok": True}
    assert not loop.is_stop_pressed


def test_mode_setpoint_output_settings_and_watch_entries_can_be_set(panel: Panel) -> None:
    loop = panel.plc.loops["TIC-204"]
    assert panel.answer("mode TIC-204 man") == {"ok": True, "mode": "MAN"}
    assert panel.answer("op TIC-204 40") == {"ok": True, "op_pct": 40.0}
    assert panel.answer("sp TIC-204 72.0")["ok"] is True
    assert panel.answer("settings TIC-204 gain=1.5 integral=7") == {
        "ok": True,
        "gain": 1.5,
        "integral": 7.0,
        "derivative": 0.0,
    }
    assert panel.answer("watch TIC-204 pump_running 0") == {"ok": True, "pump_running": 0}
    assert (loop.block.mode, loop.block.op_pct) == (Mode.MAN, 40.0)
    assert loop.sp_eu == pytest.approx(72.0)
    assert (loop.block.settings.gain, loop.watch["pump_running"]) == (1.5, 0)
    assert panel.answer("mode TIC-311 CAS")["ok"] is True


@pytest.mark.parametrize(
    ("line", "complaint"),
    [
        ("dance", "no such command; known: enable"),
        ("enable", "something is missing; write: enable LOOP"),
        ("enable TIC-999", "no loop TIC-999; known: TIC-204"),
        ("mode TIC-204 RUN", "no mode RUN; known: MAN, AUTO, CAS"),
        ("mode TIC-204 CAS", "TIC-204 has no cascade master"),
        ("op TIC-204 40", "TIC-204 is in AUTO: put it in MAN first"),
        ("sp TIC-204 200", "sp must lie between 0 and 120"),
        ("sp TIC-204 warm", "'warm' is no number"),
        ("sp TIC-204 nan", "'nan' is no finite number"),
        ("settings TIC-204 gain=-1", "must not be negative"),
        ("settings TIC-204 speed=1", "no setting speed"),
        ("settings TIC-204 gain=", "'' is no number"),
        ("watch TIC-204 moon 1", "no watch entry moon; known: divert_valve_closed, pump_running"),
        ("watch TIC-310 moon 1", "known: none"),
        ("watch TIC-204 pump_running 70000", "between 0 and 65535"),
        ('watch TIC-204 "pump_running', "No closing quotation"),
        ("fault", "no such fault; known: drop-requests"),
        ("fault thunder", "no such fault"),
        ("fault transmitter TIC-204", "something is missing; write: fault transmitter LOOP none|stuck|nan|high|low"),
        ("fault transmitter TIC-999 nan", "no loop 'TIC-999'"),
        ("fault transmitter TIC-204 broken", "'broken' is not a valid TransmitterFault; write: fault transmitter"),
        ("fault delay-answers -1", "a delay lies between 0 and 3600 s"),
        ("fault delay-answers nan", "a delay lies between 0 and 3600 s"),
        ("fault exception 0", "an exception code lies between 1 and 255"),
        ("fault load-sine TIC-204 5 0", "a period must be positive"),
    ],
)
def test_a_bad_line_is_answered_by_what_to_write_instead(panel: Panel, line: str, complaint: str) -> None:
    answer = panel.answer(line)
    assert answer["ok"] is False
    assert complaint in str(answer["error"])


def test_the_state_of_a_loop_and_of_the_plant_can_be_asked(panel: Panel) -> None:
    loop_state = panel.answer("state TIC-204")
    assert loop_state["ok"] is True
    assert (loop_state["mode"], loop_state["guard_state"], loop_state["sp"]) == ("AUTO", "idle", 78.0)
    plant_state = panel.answer("state")
    assert plant_state["boot_count"] == 1
    assert list(plant_state["loops"]) == list(panel.plc.loops)  # type: ignore[call-overload]  # a dict


def test_a_reading_that_is_no_number_is_told_as_nothing(panel: Panel) -> None:
    panel.answer("fault transmitter TIC-204 nan")
    scan(panel)
    state = panel.answer("state TIC-204")
    assert state["pv"] is None
    assert state["pv_pct"] is None
    assert isnan(panel.plc.loops["TIC-204"].pv_eu)


def test_help_tells_every_command_and_every_fault(panel: Panel) -> None:
    answer = panel.answer("help")
    assert len(answer["commands"]) == len(COMMANDS)  # type: ignore[arg-type]  # a dict
    assert len(answer["faults"]) == len(FAULTS)  # type: ignore[arg-type]  # a dict


def test_quit_leaves_the_panel(panel: Panel) -> None:
    assert panel.answer("quit") == {"ok": True}
    assert panel.is_left


def test_every_fault_of_the_wire_can_be_switched_on_and_all_off_again(panel: Panel) -> None:
    for line in (
        "fault drop-requests",
        "fault drop-answers 2",
        "fault half-frame 1",
        "fault delay-requests 0.1",
        "fault delay-answers 0.2",
        "fault exception 6 16",
        "fault refuse-writes 40",
        "fault close-connections",
    ):
        assert panel.answer(line) == {"ok": True}
    assert panel.wire == WireFaults(ENDLESS, 2, 1, 0.1, 0.2, ENDLESS, 6, 16, {40}, 1)
    assert panel.answer("clear-faults") == {"ok": True}
    assert panel.wire == WireFaults(close_requests=1)


def test_counted_faults_strike_as_often_as_asked_and_endless_ones_always() -> None:
    wire = WireFaults(drop_answers=2, drop_requests=ENDLESS)
    assert [wire.spend("drop_answers") for _ in range(4)] == [True, True, False, False]
    assert all(wire.spend("drop_requests") for _ in range(10))


def test_faults_of_the_plc_and_of_the_field_can_be_switched_on_and_off(panel: Panel) -> None:
    loop = panel.plc.loops["TIC-204"]
    for line in ("fault plc-stop", "fault transmitter TIC-204 stuck", "fault valve TIC-204 stuck"):
        assert panel.answer(line) == {"ok": True}
    assert panel.plc.is_in_stop
    assert (loop.transmitter.fault, loop.valve.fault) == (TransmitterFault.STUCK, ValveFault.STUCK)
    panel.answer("clear-faults")
    assert (loop.transmitter.fault, loop.valve.fault) == (TransmitterFault.NONE, ValveFault.NONE)
    assert panel.answer("fault restart") == {"ok": True}
    assert panel.plc.boot_count == 2
    assert panel.wire.close_requests == 1


def test_a_restart_is_warm_or_cold(panel: Panel) -> None:
    loop = panel.plc.loops["TIC-204"]
    loop.block.mode = Mode.MAN
    modes = []
    for start in ("warm", "cold"):
        panel.answer(f"fault restart {start}")
        modes.append(loop.block.mode)
    assert modes == [Mode.MAN, Mode.AUTO]
    assert "no start is called hot" in str(panel.answer("fault restart hot")["error"])
    assert panel.plc.boot_count == 3


def test_a_plc_in_stop_can_be_put_in_run_again(panel: Panel) -> None:
    panel.answer("fault plc-stop")
    assert panel.answer("fault plc-run") == {"ok": True}
    assert not panel.plc.is_in_stop


def test_disturbances_move_the_process(panel: Panel) -> None:
    loop = panel.plc.loops["TIC-204"]
    loop.block.mode = Mode.MAN
    rest_pct = loop.process.output_pct
    assert panel.answer("fault load-step TIC-204 5") == {"ok": True}
    assert panel.answer("fault load-sine TIC-204 0.5 2.0") == {"ok": True}
    assert panel.answer("fault drift TIC-204 0.01") == {"ok": True}
    for _ in range(600):
        scan(panel)
    # 1.6 x 5 % and 30 s of drift; the sine is small behind two lags
    assert loop.process.output_pct == pytest.approx(rest_pct + 8.0 + 0.3, abs=0.15)
