// The working sheet of one loop, from the look to the sheet that is kept.

import { ask, may, perform, session, Stream } from "./api.js";
import { attend, duration, exact, facts, figure, h, instant, mark, part, reading, rounded, say, set, table } from "./dom.js";
import { stateMark } from "./loops.js";
import { secretField } from "./persons.js";
import { sheetParts } from "./sheet.js";
import { Trend } from "./trend.js";

export function loopView(page, name) {
  const top = h("div", {});
  const readiness = h("div", {});
  const permission = h("div", {});
  const running = h("div", {});
  const kept = h("div", {});
  const element = h("div", { class: "sheet" }, top, running, kept, readiness, permission);
  let test = null;
  let shownSheet = null;
  let identity = null;
  let isRead = false;

  const look = lookPart(page, name, readiness, permission);

  const onAnswer = (live) => {
    identity ??= identityPart(live.loop, top);
    identity.update(live.loop);
    if (!isRead) {
      isRead = true;
      look.begin(live.loop);
    }
    look.setBusy(live.loop.doing);
    if (live.test && test?.id !== live.test.test) {
      test = testPart(page, name, live, running);
      shownSheet = null;
      set(kept);
    }
    if (live.test) test.update(live);
    if (live.sheet && live.sheet !== shownSheet) {
      shownSheet = live.sheet;
      ask("open_sheet", { sheet: live.sheet }).then(
        (answer) => set(kept, sheetParts(page, answer, { isLive: true })),
        (fault) => page.tell(fault.message, true),
      );
    }
  };
  const stream = new Stream("watch_loop", { loop: name }, {
    onAnswer,
    onLost: page.onAlarm,
    onBack: () => page.onAlarm(null),
    onRefused: (fault) => page.tell(fault.message, true),
  });
  return { element, leave: () => stream.close() };
}

function identityPart(line, place) {
  const state = h("span", {});
  const now = h("dd", {});
  const settings = h("dd", {});
  const read = h("dd", {});
  const notes = h("div", {});
  const rest = h("div", {});
  set(
    rest,
    h(
      "dl",
      { class: "facts" },
      h("dt", {}, "Now"), now,
      h("dt", {}, "Settings"), settings,
      h("dt", {}, "Controller"), h("dd", {}, `${line.controller}; plant unit ${line.unit}`),
      h("dt", {}, "Read"), read,
    ),
    h("p", {}, h("a", { href: `#/archive/${encodeURIComponent(line.loop)}` }, `All sheets of ${line.loop}`)),
  );
  set(place, h("h1", {}, line.loop, " ", h("small", {}, line.service)), h("p", { class: "state-line" }, state), notes, rest);
  let before = "";
  return {
    update(one) {
      const told = JSON.stringify([one.doing, one.by, one.fault, one.mode, one.is_settled, one.notes]);
      if (told !== before) {
        before = told;
        set(state, stateMark(one));
        rest.hidden = state.parentElement.hidden = one.doing === "test"; // read before it began, and the test itself tells what is so now
        set(notes, one.notes.map((note) => h("p", { class: one.is_settled ? "quiet" : "trouble" }, note)));
      }
      say(now, `PV ${reading(one.pv_eu, one.pv_unit)}, SP ${reading(one.sp_eu, one.pv_unit)}, OP ${reading(one.op_eu, one.op_unit)}, mode ${one.mode ?? "not known"}`);
      say(settings, one.settings.map((each) => `${each.label} ${exact(each.amount, each.unit)}`).join(", ") || "not read");
      say(read, one.fault ? `${instant(one.read_utc)}; since then: ${one.fault}` : instant(one.read_utc));
    },
  };
}

function lookPart(page, name, readiness, permission) {
  const button = h("button", { onclick: () => look() }, "Look at the loop");
  const result = h("div", { "aria-live": "polite" });
  let line = null;

  async function look() {
    button.disabled = true;
    set(permission);
    set(result, h("p", {}, "Looking …"));
    try {
      const answer = await perform("look", { loop: name });
      set(result, lookResult(answer, line));
      if (answer.check.fit) set(permission, permissionPart(page, name, answer, line, () => { set(permission); set(result); }));
    } catch (fault) {
      set(result, h("p", { class: "trouble" }, fault.message));
    } finally {
      button.disabled = false;
      if (document.activeElement === document.body) button.focus();
    }
  }

  return {
    begin(first) {
      line = first;
      set(readiness, part("Readiness", {}, h("p", {}, "A look reads the loop for a few seconds and writes nothing. It says what would stop a test."), h("div", { class: "acts" }, button), result));
    },
    setBusy(doing) {
      if (doing !== "look") button.disabled = Boolean(doing);
      readiness.hidden = permission.hidden = doing === "test";
    },
  };
}

function lookResult(answer, line) {
  const { check, settings } = answer;
  const order = { stop: 0, caution: 1, note: 2 };
  const findings = [...check.findings].sort((a, b) => order[a.level] - order[b.level]);
  return [
    h("p", { class: "verdict" }, check.fit ? mark("good", "fit to test") : mark("stop", "not fit to test"), ` as of ${instant(answer.utc)}`),
    facts(
      ["PV, SP, OP", `${reading(check.pv_eu, line.pv_unit)}, ${reading(check.sp_eu, line.pv_unit)}, ${reading(check.op_eu, line.op_unit)}; mode ${check.mode ?? "not known"}`],
      ["Settings", settings.map((one) => `${one.label} ${exact(one.amount, one.unit)}`).join(", ") || "not read"],
      ["One reading", check.round_trip_s === null ? "not known" : `${(1000 * check.round_trip_s).toFixed(1)}\u00a0ms`],
    ),
    findings.length > 0 && h(
      "ul",
      { class: "findings" },
      findings.map((one) => h("li", {}, mark(one.level, one.level), " ", h("strong", {}, one.code), ` ${one.text}.`, one.remedy && h("span", { class: "remedy" }, ` ${one.remedy[0].toUpperCase()}${one.remedy.slice(1)}.`))),
    ),
  ];
}

function permissionPart(page, name, answer, line, onStarted) {
  if (!may("test")) {
    const why = session.isWatchOnly ? "This service only watches." : `${session.name} may not start tests here.`;
    return part("Permission", {}, h("p", {}, why));
  }
  const trouble = h("p", { class: "trouble", role: "alert" });
  const boxes = answer.cautions.map((caution, at) => [caution, h("input", { type: "checkbox", id: `caution-${at}`, required: true })]);
  const field = (id, hint) => h("input", { id, name: id, required: true, minlength: 3, maxlength: 300, "aria-describedby": hint });
  const owner = field("loop-owner");
  const protection = field("protection");
  const permit = field("permit");
  const typed = h("input", { id: "typed-loop", autocomplete: "off", required: true, class: "code" });
  const secret = secretField("start-secret");
  const button = h("button", { class: "main" }, "Start the test: it moves the output");
  const submit = async (event) => {
    event.preventDefault();
    say(trouble, "");
    button.disabled = true;
    try {
      await perform("start_test", {
        loop: name,
        typed_loop: typed.value,
        accepted: boxes.filter(([, box]) => box.checked).map(([caution]) => caution),
        loop_owner: owner.value,
        protection: protection.value,
        permit: permit.value,
        secret: secret.value,
      });
      onStarted();
      window.scrollTo(0, 0);
    } catch (fault) {
      say(trouble, fault.message);
      secret.value = "";
      secret.focus();
    } finally {
      button.disabled = false;
    }
  };
  return part(
    "Permission",
    {},
    h("ul", { class: "told-before" }, answer.extremes.map((one) => h("li", {}, one))),
    h("details", {}, h("summary", {}, answer.writes[0].replace(/:$/, "")), h("ul", {}, answer.writes.slice(1).map((one) => h("li", {}, one.trim())))),
    h(
      "form",
      { onsubmit: submit },
      h("fieldset", {}, h("legend", {}, "Read and accept each caution"), boxes.map(([caution, box]) => h("div", { class: "caution-row" }, box, h("label", { for: box.id }, caution)))),
      h("div", { class: "fields" },
        h("label", { for: "loop-owner" }, "Loop owner who gave permission"), owner,
        h("label", { for: "protection" }, "What protects the plant meanwhile"), protection,
        h("label", { for: "permit" }, "Permit number"), permit,
        h("label", { for: "typed-loop" }, `Type ${line.loop}`), typed,
        h("label", { for: "start-secret" }, `Secret of ${session.name}`), secret,
      ),
      trouble,
      h("div", { class: "acts" }, button),
    ),
  );
}

function testPart(page, name, first, place) {
  const line = first.loop;
  const trend = new Trend({ pv: line.pv_unit, op: line.op_unit });
  const phase = h("span", { class: "phase" });
  const stage = h("span", {});
  const left = h("span", { class: "left" });
  const numbers = h("div", { class: "numbers" });
  const watch = h("div", {});
  const cycles = h("div", {});
  const story = h("div", {});
  const keep = h("button", { onclick: () => wish("finish_test") }, "Finish now and keep");
  const smaller = h("button", { onclick: () => wish("smaller_steps") }, "Smaller steps");
  const wide = h("button", { "aria-pressed": "false", onclick: () => {
    trend.isWide = !trend.isWide;
    wide.setAttribute("aria-pressed", String(trend.isWide));
    trend.draw();
  } }, "Show PV limits");
  const acts = h("div", { class: "acts" }, keep, smaller, wide);
  const wish = async (act) => {
    try {
      page.tell((await perform(act, { loop: name })).text);
    } catch (fault) {
      page.tell(fault.message, true);
    }
  };
  set(place, part("The test", { class: "part test" }, h("p", { class: "state-line" }, phase, stage, left), h("figure", {}, trend.element), acts, numbers, watch, cycles, story));
  if (document.activeElement === document.body) attend(place);
  let cyclesTold = -1;
  let storyTold = -1;
  let watchTold = "";
  return {
    id: first.test.test,
    update({ test, trend: news, fault }) {
      if (news) trend.add(news);
      trend.draw({
        reference: test.reference_eu, hysteresis: test.hysteresis_eu,
        pvLow: test.pv_low_eu, pvHigh: test.pv_high_eu, opLow: test.op_low_eu, opHigh: test.op_high_eu,
      });
      say(phase, test.phase);
      phase.className = `phase ${test.phase.toLowerCase()}`;
      say(stage, test.is_over ? ` ${fault || test.because}` : ` ${test.stage}`);
      say(left, test.is_over ? "" : ` ${duration(test.elapsed_s)} gone, at most ${duration(test.left_at_most_s)} left`);
      const isTesting = test.phase === "TESTING";
      keep.hidden = smaller.hidden = test.is_over || !may("test");
      keep.disabled = smaller.disabled = !isTesting;
      numbers.hidden = watch.hidden = test.is_over; // the last readings, taken before the loop was given back
      set(numbers, figures(test, line));
      const told = JSON.stringify(test.watch);
      if (told !== watchTold) {
        watchTold = told;
        set(watch, watchTable(test.watch));
      }
      if (test.cycles.length !== cyclesTold) {
        cyclesTold = test.cycles.length;
        set(cycles, cycleTable(test, line));
      }
      if (test.story.length !== storyTold) {
        storyTold = test.story.length;
        set(story, h("details", {}, h("summary", {}, `What happened (${storyTold})`), h("ol", { class: "story" }, test.story.map((one) => h("li", {}, `${one.t_s.toFixed(1)}\u00a0s  ${one.kind}: ${one.code ? `${one.code} ` : ""}${one.text}${one.by ? ` (by ${one.by})` : ""}`)))));
      }
    },
  };
}

function figures(test, line) {
  const figureBox = (label, text) => h("div", { class: "figure" }, h("span", { class: "figure-label" }, label), h("span", { class: "figure-text" }, text));
  return [
    figureBox("PV", reading(test.pv_eu, line.pv_unit)),
    figureBox("SP", reading(test.sp_eu, line.pv_unit)),
    figureBox("OP now, asked for", `${reading(test.op_eu, line.op_unit)}, ${reading(test.asked_op_eu, line.op_unit)}`),
    figureBox("Mode", test.mode ?? "not known"),
    figureBox("PV may be", `${figure(test.pv_low_eu)} to ${figure(test.pv_high_eu, line.pv_unit)}`),
    figureBox("OP may be", `${figure(test.op_low_eu)} to ${figure(test.op_high_eu, line.op_unit)}`),
    figureBox("Hysteresis", test.hysteresis_eu === null ? "not yet" : `\u00b1${figure(test.hysteresis_eu, line.pv_unit, 3)}`),
    figureBox("Noise at rest", test.noise_eu === null ? "not yet" : figure(test.noise_eu, line.pv_unit, 3)),
  ];
}

function watchTable(watch) {
  if (!watch.length) return null;
  return table(
    ["Watched", "Reads", "May be", ""],
    watch.map((one) => [
      one.name.replaceAll("_", " "),
      figure(one.reading_eu),
      one.low_eu === one.high_eu ? figure(one.low_eu) : `${figure(one.low_eu)} to ${figure(one.high_eu)}`,
      one.holds ? mark("good", "holds") : mark("stop", one.meaning || "does not hold"),
    ]),
  );
}

function cycleTable(test, line) {
  if (!test.cycles.length) return h("p", { class: "quiet" }, "No whole cycle yet.");
  const rows = test.cycles.map((one, at) => [
    [String(at + 1), { class: "number" }],
    [one.period_s.toFixed(2), { class: "number" }],
    [rounded(one.pv_amplitude_eu), { class: "number" }],
    [rounded(one.op_amplitude_eu), { class: "number" }],
    [one.rough_ultimate_gain === null ? "none" : rounded(one.rough_ultimate_gain), { class: "number" }],
    one.is_usable ? "counts" : "doesn't count",
  ]);
  const head = (text) => [text, { class: "number" }];
  return [
    h("p", { class: "quiet" }, `${test.usable_cycles} ${test.usable_cycles === 1 ? "cycle counts" : "cycles count"}; the test ends when ${test.cycles_to_agree} agree, at ${test.cycles_at_most} at the latest.`),
    table([head("Cycle"), head("Period s"), head(`PV half-swing ${line.pv_unit}`), head(`OP half-step ${line.op_unit}`), head("Rough gain %/%"), ""], rows.slice(-6)),
  ];
}
