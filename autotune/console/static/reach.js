// The bar that keeps abort in reach on every view: by mouse, by touch, and by Esc held for one second.

import { perform } from "./api.js";
import { h, say, set } from "./dom.js";

const HOLD_MS = 1000;

export class Reach {
  constructor(element, tell) {
    this.element = element;
    this.tell = tell;
    this.loops = [];
    this.held = null;
    document.addEventListener("keydown", (event) => this.#down(event));
    document.addEventListener("keyup", (event) => event.key === "Escape" && this.#up());
    window.addEventListener("blur", () => this.#up());
  }

  /** The loops that are being tested now. */
  show(lines) {
    const names = lines.map((line) => line.loop).join(" ");
    this.element.hidden = lines.length === 0;
    document.body.classList.toggle("in-test", lines.length > 0);
    if (names === this.loops.join(" ")) return;
    this.loops = lines.map((line) => line.loop);
    set(
      this.element,
      lines.map((line) =>
        h(
          "div",
          { class: "reach-row" },
          h("span", { class: "reach-what" }, h("a", { href: `#/loop/${encodeURIComponent(line.loop)}` }, line.loop), ` is being tested by ${line.by}`),
          h(
            "button",
            { class: "abort", onclick: () => this.#abort(line.loop) },
            h("span", { class: "abort-word" }, lines.length > 1 ? `Abort ${line.loop}` : "Abort: hand the loop back"),
            h("span", { class: "abort-key" }, "or hold Esc for 1 s"),
          ),
        ),
      ),
    );
  }

  #down(event) {
    if (event.key !== "Escape" || event.repeat || this.held !== null || this.loops.length === 0) return;
    this.element.classList.add("held");
    this.held = setTimeout(() => {
      this.#up();
      for (const loop of this.loops) this.#abort(loop);
    }, HOLD_MS);
  }

  #up() {
    clearTimeout(this.held);
    this.held = null;
    this.element.classList.remove("held");
  }

  async #abort(loop) {
    this.tell(`Abort of ${loop} asked for …`);
    try {
      await perform("abort_test", { loop });
      this.tell(`Abort of ${loop} was heard: the loop is being handed back.`);
    } catch (fault) {
      if (fault.code === "NO_TEST") this.tell(`${loop}: the test was over already.`);
      else this.tell(`The abort of ${loop} did NOT get through. ${fault.message} Use the plant's own panel now.`, true);
    }
  }
}
