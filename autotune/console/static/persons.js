// Signing in, and unlocking a screen that was left alone.

import { perform, session } from "./api.js";
import { h, say } from "./dom.js";

export function signInForm(onDone) {
  const trouble = h("p", { class: "trouble", role: "alert" });
  const name = h("input", { id: "person", name: "name", autocomplete: "username", required: true });
  const secret = secretField();
  const submit = async (event) => {
    event.preventDefault();
    say(trouble, "");
    try {
      onDone(await perform("sign_in", { name: name.value, secret: secret.value }));
    } catch (fault) {
      say(trouble, fault.message);
      secret.value = "";
      secret.focus();
    }
  };
  return h(
    "div",
    { class: "sheet narrow" },
    h("h1", {}, "Sign in"),
    h("p", {}, "Everybody who signs in may watch, and may abort a test at any time."),
    h(
      "form",
      { onsubmit: submit },
      h("label", { for: "person" }, "Name"), name,
      h("label", { for: "secret" }, "Secret"), secret,
      trouble,
      h("button", { class: "main" }, "Sign in"),
    ),
    h("p", { class: "quiet" }, "Names are kept by whoever runs this service: autotune person add."),
  );
}

export function unlockForm(onDone) {
  const trouble = h("p", { class: "trouble", role: "alert" });
  const secret = secretField();
  const submit = async (event) => {
    event.preventDefault();
    say(trouble, "");
    try {
      onDone(await perform("unlock", { secret: secret.value }));
    } catch (fault) {
      say(trouble, fault.message);
      secret.value = "";
      secret.focus();
    }
  };
  return h(
    "div",
    { class: "sheet narrow", role: "dialog", "aria-label": "Locked" },
    h("h1", {}, "Locked"),
    h("p", {}, `Nobody touched this screen for a while. It goes on showing what happens, and abort works without a secret.`),
    h("form", { onsubmit: submit }, h("label", { for: "secret" }, `Secret of ${session.name}`), secret, trouble, h("button", { class: "main" }, "Unlock")),
  );
}

/** A field for a secret; with another id where two stand on a page. */
export function secretField(id = "secret") {
  return h("input", { id, name: id, type: "password", autocomplete: "current-password", required: true });
}
