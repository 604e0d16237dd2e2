"""The trend of a test as lines on the paper: PV with setpoint, limits and hysteresis above, the output below."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta, timezone, tzinfo

from reportlab.lib.colors import Color, black, white
from reportlab.lib.units import mm
from reportlab.pdfgen.canvas import Canvas
from reportlab.pdfgen.pathobject import PDFPathObject
from reportlab.platypus import Flowable

from autotune.paper.fonts import BOLD, REGULAR, cut_to, drawable, width_of
from autotune.paper.layout import ACCENT, GREY, ROOM, RULE, SHADE
from autotune.paper.scales import Point, Scale, clock_ticks, runs, scale_for, thinned, ticks
from autotune.paper.words import shown, to_eu
from autotune.sheet.schema import EventLine, Sheet

_HEIGHT = 93 * mm
_LEFT, _RIGHT_EDGE = 34.0, ROOM - 28.0
_OP_LOW, _OP_HIGH = 26.0, 26.0 + 24 * mm
_PV_LOW, _PV_HIGH = _OP_HIGH + 13.0, _HEIGHT - 40.0
_SMALL = 7.0
_ROWS_OF_LABELS = 3
_THIN = 0.35
"""Points that share this width of the paper are thinned, in points."""

_DRIVING_TAGS = ("op_request", "op")


@dataclass(frozen=True, slots=True)
class _Level:
    """A level of the plot that a word stands beside."""

    eu: float
    word: str
    dash: tuple[float, ...]
    ink: Color


class Trend(Flowable):
    """The plot of one sheet, in ``zone``'s local time; the sheet has at least one sample."""

    def __init__(self, sheet: Sheet, zone: tzinfo) -> None:
        super().__init__()
        self._sheet = sheet
        first = _first_instant(sheet, zone)
        self._midnight = first.replace(hour=0, minute=0, second=0, microsecond=0)
        self._offset_s = (first - self._midnight).total_seconds()
        self._t0_s = sheet.samples.t_s[0]
        shown_s = [*sheet.samples.t_s, *(event.t_s for event in sheet.events if event.kind == "phase")]
        first_s, last_s = self._clock_s(min(shown_s)), self._clock_s(max(shown_s))
        self._time = Scale(first_s, max(last_s, first_s + 0.1), _LEFT, _RIGHT_EDGE)

    def wrap(self, _width: float, _height: float) -> tuple[float, float]:
        """Its size."""
        return ROOM, _HEIGHT

    def draw(self) -> None:
        """Draw it onto the page."""
        pv, op = self._pv_scale(), self._op_scale()
        self._ground(pv, op)
        self._hysteresis(pv)
        self._phases()
        self._levels(pv, self._pv_levels())
        self._levels(op, self._op_levels())
        self._line(pv, [_eu(pct, self._sheet.pv_span.low_eu, self._pv_width_eu) for pct in self._sheet.samples.pv_pct])
        self._line(
            op,
            [_eu(pct, self._sheet.op_span.low_eu, self._op_width_eu) for pct in self._sheet.samples.op_pct],
            is_held=True,
        )
        self._switches()
        self._clock()

    @property
    def _pv_width_eu(self) -> float:
        return self._sheet.pv_span.high_eu - self._sheet.pv_span.low_eu

    @property
    def _op_width_eu(self) -> float:
        return self._sheet.op_span.high_eu - self._sheet.op_span.low_eu

    def _clock_s(self, t_s: float) -> float:
        return self._offset_s + t_s - self._t0_s

    def _pv_scale(self) -> Scale:
        sheet = self._sheet
        known = [pct for pct in (*sheet.samples.pv_pct, *sheet.samples.sp_pct) if pct is not None]
        readings = [to_eu(pct, sheet.pv_span) for pct in known or [sheet.limits.pv_low_pct, sheet.limits.pv_high_pct]]
        return scale_for(readings, _PV_LOW, _PV_HIGH, 0.004 * abs(self._pv_width_eu))

    def _op_scale(self) -> Scale:
        sheet, found = self._sheet, self._sheet.as_found
        known = [pct for pct in sheet.samples.op_pct if pct is not None]
        if found is not None:
            known += [found.op_pct - sheet.limits.step_down_pct, found.op_pct + sheet.limits.step_up_pct]
        readings = [to_eu(pct, sheet.op_span) for pct in known or [0.0, 100.0]]
        return scale_for(readings, _OP_LOW, _OP_HIGH, 0.02 * abs(self._op_width_eu))

    def _pv_levels(self) -> Iterator[_Level]:
        sheet, limits = self._sheet, self._sheet.limits
        yield _Level(to_eu(limits.pv_low_pct, sheet.pv_span), "PV limit", (5, 2), ACCENT)
        yield _Level(to_eu(limits.pv_high_pct, sheet.pv_span), "PV limit", (5, 2), ACCENT)
        if sheet.as_found is not None and sheet.as_found.sp_pct is not None:
            yield _Level(to_eu(sheet.as_found.sp_pct, sheet.pv_span), "SP", (1.5, 1.5), black)

    def _op_levels(self) -> Iterator[_Level]:
        sheet, limits, found = self._sheet, self._sheet.limits, self._sheet.as_found
        low_pct, high_pct = limits.op_low_pct, limits.op_high_pct
        if found is not None:
            low_pct = max(low_pct, found.op_pct - limits.step_down_pct)
            high_pct = min(high_pct, found.op_pct + limits.step_up_pct)
            yield _Level(to_eu(found.op_pct, sheet.op_span), "as found", (1.5, 1.5), black)
        yield _Level(to_eu(low_pct, sheet.op_span), "OP limit", (5, 2), ACCENT)
        yield _Level(to_eu(high_pct, sheet.op_span), "OP limit", (5, 2), ACCENT)

    def _ground(self, pv: Scale, op: Scale) -> None:
        canvas = self.canv
        for scale, unit, word in ((pv, self._sheet.pv_span.unit, "PV"), (op, self._sheet.op_span.unit, "OP")):
            canvas.setLineWidth(0.5)
            canvas.setStrokeColor(RULE)
            canvas.rect(_LEFT, scale.at_low, _RIGHT_EDGE - _LEFT, scale.at_high - scale.at_low)
            marks, decimals = ticks(scale, 6 if word == "PV" else 3)
            for mark in marks:
                canvas.setLineWidth(0.2)
                canvas.line(_LEFT, scale.at(mark), _RIGHT_EDGE, scale.at(mark))
                _word(canvas, _LEFT - 3, scale.at(mark) - 2.4, f"{mark or 0.0:.{decimals}f}", edge="right")
            label = cut_to(drawable(f"{word}, {unit}"), _LEFT + 60.0, BOLD, _SMALL + 0.5)
            _word(canvas, 0, scale.at_high + 3.5, label, font=BOLD, size=_SMALL + 0.5)

    def _hysteresis(self, scale: Scale) -> None:
        """The band in which the relay does not switch, grey; PV at rest is its middle."""
        rested, span = self._sheet.rested, self._sheet.pv_span
        if rested is None:
            return
        edges = (rested.reference_pct - rested.hysteresis_pct, rested.reference_pct + rested.hysteresis_pct)
        low, high = sorted(min(max(to_eu(pct, span), scale.low), scale.high) for pct in edges)
        self.canv.setFillColor(SHADE)
        self.canv.rect(_LEFT, scale.at(low), _RIGHT_EDGE - _LEFT, scale.at(high) - scale.at(low), stroke=0, fill=1)

    def _levels(self, scale: Scale, levels: Iterator[_Level]) -> None:
        canvas = self.canv
        for level in levels:
            canvas.setStrokeColor(level.ink)
            if scale.holds(level.eu):
                at = scale.at(level.eu)
                canvas.setLineWidth(0.7)
                canvas.setDash(list(level.dash))
                canvas.line(_LEFT, at, _RIGHT_EDGE, at)
                canvas.setDash([])
                _word(canvas, _RIGHT_EDGE + 2.5, at - 2.4, level.word, ink=level.ink, size=6.5)
            else:
                self._beyond(scale, level)

    def _beyond(self, scale: Scale, level: _Level) -> None:
        """A level that lies outside of what is shown is told at that edge, with an arrow."""
        canvas, is_above = self.canv, level.eu > scale.high
        edge, towards = (scale.at_high, 1.0) if is_above else (scale.at_low, -1.0)
        told = cut_to(drawable(f"{level.word} {shown(level.eu, self._unit_of(scale))}"), 200.0, REGULAR, 6.5)
        at = edge - towards * 6.0 - 2.4
        _arrow(canvas, _RIGHT_EDGE - 5.0, edge - towards * 1.5, towards, level.ink)
        width = width_of(told, REGULAR, 6.5)
        canvas.setFillColor(white)
        canvas.rect(_RIGHT_EDGE - 12.0 - width, at - 1.5 + towards, width + 3.5, 8.0, stroke=0, fill=1)
        _word(canvas, _RIGHT_EDGE - 10.0, at + towards, told, edge="right", ink=level.ink, size=6.5)

    def _unit_of(self, scale: Scale) -> str:
        return self._sheet.pv_span.unit if scale.at_low == _PV_LOW else self._sheet.op_span.unit

    def _line(self, scale: Scale, readings: Sequence[float | None], *, is_held: bool = False) -> None:
        """The readings as a line, as steps where each one holds until the next; it stops where none is known."""
        canvas = self.canv
        canvas.saveState()
        frame = canvas.beginPath()
        frame.rect(_LEFT, scale.at_low, _RIGHT_EDGE - _LEFT, scale.at_high - scale.at_low)
        canvas.clipPath(frame, stroke=0)
        canvas.setStrokeColor(black)
        canvas.setLineWidth(0.9)
        canvas.setLineJoin(1)
        times = [self._time.at(self._clock_s(t_s)) for t_s in self._sheet.samples.t_s]
        path = canvas.beginPath()
        for run in runs(times, readings):
            placed = thinned([(at, scale.at(reading)) for at, reading in run], _THIN)
            _draw_run(path, placed, is_held=is_held)
        canvas.drawPath(path)
        canvas.restoreState()

    def _phases(self) -> None:
        """Lines where a phase began and where the test was tripped, with their words above."""
        canvas, ends, labels = self.canv, [0.0] * _ROWS_OF_LABELS, list[tuple[float, float, str, Color]]()
        for event in self._sheet.events:
            if event.kind not in {"phase", "trip"} or not self._time.holds(self._clock_s(event.t_s)):
                continue
            at, ink = self._time.at(self._clock_s(event.t_s)), ACCENT if event.kind == "trip" else GREY
            canvas.setStrokeColor(ink)
            canvas.setLineWidth(0.8 if event.kind == "trip" else 0.4)
            canvas.line(at, _OP_LOW, at, _PV_HIGH + 2.0)
            told = cut_to(drawable(_event_word(event)), 100.0, REGULAR, 6.5)
            width = width_of(told, REGULAR, 6.5)
            left = min(at + 1.5, _RIGHT_EDGE + 26.0 - width)
            row = next((n for n, end in enumerate(ends) if left >= end + 3.0), None)
            if row is None:
                continue
            ends[row] = left + width
            height = _PV_HIGH + 14.0 + 8.0 * row
            canvas.line(at, _PV_HIGH + 2.0, at, height - 1.0)
            labels.append((left, height, told, ink))
        for left, height, told, ink in labels:  # over all lines, so that none strikes through a word
            canvas.setFillColor(white)
            canvas.rect(left - 0.8, height - 1.2, width_of(told, REGULAR, 6.5) + 1.6, 7.4, stroke=0, fill=1)
            _word(canvas, left, height, told, ink=ink, size=6.5)

    def _switches(self) -> None:
        """A wedge between the plots for each written change of the output."""
        driven = next((tag for tag in _DRIVING_TAGS if any(w.tag == tag for w in self._sheet.writes)), None)
        last = None
        for write in self._sheet.writes:
            if write.tag != driven:
                continue
            if last is not None and write.raw != last and self._time.holds(self._clock_s(write.t_s)):
                _arrow(self.canv, self._time.at(self._clock_s(write.t_s)), _OP_HIGH + 1.0, -1.0, black)
            last = write.raw

    def _clock(self) -> None:
        canvas = self.canv
        marks, step_s = clock_ticks(self._time, 8)
        for mark in marks:
            at = self._time.at(mark)
            canvas.setStrokeColor(RULE)
            canvas.setLineWidth(0.5)
            canvas.line(at, _OP_LOW, at, _OP_LOW - 3.0)
            instant = self._midnight + timedelta(seconds=mark)
            told = f"{instant:%H:%M:%S}" if step_s >= 1.0 else f"{instant:%H:%M:%S.%f}"[:-5]
            _word(canvas, at, _OP_LOW - 11.0, told, edge="middle")
        day = f"local time, {self._midnight:%Y-%m-%d}, UTC{_zone(self._midnight)}"
        grey = "" if self._sheet.rested is None else "; grey: hysteresis of the relay"
        note = f"{day}; wedges: written changes of the output{grey}"
        _word(canvas, _LEFT, 1.5, drawable(note), ink=GREY)


def _first_instant(sheet: Sheet, zone: tzinfo) -> datetime:
    """Local time of the first sample, with a fixed offset; the sheet's lines that carry both clocks tell it."""
    t_s = sheet.samples.t_s[0]
    both_clocks = [(line.utc, line.t_s) for line in sheet.writes[:1]] or [(e.utc, e.t_s) for e in sheet.events[:1]]
    utc, at_s = both_clocks[0] if both_clocks else (sheet.started_utc, t_s)
    local = (utc + timedelta(seconds=t_s - at_s)).astimezone(zone)
    return local.astimezone(timezone(local.utcoffset() or timedelta()))


def _zone(instant: datetime) -> str:
    offset = f"{instant:%z}"
    return f"{offset[:3]}:{offset[3:5]}"


def _eu(pct: float | None, low_eu: float, width_eu: float) -> float | None:
    return None if pct is None else low_eu + pct * width_eu / 100.0


def _draw_run(path: PDFPathObject, points: Sequence[Point], *, is_held: bool) -> None:
    (x, y), *rest = points
    path.moveTo(x, y)
    for at, height in rest:
        if is_held and height != y:
            path.lineTo(at, y)
        path.lineTo(at, height)
        y = height


def _event_word(event: EventLine) -> str:
    return event.code or event.text if event.kind == "trip" else event.text


def _arrow(canvas: Canvas, x: float, y: float, towards: float, ink: Color) -> None:
    """A wedge whose point lies at (x, y); ``towards`` is +1 for up, -1 for down."""
    path = canvas.beginPath()
    path.moveTo(x, y)
    path.lineTo(x - 2.0, y - towards * 4.5)
    path.lineTo(x + 2.0, y - towards * 4.5)
    path.close()
    canvas.setFillColor(ink)
    canvas.drawPath(path, stroke=0, fill=1)


def _word(
    canvas: Canvas, x: float, y: float, told: str, edge: str = "left", ink: Color = black, font: str = REGULAR,
    size: float = _SMALL,
) -> None:  # fmt: skip
    canvas.setFillColor(ink)
    canvas.setFont(font, size)
    draw = {"left": canvas.drawString, "right": canvas.drawRightString, "middle": canvas.drawCentredString}[edge]
    draw(x, y, told)
