// The figure of one group of modes: a picture of each, and for a pair its phase portrait and a moving picture.

import { Chart } from "./chart.js";
import { h, say } from "./elements.js";
import { largest, paint, scaleBar } from "./field.js";
import { Motion } from "./motion.js";
import { portraitOptions, travels, turning, turningWords } from "./portrait.js";
import { capital, groupName, travellingWords } from "./words.js";

const MAX_PICTURES = 8; // of one group: a wide group is noise, and its pictures say little

export class GroupFigure {
  #pictures;
  #portrait = null;
  #turning = h("p", { class: "note" });
  #motion = null;
  #values = [];
  #checkpoint = 0;
  #found = null;

  constructor(line, path, modes, declaration, plan) {
    Object.assign(this, { line, path, modes, declaration, plan, name: modes.join() });
    this.#pictures = modes.slice(0, MAX_PICTURES).map((mode) => this.#picture(mode));
    const pair = modes.length === 2;
    if (pair) this.#portrait = new Chart("portrait", 1);
    if (pair && plan) this.#motion = new Motion(plan);
    this.root = h("figure", { class: "group" }, h("figcaption", {}, h("h3", {}, capital(groupName(modes)))),
      h("div", { class: "pictures" }, this.#pictures.map((one) => one.root)),
      pair ? h("div", { class: "pair" }, this.#portrait.frame, h("div", {}, this.#turning, this.#motion?.root)) : null);
  }

  #picture(mode) {
    const drawn = this.plan ? h("canvas", { role: "img", "aria-label": `Mode ${mode}, not read yet` }) : h("img", { alt: "", decoding: "async" });
    const bar = h("div");
    return { mode, drawn, bar, root: h("div", { class: "picture" }, h("p", {}, `Mode ${mode}`), drawn, bar,
      this.plan ? h("p", { class: "note" }, placeWords(this.plan)) : null) };
  }

  // `travelling` is what the service found of the pair, or null
  async read(checkpoint, coefficients, field, travelling) {
    [this.#checkpoint, this.#found] = [checkpoint, travelling];
    if (this.plan) {
      const answers = await Promise.all(this.#pictures.map((one) =>
        this.line.npy(`${this.path}/modes/${one.mode}?checkpoint=${checkpoint}`)));
      this.#values = answers.map((one, k) => aligned(one.values, this.#values[k]));
    }
    this.draw(field);
    if (this.#portrait) this.#drawPortrait(coefficients);
  }

  draw(field) {
    if (this.plan && !this.#values.length) return; // not read yet
    const { name, unit } = this.declaration.fields[field];
    this.#pictures.forEach((one, k) => {
      const words = `Mode ${one.mode}, ${name}, at ${this.#checkpoint} snapshots`;
      if (!this.plan) {
        one.drawn.alt = words;
        one.drawn.src = `${this.path}/modes/${one.mode}.png?field=${encodeURIComponent(name)}&checkpoint=${this.#checkpoint}`;
        return;
      }
      const values = this.#part(this.#values[k].values, field);
      const top = largest(values);
      paint(one.drawn, this.plan, values, -top, top);
      one.drawn.setAttribute("aria-label", words);
      one.bar.replaceChildren(scaleBar(-top, top, unit));
    });
    if (this.#motion && this.#values.length === 2) {
      this.#motion.set(this.#values.map((one) => this.#part(one.values, field)));
    }
  }

  #part(values, field) {
    const n = this.declaration.n_points;
    return values.subarray(field * n, (field + 1) * n);
  }

  #drawPortrait({ shape, values }) {
    const sign = (k) => this.#values[k]?.sign ?? 1;
    const column = (k) => Float64Array.from({ length: shape[0] }, (_, i) =>
      sign(k) * values[i * shape[1] + this.modes[k] - 1]);
    const [a, b] = [column(0), column(1)];
    const turn = turning(a, b);
    const top = Math.max(largest(a), largest(b));
    const words = travellingWords(this.#found, this.declaration.time.unit) || turningWords(turn);
    say(this.#turning, words);
    this.#portrait.show(String(top), () => portraitOptions(this.modes, top), [null, [a, b]],
      `Coefficients of modes ${this.modes.join(" and ")} against each other, the newest ${shape[0]} snapshots. ${words}`);
    this.#motion?.turn(this.#found || travels(turn) ? Math.sign(turn) : 0);
  }

  recolour() { this.#portrait?.redraw(); }

  end() {
    this.#portrait?.end();
    this.#motion?.stop();
  }
}

// The sign of a mode means nothing: take the one that looks like the picture before, so that no picture flips.
function aligned(values, before) {
  const kept = before?.values;
  if (!kept || kept.length !== values.length) return { values, sign: 1 };
  let product = 0;
  for (let i = 0; i < values.length; i += 1) if (!Number.isNaN(values[i] * kept[i])) product += values[i] * kept[i];
  if (product >= 0) return { values, sign: 1 };
  return { values: values.map((value) => -value), sign: -1 };
}

function placeWords({ span: [x0, x1, y0, y1] }) {
  const short = (value) => String(Number(value.toPrecision(3)));
  return `x ${short(x0)} to ${short(x1)}, y ${short(y0)} to ${short(y1)}`;
}
