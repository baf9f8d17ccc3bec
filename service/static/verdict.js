// The answer at the head of a run: may it stop, how long still, what holds it back, and why.

import { gauge, h, say } from "./elements.js";
import { answer, count, holdsBack, howLong, meaning, stateOf } from "./words.js";

const CAUTION = "Settled modes say that the sampling of what was recorded suffices; nothing of mesh, model or "
  + "states not visited. This is advice: a person stops the machine.";

export class VerdictPanel {
  #shape = h("div", { class: "shape" });
  #answer = h("p", { class: "answer" });
  #meaning = h("p", { class: "meaning" });
  #long = h("p", { class: "long" });
  #holds = h("p", { class: "holds" });
  #look = h("p", { class: "look" });
  #reasons = h("ul", { class: "reasons" });
  #state = null;

  constructor() {
    const spoken = h("div", { "aria-live": "polite", "aria-atomic": "true", class: "spoken" },
      this.#answer, this.#meaning);
    this.root = h("section", { class: "verdict gathering", "aria-label": "Verdict" }, this.#shape,
      h("div", { class: "words" }, spoken, this.#long, this.#holds, this.#look, this.#reasons,
        h("p", { class: "caution" }, CAUTION)));
  }

  // `look` is the evaluation that gave the verdict; the numbers of `report` may be newer.
  show(run, report, look) {
    const state = stateOf(run);
    if (state !== this.#state) {
      this.#state = state;
      this.root.className = `verdict ${state}`;
      this.#shape.replaceChildren(gauge(state));
    }
    say(this.#answer, answer(run));
    say(this.#meaning, meaning(run));
    say(this.#long, howLong(run, report));
    say(this.#holds, run.verdict === "settled" ? "" : holdsBack(run, report));
    const older = look && look.n_snapshots !== report.n_snapshots && run.status !== "failed";
    say(this.#look, older ? `Verdict of the look at ${count(look.n_snapshots)} snapshots:` : "");
    this.#showReasons(run.status === "failed" ? [] : report.verdict.reasons.map((reason) => reason.text));
  }

  #showReasons(texts) {
    const now = [...this.#reasons.children].map((item) => item.textContent);
    if (now.join("\n") !== texts.join("\n")) this.#reasons.replaceChildren(...texts.map((text) => h("li", {}, text)));
  }
}
