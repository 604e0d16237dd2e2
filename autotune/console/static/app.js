// The frame around every sheet: who is signed in, where one is, what is under way, and the way to end it.

import { ask, perform, remember, session, Stream } from "./api.js";
import { clock, h, put, say, set } from "./dom.js";
import { archiveView, compareView } from "./archive.js";
import { controllersView } from "./controllers.js";
import { indexView } from "./loops.js";
import { loopView } from "./loop.js";
import { sheetView } from "./sheet.js";
import { signInForm, unlockForm } from "./persons.js";
import { Reach } from "./reach.js";

const WHO_EVERY_MS = 10000;
const TOUCH_EVERY_MS = 15000;

const content = document.getElementById("content");
const top_ = document.getElementById("top");
const alarm = document.getElementById("alarm");
const lock = document.getElementById("lock");
const toldLine = document.getElementById("told");
const reach = new Reach(document.getElementById("reach"), tell);

let leave = () => {};
let stream = null;
let listeners = new Set();
let lastLoops = null;
let isSignedIn = false;

/** A sentence at the foot of the screen, also for screen readers. */
function tell(text, isTrouble = false) {
  toldLine.classList.toggle("trouble", isTrouble);
  say(toldLine, text);
  clearTimeout(tell.timer);
  if (!isTrouble) tell.timer = setTimeout(() => say(toldLine, ""), 8000);
}

/** What the views share. */
const page = {
  tell,
  onLoops(listener) {
    listeners.add(listener);
    if (lastLoops) listener(lastLoops);
    return () => listeners.delete(listener);
  },
  onAlarm(since) {
    if (since) {
      say(alarm, `No live data since ${clock(since)}. Abort is not reachable from here: use the plant's own panel.`);
      alarm.hidden = false;
    } else {
      alarm.hidden = true;
      say(alarm, "");
    }
    document.body.classList.toggle("lost", Boolean(since));
  },
};

const ROUTES = [
  [/^#\/loop\/(.+)$/, (name) => loopView(page, decodeURIComponent(name))],
  [/^#\/sheet\/(.+)$/, (id) => sheetView(page, decodeURIComponent(id))],
  [/^#\/archive(?:\/(.+))?$/, (loop) => archiveView(page, loop ? decodeURIComponent(loop) : "")],
  [/^#\/compare\/([^/]+)\/([^/]+)$/, (a, b) => compareView(page, decodeURIComponent(a), decodeURIComponent(b))],
  [/^#\/controllers$/, () => controllersView(page)],
  [/^.*$/, () => indexView(page)],
];

async function route() {
  if (!isSignedIn) return;
  leave();
  leave = () => {};
  drawTop();
  for (const [pattern, open] of ROUTES) {
    const found = pattern.exec(location.hash);
    if (!found) continue;
    try {
      const view = open(...found.slice(1));
      leave = view.leave ?? (() => {});
      set(content, view.element);
      await view.ready;
    } catch (fault) {
      set(content, h("div", { class: "sheet" }, h("h1", {}, "Not to be shown"), h("p", {}, fault.message)));
    }
    break;
  }
  window.scrollTo(0, 0);
}

function drawTop() {
  const here = location.hash || "#/";
  const link = (to, word) => h("a", { href: to, "aria-current": here === to ? "page" : null }, word);
  set(
    top_,
    h("span", { class: "house" }, "Autotune"),
    isSignedIn && h("nav", { "aria-label": "Sheets" }, link("#/", "Loops"), link("#/archive", "Archive"), link("#/controllers", "Controllers")),
    session.isWatchOnly && isSignedIn && h("span", { class: "watch-only" }, "watch only: nothing can be started here"),
    isSignedIn && h("span", { class: "who" }, session.name, " ", h("button", { class: "plain", onclick: signOut }, "Sign out")),
  );
}

async function signOut() {
  try {
    await perform("sign_out");
  } finally {
    signedOut();
  }
}

function signedOut() {
  isSignedIn = false;
  stream?.close();
  stream = null;
  leave();
  leave = () => {};
  lastLoops = null;
  reach.show([]);
  page.onAlarm(null);
  hideLock();
  drawTop();
  set(content, signInForm(signedIn));
  content.querySelector("input")?.focus();
}

function signedIn(answer) {
  remember(answer);
  isSignedIn = true;
  stream?.close();
  stream = new Stream("watch_loops", {}, {
    onAnswer(answered) {
      lastLoops = answered;
      reach.show(answered.loops.filter((line) => line.doing === "test"));
      for (const listener of listeners) listener(answered);
    },
    onLost: page.onAlarm,
    onBack: () => page.onAlarm(null),
    onRefused: (fault) => tell(fault.message, true),
  });
  if (answer.is_locked) showLock();
  route();
}

function showLock() {
  if (!lock.hidden || !isSignedIn) return;
  session.isLocked = true;
  content.inert = true;
  top_.inert = true;
  set(lock, unlockForm((answer) => {
    remember(answer);
    hideLock();
    content.focus();
  }));
  lock.hidden = false;
  lock.querySelector("input")?.focus();
}

function hideLock() {
  lock.hidden = true;
  set(lock);
  content.inert = false;
  top_.inert = false;
}

let touchedAt = 0;
function touched() {
  const now = Date.now();
  if (isSignedIn && !session.isLocked && now - touchedAt > TOUCH_EVERY_MS) {
    touchedAt = now;
    perform("touch").catch(() => {});
  }
}

for (const kind of ["pointerdown", "keydown"]) document.addEventListener(kind, touched, { passive: true });
document.addEventListener("locked", showLock);
document.addEventListener("signed-out", () => isSignedIn && signedOut());
window.addEventListener("hashchange", route);
setInterval(async () => {
  if (!isSignedIn) return;
  const who = await ask("who_am_i").catch(() => null);
  if (who?.is_locked) showLock();
}, WHO_EVERY_MS);

put(top_, h("span", { class: "house" }, "Autotune"));
ask("who_am_i").then(signedIn, signedOut);
