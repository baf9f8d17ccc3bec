// How far apart the wanted modes of two test points lie, computed by the service from their newest checkpoints.

import { h, say } from "./elements.js";
import { degrees } from "./words.js";

export class ComparePart {
  #one = h("select", { id: "compare-one" });
  #other = h("select", { id: "compare-other" });
  #words = h("p", { role: "status" });
  #key = "";

  constructor(line, path) {
    [this.line, this.path] = [line, path];
    this.root = h("section", { class: "compare", hidden: true }, h("h2", {}, "Modes of two points compared"),
      h("form", { submit: (event) => { event.preventDefault(); this.#ask(); } },
        h("label", { for: "compare-one" }, "Point"), this.#one, h("label", { for: "compare-other" }, "and"),
        this.#other, h("button", { type: "submit" }, "Compare")), this.#words);
  }

  offer(points) {
    const able = points.filter((point) => point.n_applied > 0);
    this.root.hidden = able.length < 2;
    const key = JSON.stringify(able.map((point) => point.run));
    if (key === this.#key) return;
    this.#key = key;
    const chosen = [this.#one.value, this.#other.value];
    [this.#one, this.#other].forEach((select, k) => {
      select.replaceChildren(...able.map((point) => h("option", { value: point.run }, point.name)));
      select.value = able.some((point) => point.run === chosen[k]) ? chosen[k] : able[Math.min(k, able.length - 1)]?.run;
    });
  }

  async #ask() {
    if (this.#one.value === this.#other.value) { say(this.#words, "Choose two different points."); return; }
    try {
      const between = encodeURIComponent(`${this.#one.value},${this.#other.value}`);
      const { comparisons: [found] } = await this.line.json(`${this.path}?between=${between}`);
      say(this.#words, comparedWords(found));
    } catch (refusal) {
      say(this.#words, refusal.message);
    }
  }
}

// Pure.
export function comparedWords(found) {
  const angle = `The leading ${found.n_modes} modes lie ${degrees(found.angle_deg)} apart`;
  if (found.sampling_deg === null) return `${angle}; the bounds of the points are not known yet.`;
  return found.angle_deg > found.sampling_deg
    ? `${angle}, more than the ${degrees(found.sampling_deg)} that sampling may account for.`
    : `${angle}, within the ${degrees(found.sampling_deg)} that sampling alone may account for.`;
}
