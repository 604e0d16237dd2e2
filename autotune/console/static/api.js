// The daemon, as far as a page reaches it.

export const session = { csrf: "", name: "", roles: [], isLocked: false, isWatchOnly: false };

/** A refusal of the daemon, or of the way to it. */
export class Refused extends Error {
  constructor({ code, reason, remedy }) {
    super(remedy ? `${reason}. ${remedy[0].toUpperCase()}${remedy.slice(1)}.` : reason);
    this.code = code;
  }
}

const NOT_REACHED = { code: "NOT_REACHED", reason: "The service did not answer", remedy: "use the plant's own panel" };

async function told(request) {
  let body;
  try {
    body = await (await request).json();
  } catch {
    throw new Refused(NOT_REACHED);
  }
  if (body.refusal) {
    if (body.refusal.code === "LOCKED") document.dispatchEvent(new Event("locked"));
    if (["SIGN_IN", "REMOVED"].includes(body.refusal.code)) document.dispatchEvent(new Event("signed-out"));
    throw new Refused(body.refusal);
  }
  return body.answer;
}

/** A question; nothing changes by it. */
export function ask(act, fields = {}) {
  return told(fetch(`/api/${act}?${new URLSearchParams(fields)}`, { credentials: "same-origin" }));
}

/** An act. */
export function perform(act, fields = {}) {
  const headers = { "Content-Type": "application/json", "X-CSRF-Token": session.csrf };
  return told(fetch(`/api/${act}`, { method: "POST", credentials: "same-origin", headers, body: JSON.stringify(fields) }));
}

/** Take over who is signed in, as the daemon says. */
export function remember(answer) {
  session.csrf = answer.csrf;
  session.name = answer.name;
  session.roles = answer.roles;
  session.isLocked = answer.is_locked;
  session.isWatchOnly = answer.is_watch_only;
}

/** Whether the person at this screen has a role, and the service acts at all. */
export function may(role) {
  return session.roles.includes(role) && !session.isWatchOnly;
}

const SILENT_AFTER_MS = 3500;
const REOPEN_EVERY = 4; // seconds

/** A stream that comes back by itself.  `onLost(since)` is heard once when it falls silent, `onBack` when it speaks again, `onRefused(fault)` when it is told no. */
export class Stream {
  constructor(act, fields, { onAnswer, onLost, onBack, onRefused }) {
    this.lastHeard = new Date();
    this.isLost = false;
    this.url = `/events/${act}?${new URLSearchParams(fields)}`;
    this.silentFor = 0;
    this.heard = (answer) => {
      this.silentFor = 0;
      this.lastHeard = new Date();
      if (this.isLost) {
        this.isLost = false;
        onBack();
      }
      onAnswer(answer);
    };
    this.watching = setInterval(() => {
      const silent = new Date() - this.lastHeard;
      if (silent > SILENT_AFTER_MS && !this.isLost) {
        this.isLost = true;
        onLost(this.lastHeard);
      }
      if (silent > SILENT_AFTER_MS && ++this.silentFor % REOPEN_EVERY === 1) this.reopen();
    }, 1000);
    this.open();
  }

  open() {
    this.source = new EventSource(this.url);
    this.source.onmessage = (event) => this.heard(JSON.parse(event.data));
    this.source.addEventListener("refusal", (event) => {
      const refusal = JSON.parse(event.data);
      this.source.close(); // it is opened again when the silence lasts
      if (["SIGN_IN", "REMOVED"].includes(refusal.code)) document.dispatchEvent(new Event("signed-out"));
      else onRefused(new Refused(refusal));
    });
  }

  reopen() {
    this.source.close();
    this.open();
  }

  close() {
    clearInterval(this.watching);
    this.source.close();
  }
}
