"""Example sheets.  The figures are invented for these tests; nothing is checked against them."""

from datetime import UTC, datetime, timedelta
from multiprocessing.synchronize import Barrier
from pathlib import Path

from autotune.sheet.schema import (
    AsFound,
    Change,
    Cycle,
    EventLine,
    FieldWrite,
    Findings,
    Limits,
    Note,
    Outcome,
    Person,
    Plan,
    Proposal,
    Quantity,
    Recovery,
    Rested,
    Said,
    Samples,
    SeenPoint,
    Sheet,
    Span,
    Versions,
    WatchColumn,
    WatchLimit,
    WriteLine,
    sheet_id,
)
from autotune.sheet.sqlite_store import SqliteStore

STARTED = datetime(2026, 12, 1, 9, 45, 2, tzinfo=UTC)
ROSA = Person(name="R. Lind", is_authenticated=False)


def settings(gain: float | None, integral: float | None) -> tuple[Quantity, ...]:
    return (
        Quantity(name="gain", label="GAIN", unit="%OP/%PV", amount=gain),
        Quantity(name="integral", label="RESET", unit="repeats/min", amount=integral),
    )


def as_found(gain: float = 1.5) -> AsFound:
    return AsFound(
        mode="AUTO",
        op_pct=42.0,
        op_eu=42.0,
        sp_pct=60.0,
        sp_eu=72.0,
        pv_pct=59.9,
        pv_eu=71.88,
        settings=settings(gain, 0.8),
    )


def plan() -> Plan:
    return Plan(
        kind="relay",
        first_move="up",
        step_up_pct=5.0,
        step_down_pct=5.0,
        hysteresis_pct=None,
        wanted_swing_pct=1.0,
        cycles_to_agree=3,
        agreement_pct=5.0,
        cycles_to_discard=1,
        scan_s=0.1,
        plc_scan_s=None,
        baseline_s=10.0,
        has_guard=False,
        has_clock_tags=False,
    )


def limits() -> Limits:
    return Limits(
        step_up_pct=8.0,
        step_down_pct=8.0,
        op_low_pct=10.0,
        op_high_pct=90.0,
        pv_low_pct=50.0,
        pv_high_pct=70.0,
        op_rate_pct_per_s=None,
        pv_rate_pct_per_s=4.0,
        pv_deviation_pct=None,
        test_within_s=600.0,
        cycles_at_most=12,
        watch=(WatchLimit(name="divert valve", low_eu=1.0, high_eu=1.0, meaning="closed"),),
    )


def samples() -> Samples:
    return Samples(
        t_s=(0.0, 0.1, 0.2),
        taken_earliest_s=(-0.1, 0.0, 0.1),
        taken_latest_s=(0.0, 0.1, 0.2),
        pv_pct=(59.9, None, 60.1),
        sp_pct=(60.0, 60.0, 60.0),
        op_pct=(42.0, 42.0, 47.0),
        mode=("AUTO", "MAN", "MAN"),
        pv_quality=("good", "bad", "good"),
        op_quality=("good", "good", "good"),
        plc_clock_ms=(4294967290, 90, 190),
        watch=(WatchColumn(name="divert valve", reading_eu=(1.0, 1.0, None)),),
    )


def findings() -> Findings:
    return Findings(
        time_base="our clock",
        cycles=(Cycle(from_s=12.5, period_s=14.2, pv_amplitude_pct=1.1, amplitude_pct=5.0),),
        seen=(
            SeenPoint(
                method="describing function",
                frequency_rad_per_s=0.442,
                gain=0.173,
                phase_rad=-2.9,
                gain_sd_ratio=0.01,
                phase_sd_rad=0.02,
            ),
        ),
        method="a fitted model",
        concluded=(
            Quantity(
                name="ultimate_gain",
                label="ultimate gain",
                unit="%OP/%PV",
                amount=6.1,
                low=5.6,
                high=6.3,
                level=0.95,
            ),
            Quantity(name="ultimate_period_s", label="ultimate period", unit="s", amount=13.9, low=13.1, high=14.4),
            Quantity(name="static_gain", label="static gain", unit="%PV/%OP", amount=None),
        ),
        because=("the controller's scan is not known",),
        cautions=("the drift was large",),
    )


def sheet(loop: str = "TIC-204", minutes: int = 0, gain: float = 1.5, ended: str = "COMPLETE") -> Sheet:
    """One test, ``minutes`` after the first."""
    started = STARTED + timedelta(minutes=minutes)
    return Sheet.model_validate(
        {
            "sheet_id": sheet_id(loop, started, 0x7F3A),
            "loop": loop,
            "service": "juice outlet temperature",
            "unit": "pasteuriser 1",
            "controller": "127.0.0.1:5020",
            "started_utc": started,
            "ended_utc": started + timedelta(seconds=95),
            "versions": Versions(autotune="0.1.0", python="3.11.7", libraries=(("numpy", "2.3.0"),)),
            "configuration_digest": "c" * 64,
            "configuration_text": '[loop.TIC-204]\nscan_s = 0.1\nservice = "Säfte"\n',
            "pv_span": Span(low_eu=0.0, high_eu=120.0, unit="degC"),
            "op_span": Span(low_eu=0.0, high_eu=100.0, unit="%"),
            "person": ROSA,
            "permission": Said(text="I stand at the skid and can stop it.", utc=started),
            "cautions_accepted": (Said(text="The valve will move.", utc=started),),
            "as_found": as_found(gain),
            "plan": plan(),
            "limits": limits(),
            "rested": Rested(reference_pct=59.95, hysteresis_pct=0.25, noise_pct=0.1, drift_pct_per_s=0.002),
            "samples": samples(),
            "writes": (
                WriteLine(
                    t_s=10.0,
                    utc=started + timedelta(seconds=10),
                    tag="op",
                    raw=4700,
                    outcome="applied",
                    sent_earliest_s=10.0,
                    sent_latest_s=10.02,
                    why="DriveOutput",
                    detail="=1+1",
                ),
            ),
            "events": (
                EventLine(t_s=80.0, utc=started, kind="operator", text="asked to finish", by="R. Lind"),
                EventLine(t_s=81.0, utc=started, kind="trip", text="PV left its range", code="PV_RANGE"),
            ),
            "outcome": Outcome.model_validate({"ended": ended, "code": None, "text": "three cycles agreed"}),
            "findings": findings(),
            "proposals": (
                Proposal(
                    name="some-rule-pi",
                    title="a rule",
                    source="a paper, table 1",
                    is_recommended=True,
                    settings=settings(2.1, 1.25),
                    figures=(Quantity(name="ms", label="peak of |S|", unit="", amount=1.6),),
                    rounding_pct=0.2,
                    gain_factor=1.4,
                    cautions=("faster than now",),
                ),
                Proposal(name="other-rule", title="other", source="b", not_proposed_because="needs a static gain"),
            ),
            "costs": ("late writes can't be excluded: the controller has no guard",),
            "journal_file": "TIC-204.jsonl",
            "journal_digest": "d" * 64,
        }
    )


def change(to: Sheet, result: str = "WRITTEN", gain: float | None = 2.1, minutes: int = 3) -> Change:
    """A confirmed write that belongs to a sheet, ``minutes`` after its test began."""
    utc = to.started_utc + timedelta(minutes=minutes)
    return Change.model_validate(
        {
            "kind": "write",
            "sheet_id": to.sheet_id,
            "utc": utc,
            "person": ROSA,
            "source": "some-rule-pi",
            "as_found": settings(1.5, 0.8),
            "wanted": settings(2.1, 1.25),
            "order": ("integral", "gain"),
            "plan_digest": "a" * 64,
            "configuration_digest": "c" * 64,
            "confirmation_digest": "aaaa-aaaa",
            "confirmed_utc": utc,
            "writes": (FieldWrite(name="gain", amount=2.1, outcome="applied", utc=utc),),
            "read_back": settings(gain, None if gain is None else 1.25),
            "result": result,
            "op_bump_pct": 0.02,
        }
    )


def note(to: Sheet, text: str = "valve packing was renewed") -> Note:
    return Note(sheet_id=to.sheet_id, utc=to.ended_utc, person=ROSA, text=text)


def recovery(to: Sheet) -> Recovery:
    return Recovery(sheet_id=to.sheet_id, utc=to.ended_utc, person=ROSA, present=as_found(), result="STRANDED")


def append_many(file: Path, loop: str, count: int, both_ready: Barrier) -> None:
    """Make or open the store and keep ``count`` tests of one loop: run in processes side by side."""
    both_ready.wait(60)
    store = SqliteStore.create(file, busy_s=60.0)
    for minutes in range(count):
        store.append(sheet(loop, minutes))
