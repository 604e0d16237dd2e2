// One sheet as it is kept: what was found, what is proposed, and the change that a person confirms.

import { ask, may, perform, session } from "./api.js";
import { attend, exact, facts, figure, h, instant, mark, outcomeMark, part, rounded, say, set, table } from "./dom.js";
import { secretField } from "./persons.js";
import { Trend } from "./trend.js";

const FIGURES_COMPARED = 4; // more don't fit beside the settings; all stand with each rule
const OUTCOMES = {
  COMPLETE: "The test ran to its end and the loop was given back as found.",
  ABORTED: "The test was ended early; the loop reads as found, or was never touched.",
  RELEASED: "Somebody else took the loop during the test. It was left to them; nothing more was written.",
  STRANDED: "It is NOT confirmed that the loop was given back. Go to the panel and enter the values as found.",
};

export function sheetView(page, id) {
  const body = h("div", {});
  const ready = ask("open_sheet", { sheet: id }).then((answer) => set(body, sheetParts(page, answer, { isLive: false })));
  return { element: h("div", { class: "sheet" }, body), ready };
}

/** All parts of a kept sheet; on the loop's own working sheet its head and trend stand above already. */
export function sheetParts(page, answer, { isLive }) {
  const { sheet, addenda } = answer;
  const confirmation = h("div", {});
  const later = h("div", {});
  const refresh = async () => {
    const again = await ask("open_sheet", { sheet: sheet.sheet_id });
    set(later, addendaPart(again.addenda));
  };
  set(later, addendaPart(addenda));
  const plan = (act, fields) => openPlan(page, act, fields, confirmation, refresh);
  return [
    !isLive && headParts(sheet),
    outcomePart(sheet),
    findingsPart(sheet),
    proposalsPart(sheet, plan),
    confirmation,
    restorePart(sheet, plan),
    later,
    recordPart(answer),
  ];
}

function headParts(sheet) {
  const trend = new Trend({ pv: sheet.pv_span.unit, op: sheet.op_span.unit });
  const toEu = (span) => (pct) => (pct === null ? null : span.low_eu + ((span.high_eu - span.low_eu) * pct) / 100);
  const pv = toEu(sheet.pv_span);
  const op = toEu(sheet.op_span);
  const start = sheet.samples.t_s[0] ?? 0;
  trend.add({
    first: 0,
    t_s: sheet.samples.t_s.map((t) => t - start),
    pv_eu: sheet.samples.pv_pct.map(pv), sp_eu: sheet.samples.sp_pct.map(pv), op_eu: sheet.samples.op_pct.map(op),
    switches: [],
  });
  trend.draw({ opLow: null, opHigh: null, pvLow: pv(sheet.limits.pv_low_pct), pvHigh: pv(sheet.limits.pv_high_pct) });
  return [
    h("h1", {}, sheet.loop, " ", h("small", {}, sheet.service)),
    facts(
      ["Sheet", sheet.sheet_id],
      ["Controller", `${sheet.controller}; plant unit ${sheet.unit}`],
      ["Begun", `${instant(sheet.started_utc)}, ended ${instant(sheet.ended_utc)}`],
      ["Tested by", `${sheet.person.name}${sheet.person.is_authenticated ? "" : " (typed, not authenticated)"}`],
      ["Permission", sheet.permission.text],
    ),
    sheet.samples.t_s.length > 1 && h("figure", {}, trend.element),
  ];
}

function outcomePart(sheet) {
  const found = sheet.as_found;
  return part(
    "Outcome",
    {},
    h("p", { class: "verdict" }, outcomeMark(sheet.outcome.ended), sheet.outcome.code ? ` ${sheet.outcome.code}` : "", h("br"), OUTCOMES[sheet.outcome.ended]),
    h("p", {}, sheet.outcome.text),
    found && facts(
      ["As found", `OP ${figure(found.op_eu, sheet.op_span.unit)}, SP ${figure(found.sp_eu, sheet.pv_span.unit, 5)}, PV ${figure(found.pv_eu, sheet.pv_span.unit)}, mode ${found.mode}`],
      found.settings.length && ["Settings as found", settingsLine(found.settings)],
    ),
  );
}

function findingsPart(sheet) {
  const findings = sheet.findings;
  if (!findings) return null;
  if (findings.refusal) return part("Findings", {}, h("p", {}, "Nothing is concluded. ", findings.refusal));
  return part(
    "Findings",
    {},
    h(
      "div",
      { class: "concluded" },
      findings.concluded.map((one) =>
        h("div", { class: "figure big" }, h("span", { class: "figure-label" }, one.label), h("span", { class: "figure-text" }, figure(one.amount, one.unit)),
          h("span", { class: "figure-more" }, intervalWords(one))),
      ),
    ),
    h("p", { class: "quiet" }, `Concluded by ${findings.method}; times by the ${findings.time_base}.`),
    findings.because.length > 0 && [h("h3", {}, "Why the intervals are as wide as they are"), h("ul", {}, findings.because.map((one) => h("li", {}, one)))],
    findings.cautions.length > 0 && h("ul", { class: "findings" }, findings.cautions.map((one) => h("li", {}, mark("caution", "caution"), ` ${one}`))),
    h(
      "details",
      {},
      h("summary", {}, `${findings.cycles.length} whole cycles, and the points seen`),
      findings.cycles.length > 0 && table(
        ["Cycle", ["Period s", { class: "number" }], [`PV half-swing %`, { class: "number" }], ["OP half-step %", { class: "number" }]],
        findings.cycles.map((one, at) => [String(at + 1), [one.period_s.toFixed(3), { class: "number" }], [rounded(one.pv_amplitude_pct), { class: "number" }], [rounded(one.amplitude_pct), { class: "number" }]]),
      ),
      h("ul", {}, findings.seen.map((one) => h("li", {}, `${one.method}: gain ${figure(one.gain, "%PV/%OP")} and phase ${figure(one.phase_rad, "rad")} at ${figure(one.frequency_rad_per_s, "rad/s")}`))),
    ),
    sheet.costs.length > 0 && [h("h3", {}, "What this test can't tell"), h("ul", {}, sheet.costs.map((one) => h("li", {}, one)))],
  );
}

function intervalWords(one) {
  if (one.low === null || one.high === null) return "no interval";
  const claim = one.level === null ? "bounds" : `${Math.round(100 * one.level)} % interval`;
  return `${rounded(one.low)} to ${rounded(one.high)}, ${claim}`;
}

// The sheet has them in the order of how well they suit; the first few are what a person compares.
const SHOWN_PROPOSALS = 8;

function proposalsPart(sheet, plan) {
  const proposals = sheet.proposals.filter((one) => one.settings.length);
  const not = sheet.proposals.filter((one) => one.not_proposed_because !== null);
  if (!sheet.proposals.length) return null;
  const fields = proposals[0]?.settings ?? [];
  const figures = [...new Map(proposals.flatMap((one) => one.figures).map((one) => [one.name, one])).values()].slice(0, FIGURES_COMPARED);
  const number = (text) => [text, { class: "number" }];
  const amounts = (settings) => fields.map((field) => number(figure(settings.find((one) => one.name === field.name)?.amount ?? null)));
  const expected = (told) => figures.map((each) => number(rounded(told.find((own) => own.name === each.name)?.amount ?? null)));
  const asFound = ["as found", "", ...amounts(sheet.as_found?.settings ?? []), number("1"), ...expected(sheet.as_found_figures ?? [])];
  const row = (one) => [
    h("span", {}, one.title, one.is_recommended && h("span", { class: "recommended" }, " \u25c6 recommended")),
    may("write") && sheet.outcome.ended === "COMPLETE"
      ? h("button", { "aria-label": `Plan the change to ${one.title}`, onclick: () => plan("plan_change", { sheet: sheet.sheet_id, proposal: one.name }) }, "Plan")
      : "",
    ...amounts(one.settings),
    number(one.gain_factor === null ? "not known" : rounded(one.gain_factor)),
    ...expected(one.figures),
  ];
  const titles = ["Rule", "Change", ...fields.map((one) => number(`${one.label} ${one.unit}`)), number("Gain \u00d7 present"), ...figures.map((one) => number(`${one.label} ${one.unit}`))];
  const compared = (some) => table(titles, [asFound, ...some.map(row)], { class: "proposals" });
  const [first, others] = [proposals.slice(0, SHOWN_PROPOSALS), proposals.slice(SHOWN_PROPOSALS)];
  return part(
    "Proposals",
    {},
    sheet.proposals_reason && h("p", {}, proposals.some((one) => one.is_recommended) ? "\u25c6 recommended: " : "Nothing is recommended: ", sheet.proposals_reason),
    first.length > 0 && compared(first),
    others.length > 0 && h("details", {}, h("summary", {}, `${others.length} more rules`), compared(others)),
    h("details", {}, h("summary", {}, "Each forecast, what speaks against it, and where it comes from"), proposals.map((one) => h("div", {}, h("h3", {}, one.title), h("p", { class: "quiet" }, one.source), one.figures.length > 0 && h("p", {}, `Forecast: ${one.figures.map((each) => `${each.label} ${rounded(each.amount, each.unit)}`).join(", ")}.`), one.cautions.length > 0 && h("ul", {}, one.cautions.map((each) => h("li", {}, each)))))),
    not.length > 0 && h("details", {}, h("summary", {}, `${not.length} rules propose nothing here`), h("ul", {}, not.map((one) => h("li", {}, h("strong", {}, one.title), ` ${one.not_proposed_because}`)))),
  );
}

async function openPlan(page, act, fields, place, onChanged) {
  set(place, part("Confirmation", {}, h("p", {}, "Reading the controller …")));
  place.scrollIntoView({ block: "start" });
  try {
    const answer = await perform(act, fields);
    set(place, planPart(page, answer, place, onChanged));
    attend(place);
    place.scrollIntoView({ block: "start" });
  } catch (fault) {
    set(place, part("Confirmation", {}, h("p", { class: "trouble", role: "alert" }, `Nothing was written. ${fault.message}`)));
  }
}

function planPart(page, plan, place, onChanged) {
  const trouble = h("p", { class: "trouble", role: "alert" });
  const boxes = plan.cautions.map((caution, at) => [caution, h("input", { type: "checkbox", id: `write-caution-${at}`, required: true })]);
  const typed = h("input", { id: "digest", class: "code", autocomplete: "off", spellcheck: "false", required: true });
  const secret = secretField("write-secret");
  const button = h("button", { class: "main" }, "Write exactly these values");
  const until = Date.now() + 1000 * plan.good_for_s;
  const left = h("span", { class: "quiet" });
  const timer = setInterval(() => {
    const seconds = Math.max(0, Math.round((until - Date.now()) / 1000));
    say(left, seconds ? `This plan is good for ${seconds} s more.` : "This plan has run out; plan the change again.");
    button.disabled = button.disabled || seconds === 0;
    if (!seconds || !left.isConnected) clearInterval(timer);
  }, 1000);
  const drop = async () => {
    clearInterval(timer);
    await perform("drop_plan", { loop: plan.loop }).catch(() => {});
    set(place);
    page.tell("The plan was dropped; nothing was written.");
  };
  const submit = async (event) => {
    event.preventDefault();
    say(trouble, "");
    button.disabled = true;
    try {
      const written = await perform("confirm_change", { loop: plan.loop, typed: typed.value, secret: secret.value });
      clearInterval(timer);
      set(place, writtenPart(plan, written));
      attend(place);
      await onChanged();
    } catch (fault) {
      button.disabled = false;
      secret.value = "";
      say(trouble, `Nothing was written. ${fault.message}`);
      typed.focus();
    }
  };
  return part(
    "Confirmation",
    { class: "part confirmation" },
    h("p", {}, `${plan.loop}: ${plan.source}. ${plan.how}`),
    table(
      ["Setting", ["Holds now", { class: "number" }], ["Will hold", { class: "number" }], "Unit"],
      plan.lines.map((one) => [
        one.label,
        [exact(one.holds_now), { class: "number" }],
        [one.is_changed ? exact(one.will_hold) : "unchanged", { class: one.is_changed ? "number changed" : "number" }],
        one.unit,
      ]),
    ),
    h(
      "form",
      { onsubmit: submit },
      h("fieldset", {}, h("legend", {}, "Read and accept each caution"), boxes.map(([caution, box]) => h("div", { class: "caution-row" }, box, h("label", { for: box.id }, caution)))),
      h("div", { class: "fields" },
        h("label", { for: "digest" }, "Type the digits that stand for exactly these values: ", h("code", { class: "digest" }, plan.digest)), typed,
        h("label", { for: "write-secret" }, `Secret of ${session.name}`), secret,
      ),
      trouble,
      h("div", { class: "acts" }, button, h("button", { type: "button", onclick: drop }, "Don't write"), left),
    ),
  );
}

function writtenPart(plan, written) {
  const read = new Map(written.read_back.map((one) => [one.label, one]));
  return part(
    "Confirmation",
    { class: "part confirmation" },
    h("p", { class: "verdict", role: "status" }, outcomeMark(written.outcome), ` ${written.text}`),
    table(
      ["Setting", ["Confirmed", { class: "number" }], ["Read back", { class: "number" }], "Unit"],
      plan.lines.map((one) => [
        one.label,
        [exact(one.will_hold), { class: "number" }],
        [exact(read.get(one.label)?.amount ?? null), { class: "number" }],
        one.unit,
      ]),
    ),
    h("p", {}, written.read_back_equal ? mark("good", "read back equal") : mark("stop", "read back NOT equal")),
  );
}

function restorePart(sheet, plan) {
  if (!sheet.as_found?.settings.length || !may("write")) return null;
  return part(
    "Settings as found",
    {},
    h("p", {}, `${settingsLine(sheet.as_found.settings)}. They can be written back, with the same confirmation.`),
    h("div", { class: "acts" }, h("button", { onclick: () => plan("plan_restore", { sheet: sheet.sheet_id }) }, "Plan the way back to these")),
  );
}

function addendaPart(addenda) {
  if (!addenda.length) return null;
  return part(
    "Added later",
    {},
    h("ol", { class: "story" }, addenda.map((one) =>
      h("li", {}, `${instant(one.utc)}, ${one.person.name}: ${one.kind} `, one.result && outcomeMark(one.result), one.source ? ` ${one.source}` : "", one.text ? `. ${one.text}` : "",
        one.read_back?.length ? h("div", { class: "quiet" }, `read back ${settingsLine(one.read_back)}`) : null),
    )),
  );
}

function recordPart({ sheet, hash }) {
  const file = (what, word) => h("a", { class: "file", href: `/files/${encodeURIComponent(sheet.sheet_id)}/${what}`, target: what === "page" ? "_blank" : null, rel: "noopener" }, word);
  return part(
    "Record",
    {},
    facts(
      ["Sheet", h("a", { href: `#/sheet/${encodeURIComponent(sheet.sheet_id)}` }, sheet.sheet_id)],
      ["Samples, writes", `${sheet.samples.t_s.length}, ${sheet.writes.length}`],
      ["Hash", h("code", { class: "hash" }, hash)],
    ),
    h("p", { class: "files" }, file("pdf", "Paper to sign (PDF)"), file("page", "As plain text"), file("samples", "Samples (CSV)"), file("writes", "Writes (CSV)"), file("json", "Everything (JSON)")),
  );
}

function settingsLine(settings) {
  return settings.map((one) => `${one.label} ${exact(one.amount, one.unit)}`).join(", ");
}
