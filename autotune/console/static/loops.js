// The index: a line for each loop's sheet.

import { h, instant, mark, outcomeMark, reading, say, set } from "./dom.js";

export function indexView(page) {
  const list = h("ol", { class: "index" });
  const rows = new Map();
  const stop = page.onLoops((loops) => {
    for (const line of loops) {
      if (!rows.has(line.loop)) {
        rows.set(line.loop, row(line));
        list.append(rows.get(line.loop).element);
      }
      rows.get(line.loop).update(line);
    }
  });
  return {
    element: h("div", { class: "sheet" }, h("h1", {}, "Loops"), h("p", { class: "lead" }, "One sheet for each loop. Open it to look at the loop, to test it, or to see its last test."), list),
    leave: stop,
  };
}

function row(line) {
  const state = h("span", { class: "index-state" });
  const readings = h("span", { class: "index-readings" });
  const last = h("span", { class: "index-last" });
  const element = h(
    "li",
    {},
    h("a", { href: `#/loop/${encodeURIComponent(line.loop)}` }, h("span", { class: "index-name" }, line.loop), h("span", { class: "index-service" }, line.service)),
    h("div", { class: "index-more" }, state, readings, last),
  );
  let before = "";
  return {
    element,
    update(now) {
      const told = JSON.stringify([now.doing, now.by, now.fault, now.mode, now.is_settled, now.last_sheet]);
      if (told !== before) {
        before = told;
        set(state, stateMark(now));
        set(last, now.last_sheet ? [`last sheet ${instant(now.last_sheet.started_utc)} `, outcomeMark(now.last_sheet.outcome)] : "no sheet yet");
      }
      say(readings, `PV ${reading(now.pv_eu, now.pv_unit)}   SP ${reading(now.sp_eu, now.pv_unit)}   OP ${reading(now.op_eu, now.op_unit)}`);
    },
  };
}

/** What there is to know about a loop at a glance. */
export function stateMark(line) {
  if (!line.is_settled) return mark("stop", "NOT SETTLED: go to the panel");
  if (line.doing) return mark("caution", `${line.doing} by ${line.by}`);
  if (line.fault) return mark("stop", "not reached");
  if (line.mode === null) return mark("note", "not read yet");
  return mark(line.mode === "AUTO" ? "good" : "note", line.mode);
}
