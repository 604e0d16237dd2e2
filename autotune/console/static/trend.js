// The trend of one test: PV with its switching band above, the output with its moves below.

import { figure, reading, s, set } from "./dom.js";

const WIDTH_AT_LEAST = 420;
const LEFT = 64;
const RIGHT = 46;
const PV_TOP = 26;
const PV_HEIGHT = 166;
const OP_TOP = PV_TOP + PV_HEIGHT + 30;
const OP_HEIGHT = 72;
const HEIGHT = OP_TOP + OP_HEIGHT + 34;

export class Trend {
  /** `units` are those of PV and OP. */
  constructor(units) {
    this.units = units;
    this.clear();
    this.isWide = false;
    this.marks = {};
    this.element = s("svg", {
      class: "trend", height: HEIGHT, role: "img", "aria-label": "Trend of PV, SP and OP",
    });
    new ResizeObserver(() => this.draw()).observe(this.element);
  }

  clear() {
    this.t = [];
    this.pv = [];
    this.sp = [];
    this.op = [];
    this.switches = [];
  }

  /** Append what came, from reading number `first` on; 0 begins anew. */
  add({ first, t_s, pv_eu, sp_eu, op_eu, switches }) {
    if (first === 0) this.clear();
    this.t.push(...t_s);
    this.pv.push(...pv_eu);
    this.sp.push(...sp_eu);
    this.op.push(...op_eu);
    this.switches.push(...switches);
  }

  /** Draw, with `marks`: reference, hysteresis, limits of PV and OP in engineering units, null where not known. */
  draw(marks = this.marks) {
    this.marks = marks;
    this.width = Math.max(WIDTH_AT_LEAST, this.element.clientWidth);
    this.inner = this.width - LEFT - RIGHT;
    if (this.t.length < 2) {
      set(this.element, s("text", { x: LEFT, y: 60, class: "axis" }, "waiting for readings"));
      return;
    }
    const from = this.t[0];
    const to = Math.max(this.t[this.t.length - 1], from + 5);
    const x = (t) => LEFT + (this.inner * (t - from)) / (to - from);
    set(this.element, this.#times(from, to, x), this.#pvPlot(x), this.#opPlot(x));
    const last = this.pv.length - 1;
    this.element.setAttribute(
      "aria-label",
      `Trend over ${figure(to - from, "s", 3)}: PV ${reading(this.pv[last], this.units.pv)}, ` +
        `OP ${reading(this.op[last], this.units.op)}, ${this.switches.length} moves of the output`,
    );
  }

  #pvPlot(x) {
    const { reference, hysteresis, pvLow, pvHigh } = this.marks;
    const known = reference !== null && reference !== undefined && hysteresis;
    const band = known ? [reference - hysteresis, reference + hysteresis] : [];
    const limits = [pvLow, pvHigh].filter((one) => one !== null && one !== undefined);
    const [low, high] = range([this.pv, this.sp, band, this.isWide ? limits : []]);
    const y = (eu) => PV_TOP + (PV_HEIGHT * (high - eu)) / (high - low);
    const parts = [frame(PV_TOP, PV_HEIGHT, this.inner), levels(low, high, y, 5, this.inner), title(`PV ${this.units.pv}`, PV_TOP)];
    if (known) {
      parts.push(
        s("rect", { class: "band", x: LEFT, width: this.inner, y: y(band[1]), height: Math.max(y(band[0]) - y(band[1]), 1) }),
        s("line", { class: "reference", x1: LEFT, x2: LEFT + this.inner, y1: y(reference), y2: y(reference) }),
      );
    }
    for (const [limit, word] of [[pvHigh, "PV may not be above"], [pvLow, "PV may not be below"]]) {
      if (limit > low && limit < high) parts.push(limitLine(y(limit), word, limit === pvLow, this.inner));
    }
    parts.push(
      s("path", { class: "sp", d: path(this.t, this.sp, x, y) }),
      s("path", { class: "pv", d: path(this.t, this.pv, x, y) }),
      ...tags([["PV", "pv", y(last(this.pv) ?? high)], ["SP", "sp", y(last(this.sp) ?? low)]], PV_TOP, PV_TOP + PV_HEIGHT, this.inner),
    );
    if (known) parts.push(s("text", { class: "axis", x: LEFT + 6, y: y(band[1]) - 5 }, "switching band"));
    return parts;
  }

  #opPlot(x) {
    const { opLow, opHigh } = this.marks;
    const asked = this.switches.map(([, eu]) => eu);
    const limits = [opLow, opHigh].filter((one) => one !== null && one !== undefined);
    const [low, high] = range([this.op, asked, limits]);
    const y = (eu) => OP_TOP + (OP_HEIGHT * (high - eu)) / (high - low);
    const parts = [frame(OP_TOP, OP_HEIGHT, this.inner), levels(low, high, y, 4, this.inner), title(`OP ${this.units.op}`, OP_TOP)];
    for (const limit of limits) parts.push(limitLine(y(limit), "", false, this.inner));
    parts.push(s("path", { class: "op", d: path(this.t, this.op, x, y) }));
    let before = null;
    for (const [t, eu] of this.switches) {
      if (before !== null && x(t) >= LEFT) {
        const up = eu > before;
        const at = x(t);
        const tip = OP_TOP - 8;
        parts.push(
          s("line", { class: "switch", x1: at, x2: at, y1: PV_TOP, y2: OP_TOP + OP_HEIGHT }),
          s("path", { class: "move", d: up ? `M${at - 4} ${tip + 4}h8l-4 -8z` : `M${at - 4} ${tip - 4}h8l-4 8z` }),
        );
      }
      before = eu;
    }
    parts.push(...tags([["OP", "op", y(last(this.op) ?? high)]], OP_TOP, OP_TOP + OP_HEIGHT, this.inner));
    return parts;
  }

  #times(from, to, x) {
    const step = niceStep((to - from) / Math.max(3, Math.round(this.inner / 110)));
    const parts = [];
    for (let t = Math.ceil(from / step) * step; t <= to; t += step) {
      parts.push(
        s("line", { class: "grid", x1: x(t), x2: x(t), y1: PV_TOP, y2: OP_TOP + OP_HEIGHT }),
        s("text", { class: "axis", x: x(t), y: HEIGHT - 12, "text-anchor": "middle" }, figure(Number(t.toFixed(6)), "", 5)),
      );
    }
    parts.push(s("text", { class: "axis", x: this.width - RIGHT + 8, y: HEIGHT - 12 }, "s"));
    return parts;
  }
}

function last(column) {
  for (let at = column.length - 1; at >= 0; at -= 1) if (column[at] !== null) return column[at];
  return null;
}

function range(columns) {
  let low = Infinity;
  let high = -Infinity;
  for (const column of columns) {
    for (const one of column) {
      if (one === null || one === undefined) continue;
      if (one < low) low = one;
      if (one > high) high = one;
    }
  }
  if (low > high) return [0, 1];
  const margin = Math.max(0.08 * (high - low), 1e-3 * Math.max(Math.abs(low), Math.abs(high)), 1e-6);
  return [low - margin, high + margin];
}

function niceStep(rough) {
  const power = 10 ** Math.floor(Math.log10(rough));
  for (const factor of [1, 2, 5]) if (factor * power >= rough) return factor * power;
  return 10 * power;
}

function frame(top, height, inner) {
  return s("rect", { class: "frame", x: LEFT, y: top, width: inner, height });
}

function title(text, top) {
  return s("text", { class: "axis strong", x: LEFT, y: top - 8 }, text);
}

function levels(low, high, y, count, inner) {
  const step = niceStep((high - low) / count);
  const parts = [];
  for (let eu = Math.ceil(low / step) * step; eu <= high; eu += step) {
    if (y(eu) < y(high) + 16) continue;
    parts.push(
      s("line", { class: "grid", x1: LEFT, x2: LEFT + inner, y1: y(eu), y2: y(eu) }),
      s("text", { class: "axis", x: LEFT - 8, y: y(eu) + 5, "text-anchor": "end" }, figure(Number(eu.toFixed(9)), "", 5)),
    );
  }
  return parts;
}

function limitLine(y, word, isLow, inner) {
  return [
    s("line", { class: "limit", x1: LEFT, x2: LEFT + inner, y1: y, y2: y }),
    s("text", { class: "axis", x: LEFT + inner - 6, y: isLow ? y - 5 : y + 16, "text-anchor": "end" }, word),
  ];
}

/** Names at the right end of their lines, pushed apart where they would lie on each other. */
function tags(names, top, bottom, inner) {
  const sorted = names.map(([word, kind, y]) => [word, kind, Math.min(Math.max(y, top + 8), bottom - 2)]);
  sorted.sort((a, b) => a[2] - b[2]);
  for (let at = 1; at < sorted.length; at += 1) {
    if (sorted[at][2] - sorted[at - 1][2] < 17) sorted[at][2] = sorted[at - 1][2] + 17;
  }
  return sorted.map(([word, kind, y]) => s("text", { class: `tag ${kind}-tag`, x: LEFT + inner + 8, y: y + 5 }, word));
}

/** A line through the readings, at most two points for each column of the screen; a gap where nothing is known. */
function path(t, column, x, y) {
  let text = "";
  let pen = "M";
  let at = 0;
  while (at < t.length) {
    const left = Math.floor(x(t[at]));
    let low = null;
    let high = null;
    let lowAt = at;
    let highAt = at;
    while (at < t.length && Math.floor(x(t[at])) === left) {
      const one = column[at];
      if (one !== null && (low === null || one < low)) [low, lowAt] = [one, at];
      if (one !== null && (high === null || one > high)) [high, highAt] = [one, at];
      at += 1;
    }
    if (low === null) {
      pen = "M";
      continue;
    }
    for (const point of lowAt === highAt ? [lowAt] : [lowAt, highAt].sort((a, b) => a - b)) {
      text += `${pen}${x(t[point]).toFixed(1)} ${y(column[point]).toFixed(1)}`;
      pen = "L";
    }
  }
  return text;
}
