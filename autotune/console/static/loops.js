// The index: a line for each loop's sheet.

import { clock, h, instant, mark, outcomeMark, reading, say, set } from "./dom.js";

const OLD_AFTER_MS = 15000;

export function indexView(page) {
  const list = h("ol", { class: "index" });
  const rows = new Map();
  const stop = page.onLoops(({ loops, utc }) => {
    for (const line of loops) {
      if (!rows.has(line.loop)) {
        rows.set(line.loop, row(line));
        list.append(rows.get(line.loop).element);
      }
      rows.get(line.loop).update(line, utc);
    }
  });
  return {
    element: h("div", { class: "sheet" }, h("h1", {}, "Loops"), h("p", { class: "lead" }, "One sheet for each loop. Open it to look at the loop, to test it, or to see its last test."), list),
    leave: stop,
  };
}

function row(line) {
  const state = h("span", { class: "index-state" });
  const readings = h("span", { class: "index-readings" }, h("span"), h("span"), h("span"));
  const age = h("span", { class: "quiet" });
  const last = h("span", { class: "index-last" });
  const element = h(
    "li",
    {},
    h("a", { href: `#/loop/${encodeURIComponent(line.loop)}` }, h("span", { class: "index-name" }, line.loop), h("span", { class: "index-service" }, line.service)),
    h("div", { class: "index-more" }, state, readings, age, last),
  );
  let before = "";
  return {
    element,
    update(now, utc) {
      const told = JSON.stringify([now.doing, now.by, now.fault, now.mode, now.is_settled, now.last_sheet]);
      if (told !== before) {
        before = told;
        set(state, stateMark(now));
        set(last, now.last_sheet ? [`last sheet ${instant(now.last_sheet.started_utc)} `, outcomeMark(now.last_sheet.outcome)] : "no sheet yet");
      }
      const texts = [`PV ${reading(now.pv_eu, now.pv_unit)}`, `SP ${reading(now.sp_eu, now.pv_unit)}`, `OP ${reading(now.op_eu, now.op_unit)}`];
      texts.forEach((text, at) => say(readings.children[at], text));
      say(age, now.read_utc && isOld(now, utc) ? `read at ${clock(new Date(now.read_utc))}` : "");
    },
  };
}

/** Whether a reading is older than two rounds, by the service's own clock. */
function isOld(line, utc) {
  return new Date(utc) - new Date(line.read_utc) > OLD_AFTER_MS;
}

/** What there is to know about a loop at a glance. */
export function stateMark(line) {
  if (!line.is_settled) return mark("stop", "NOT SETTLED: go to the panel");
  if (line.doing) return mark("caution", `${line.doing} by ${line.by}`);
  if (line.fault) return mark("stop", "not reached");
  if (line.mode === null) return mark("note", "not read yet");
  return mark(line.mode === "AUTO" ? "good" : "note", line.mode);
}
