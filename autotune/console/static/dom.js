// Small parts: elements, figures, instants.

const SVG = "http://www.w3.org/2000/svg";

/** An element with attributes (`on...` are listeners, `true` is a bare attribute) and children; texts stay texts. */
export function h(name, attributes = {}, ...children) {
  return fill(document.createElement(name), attributes, children);
}

/** The same in SVG. */
export function s(name, attributes = {}, ...children) {
  return fill(document.createElementNS(SVG, name), attributes, children);
}

function fill(element, attributes, children) {
  for (const [key, setting] of Object.entries(attributes)) {
    if (setting === false || setting === null || setting === undefined) continue;
    if (key.startsWith("on")) element.addEventListener(key.slice(2), setting);
    else element.setAttribute(key, setting === true ? "" : String(setting));
  }
  put(element, ...children);
  return element;
}

/** Append children; null and false are left out, arrays are flattened. */
export function put(element, ...children) {
  for (const child of children.flat(Infinity)) {
    if (child === null || child === undefined || child === false) continue;
    element.append(child);
  }
  return element;
}

/** Replace all children. */
export function set(element, ...children) {
  element.replaceChildren();
  return put(element, ...children);
}

/** Set a text only where it changes, so that screen readers and selections are left alone. */
export function say(element, text) {
  if (element.textContent !== text) element.textContent = text;
}

/** A live reading with its unit: three to five digits that stand still while it moves. */
export function reading(number, unit = "") {
  if (number === null || number === undefined) return "not known";
  const size = Math.abs(number);
  const digits = size >= 1000 ? 0 : size >= 100 ? 1 : size >= 10 ? 2 : 3;
  return spaced(number.toFixed(digits), unit);
}

/** A figure to `digits` significant digits. */
export function figure(number, unit = "", digits = 4) {
  if (number === null || number === undefined) return "not known";
  return spaced(String(Number(number.toPrecision(digits))), unit);
}

/** A rounded figure that keeps its zeros, for what stands in a column or bounds another. */
export function rounded(number, unit = "", digits = 3) {
  if (number === null || number === undefined) return "not known";
  const size = Math.abs(number);
  return size !== 0 && (size < 1e-4 || size >= 1e6) ? figure(number, unit, digits) : spaced(plainDigits(number, digits), unit);
}

function plainDigits(number, digits) {
  const text = number.toPrecision(digits);
  return text.includes("e") ? String(Number(text)) : text;
}

/** A figure that a person may have to type: as many digits as single precision holds. */
export function exact(number, unit = "") {
  return figure(number, unit, 7);
}

function spaced(text, unit) {
  const signed = text.replace("-", "\u2212");
  return unit ? `${signed}\u00a0${unit}` : signed;
}

/** Seconds as 1:05 or 0.8 s. */
export function duration(seconds) {
  if (seconds < 10) return `${seconds.toFixed(1)}\u00a0s`;
  const whole = Math.round(seconds);
  return `${Math.floor(whole / 60)}:${String(whole % 60).padStart(2, "0")}\u00a0min`;
}

/** An instant in local time with its offset. */
export function instant(iso) {
  if (!iso) return "never";
  const at = new Date(iso);
  const minutes = -at.getTimezoneOffset();
  const sign = minutes < 0 ? "\u2212" : "+";
  const offset = `${sign}${two(Math.floor(Math.abs(minutes) / 60))}:${two(Math.abs(minutes) % 60)}`;
  return `${at.getFullYear()}-${two(at.getMonth() + 1)}-${two(at.getDate())} ${clock(at)} ${offset}`;
}

/** Only the time of the day. */
export function clock(at) {
  return `${two(at.getHours())}:${two(at.getMinutes())}:${two(at.getSeconds())}`;
}

function two(number) {
  return String(number).padStart(2, "0");
}

/** A numbered part of the sheet. */
export function part(title, attributes, ...children) {
  const id = `part-${title.toLowerCase().replace(/[^a-z]+/g, "-")}`;
  return h("section", { class: "part", "aria-labelledby": id, ...attributes }, h("h2", { id }, title), ...children);
}

/** Put the keyboard where something new has come, at its heading. */
export function attend(element) {
  const heading = element.querySelector("h1, h2");
  if (!heading) return;
  heading.tabIndex = -1;
  heading.focus();
}

/** Labels and what stands beside them. */
export function facts(...rows) {
  return h("dl", { class: "facts" }, rows.filter(Boolean).map(([label, what]) => [h("dt", {}, label), h("dd", {}, what)]));
}

/** A table; a cell that is an array is [text, attributes]. */
export function table(titles, rows, attributes = {}) {
  const cell = (name, one, more = {}) =>
    Array.isArray(one) ? h(name, { ...more, ...one[1] }, one[0]) : h(name, more, one);
  return h(
    "div",
    { class: "scroll" },
    h(
      "table",
      attributes,
      h("thead", {}, h("tr", {}, titles.map((title) => cell("th", title, { scope: "col" })))),
      h("tbody", {}, rows.map((row) => h("tr", {}, row.map((one, at) => cell(at ? "td" : "th", one, at ? {} : { scope: "row" }))))),
    ),
  );
}

/** A mark that says by shape and word, never by colour alone. */
export function mark(kind, word) {
  const shapes = { stop: "\u25a0", caution: "\u25b2", note: "\u25cb", good: "\u2713" };
  return h("span", { class: `mark ${kind}` }, h("span", { "aria-hidden": "true" }, shapes[kind] ?? "\u25cb"), ` ${word}`);
}

/** What an end means, in a mark. */
export function outcomeMark(outcome) {
  const kinds = { COMPLETE: "good", WRITTEN: "good", ABORTED: "caution", RELEASED: "caution", PUT_BACK: "caution" };
  return mark(kinds[outcome] ?? "stop", outcome.replace("_", " "));
}
