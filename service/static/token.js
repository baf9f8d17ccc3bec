// Asks once for the token of the service; it travels in the body of one POST and is kept by no script.

import { h, say } from "./elements.js";

export function tokenForm(line, done) {
  const field = h("input", { id: "token", type: "password", autocomplete: "current-password", required: true });
  const trouble = h("p", { role: "alert", class: "trouble" });
  const send = async (event) => {
    event.preventDefault();
    try {
      await line.post("/page/session", { token: field.value });
      field.value = "";
      done();
    } catch (refusal) {
      say(trouble, refusal.message);
    }
  };
  return h("form", { class: "token", submit: send },
    h("h1", {}, "This service asks for its token"),
    h("p", {}, "It was set by whoever started the service. The browser keeps a cookie that can read and not write."),
    h("label", { for: "token" }, "Token"), field, h("button", { type: "submit" }, "Open"), trouble);
}
