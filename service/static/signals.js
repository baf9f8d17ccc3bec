// Spectra and novelty of the checkpoint under the slider, each a chart with its words.

import { Chart } from "./chart.js";
import { h, say } from "./elements.js";
import { noveltyOptions, noveltyTable, noveltyWords } from "./novelty.js";
import { spectraOptions, spectraTable, spectraWords } from "./spectra.js";

class Part {
  #words = h("p", { class: "note" });

  constructor(title, kind) {
    this.chart = new Chart(kind, 0.45);
    this.root = h("section", { class: kind }, h("h2", {}, title), this.chart.frame, this.#words);
  }

  show(key, options, data, words) {
    this.chart.frame.hidden = false;
    this.chart.show(key, options, data, words);
    say(this.#words, words);
  }

  missing(text) {
    this.chart.frame.hidden = true;
    say(this.#words, text);
  }
}

export class SignalsSection {
  #spectra = new Part("Spectra of the coefficients", "spectrapart");
  #novelty = new Part("Novelty of the snapshots", "noveltypart");
  #turn = 0;

  constructor(line, path) {
    [this.line, this.path] = [line, path];
    this.root = h("div", { class: "columns halves" }, this.#spectra.root, this.#novelty.root);
    for (const part of [this.#spectra, this.#novelty]) part.missing("No checkpoint yet.");
  }

  // `found` is told the novelty of the newest checkpoint
  async read(declaration, checkpoint, found) {
    this.#turn += 1;
    const turn = this.#turn;
    const ask = (name) => this.line.json(`${this.path}/${name}checkpoint=${checkpoint}`);
    const answers = await Promise.allSettled([ask("spectra?bins=400&"), ask("novelty?last=2000&")]);
    if (turn !== this.#turn) return;
    const [spectra, novelty] = answers;
    if (spectra.status === "fulfilled") this.#showSpectra(declaration, spectra.value);
    else if (spectra.reason.status > 0) this.#spectra.missing(spectra.reason.message);
    if (novelty.status === "fulfilled") { this.#showNovelty(declaration, novelty.value); found(novelty.value); }
    else if (novelty.reason.status > 0) this.#novelty.missing(novelty.reason.message);
  }

  #showSpectra(declaration, found) {
    const { x, lines } = spectraTable(found);
    this.#spectra.show(String(lines.length), () => spectraOptions(declaration, lines.length), [x, ...lines],
      spectraWords(found, declaration));
  }

  #showNovelty(declaration, found) {
    const { x, outside, within, limit } = noveltyTable(found);
    this.#novelty.show("novelty", () => noveltyOptions(declaration), [x, outside, within, limit], noveltyWords(found));
  }

  recolour() { for (const part of [this.#spectra, this.#novelty]) part.chart.redraw(); }

  end() { for (const part of [this.#spectra, this.#novelty]) part.chart.end(); }
}
