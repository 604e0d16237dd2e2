// How the controllers answer.

import { ask } from "./api.js";
import { facts, h, instant, mark, set } from "./dom.js";

const EVERY_MS = 3000;

export function controllersView(page) {
  const list = h("div", {});
  const refresh = async () => {
    try {
      const { controllers } = await ask("list_controllers");
      set(list, controllers.map(one));
    } catch (fault) {
      page.tell(fault.message, true);
    }
  };
  const timer = setInterval(refresh, EVERY_MS);
  return {
    element: h("div", { class: "sheet" }, h("h1", {}, "Controllers"), h("p", { class: "lead" }, "Counted since the service began. While a loop is worked on, its controller is read by that work alone."), list),
    leave: () => clearInterval(timer),
    ready: refresh(),
  };
}

function one(controller) {
  const state = controller.is_busy
    ? mark("caution", "worked on now")
    : controller.fault
      ? mark("stop", "no answer")
      : controller.heard_utc
        ? mark("good", "answers")
        : mark("note", "not read yet");
  const trip = controller.round_trip_s === null ? "not known" : `${(1000 * controller.round_trip_s).toFixed(1)}\u00a0ms (median of the last 50)`;
  return h(
    "section",
    { class: "part" },
    h("h2", {}, controller.controller, " ", state),
    facts(
      ["Address", controller.endpoint],
      ["Loops", controller.loops.join(", ")],
      ["One reading takes", trip],
      ["Readings", `${controller.readings}, of which ${controller.missed} were not answered`],
      ["Last heard", instant(controller.heard_utc)],
      controller.fault ? ["Why", controller.fault] : null,
    ),
  );
}
