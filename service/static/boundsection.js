// The chart of bound against tolerance with its heading and its words.

import { boundOptions, boundTable, boundWords } from "./bounds.js";
import { Chart } from "./chart.js";
import { h, say } from "./elements.js";
import { WhatIf } from "./whatif.js";

export class BoundSection {
  #chart = new Chart("bound", 0.5);
  #words = h("p", { class: "note" });
  #found = null;
  #key = "";
  #whatIf = new WhatIf();

  constructor() {
    this.root = h("section", { class: "boundpart" }, h("h2", {}, "Bound against tolerance"), this.#chart.frame,
      this.#words, this.#whatIf.root);
  }

  show(run, reports) {
    const found = boundTable(reports, run.declaration.criterion);
    const key = JSON.stringify([found.x, found.lines, found.forecast]);
    if (key === this.#key) return;
    [this.#key, this.#found] = [key, found];
    const words = boundWords(found, run);
    say(this.#words, words);
    this.#whatIf.show(run, found.last);
    this.#chart.frame.dataset.places = found.places.join(" "); // snapshot numbers with a point
    const series = JSON.stringify([found.names, run.declaration.criterion.max_angle_deg]);
    this.#chart.show(series, () => boundOptions(this.#found, () => this.#found.forecast),
      [found.x, ...found.lines, found.tolerance], words);
  }

  recolour() { this.#chart.redraw(); }

  end() { this.#chart.end(); }
}
