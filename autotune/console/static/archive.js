// The archive: all sheets, and two of one loop side by side.

import { ask } from "./api.js";
import { exact, facts, figure, h, instant, outcomeMark, put, rounded, set, table } from "./dom.js";

export function archiveView(page, loop) {
  const body = h("div", {});
  const chosen = new Set();
  const compare = h("button", { disabled: true, onclick: () => { location.hash = `#/compare/${[...chosen].map(encodeURIComponent).join("/")}`; } }, "Compare the two marked");
  const choose = (line, box) => {
    if (box.checked) chosen.add(line.sheet);
    else chosen.delete(line.sheet);
    compare.disabled = chosen.size !== 2;
  };
  const ready = ask("list_sheets", loop ? { loop } : {}).then(({ sheets }) => {
    if (!sheets.length) {
      put(body, h("p", {}, "No sheet is kept yet. The first test makes one."));
      return;
    }
    put(
      body,
      table(
        ["Sheet", "Loop", "Begun", "Ended", "Mark"],
        sheets.map((line) => {
          const box = h("input", { type: "checkbox", "aria-label": `Mark ${line.sheet}` });
          box.addEventListener("change", () => choose(line, box));
          return [
            h("a", { href: `#/sheet/${encodeURIComponent(line.sheet)}` }, line.sheet),
            line.loop,
            instant(line.started_utc),
            h("span", {}, outcomeMark(line.outcome), line.code ? ` ${line.code}` : ""),
            box,
          ];
        }),
        { class: "archive" },
      ),
      h("div", { class: "acts" }, compare),
    );
  });
  return {
    element: h(
      "div",
      { class: "sheet" },
      h("h1", {}, loop ? `Sheets of ${loop}` : "Archive"),
      loop ? h("p", {}, h("a", { href: "#/archive" }, "All loops")) : h("p", { class: "lead" }, "Every test that was ever begun, newest first. Nothing here is changed or removed."),
      body,
    ),
    ready,
  };
}

export function compareView(page, first, second) {
  const body = h("div", {});
  const ready = Promise.all([first, second].map((sheet) => ask("open_sheet", { sheet }))).then((both) => {
    both.sort((a, b) => (a.sheet.started_utc < b.sheet.started_utc ? -1 : 1));
    set(body, both[0].sheet.loop === both[1].sheet.loop ? sideBySide(both) : h("p", {}, "These are sheets of two different loops. Mark two of one loop."));
  });
  return { element: h("div", { class: "sheet" }, h("h1", {}, "Two sheets side by side"), body), ready };
}

function sideBySide(both) {
  const [older, newer] = both.map((one) => one.sheet);
  const rows = [
    ["Begun", ...both.map(({ sheet }) => instant(sheet.started_utc))],
    ["Ended", ...both.map(({ sheet }) => outcomeMark(sheet.outcome.ended))],
    ["By", ...both.map(({ sheet }) => sheet.person.name)],
    ["PV as found", ...both.map(({ sheet }) => figure(sheet.as_found?.pv_eu ?? null, sheet.pv_span.unit))],
    ["OP as found", ...both.map(({ sheet }) => figure(sheet.as_found?.op_eu ?? null, sheet.op_span.unit))],
    ["Whole cycles", ...both.map(({ sheet }) => String(sheet.findings?.cycles.length ?? 0))],
    ...labels(both, (sheet) => sheet.findings?.concluded ?? [], withInterval),
    ...labels(both, (sheet) => sheet.as_found?.settings ?? [], (one) => exact(one.amount, one.unit), "as found"),
    ["Changes afterwards", ...both.map(({ addenda }) => addenda.filter((one) => one.result).map((one) => `${one.kind}: ${one.result}`).join("; ") || "none")],
  ];
  return [
    facts(["Loop", `${newer.loop}, ${newer.service}`]),
    table(["", ...both.map(({ sheet }) => h("a", { href: `#/sheet/${encodeURIComponent(sheet.sheet_id)}` }, sheet.sheet_id))], rows),
    older.configuration_digest === newer.configuration_digest
      ? h("p", { class: "quiet" }, "Both were made with the same configuration.")
      : h("p", {}, "The configuration was changed between them: spans, limits or the block's description may differ."),
  ];
}

function labels(both, columns, shown, suffix = "") {
  const names = [...new Set(both.flatMap(({ sheet }) => columns(sheet).map((one) => one.label)))];
  return names.map((label) => [
    suffix ? `${label} ${suffix}` : label,
    ...both.map(({ sheet }) => {
      const one = columns(sheet).find((each) => each.label === label);
      return one ? shown(one) : "not known";
    }),
  ]);
}

function withInterval(one) {
  const best = figure(one.amount, one.unit);
  return one.low === null || one.high === null ? best : `${best} (${rounded(one.low)} to ${rounded(one.high)})`;
}
