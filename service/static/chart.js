// What all charts share: colours taken from the style sheet, a frame that follows its width, and words for those who
// do not see it.

import uPlot from "./vendor/uPlot.esm.js";
import { h } from "./elements.js";
import { digits } from "./words.js";

export function colour(name) {
  return getComputedStyle(document.documentElement).getPropertyValue(`--${name}`).trim();
}

export function rem() {
  return parseFloat(getComputedStyle(document.documentElement).fontSize);
}

export const SERIES = ["series-1", "series-2", "series-3", "series-4", "series-5", "series-6"];

export function axis(label, extra = {}) {
  const size = rem();
  const font = `${Math.round(0.8 * size)}px system-ui, sans-serif`;
  return { label, font, labelFont: font, labelSize: 1.6 * size, size: 3 * size, gap: 0.3 * size, stroke: () => colour("ink"),
    grid: { stroke: () => colour("rule"), width: 1 }, ticks: { stroke: () => colour("rule"), width: 1 }, ...extra };
}

export function logAxis(label, extra = {}) {
  return axis(label, { ...extra, splits: (_, index, low, high) => marks(low, high), values: (_, ticks) => ticks.map(short),
    filter: (_, ticks) => ticks });
}

// 1, 2, 5 of each decade are enough to read a logarithmic axis, and 1 alone over many decades; pure.
export function marks(low, high) {
  const leads = high / low > 2e3 ? [1] : high / low < 12 ? [1, 1.5, 2, 3, 4, 5, 7] : [1, 2, 5];
  const found = [];
  for (let decade = Math.floor(Math.log10(low)); decade <= Math.log10(high); decade += 1) {
    found.push(...leads.map((lead) => Number(`${lead}e${decade}`)).filter((mark) => mark >= low && mark <= high));
  }
  return found;
}

function short(value) {
  if (value < 1e-3) return value.toExponential(0);
  return value >= 1e6 ? `${digits(value / 1e6)}M` : value >= 1e4 ? `${digits(value / 1e3)}k` : digits(value);
}

// A chart that is made once and then given new data; `options(width)` is asked anew when series or colours change.
export class Chart {
  #plot = null;
  #key = null;
  #make = null;
  #data = null;

  constructor(kind, ratio) {
    this.ratio = ratio;
    this.frame = h("div", { class: `chart ${kind}`, role: "img" });
    this.#watch = new ResizeObserver(() => this.#fit());
    this.#watch.observe(this.frame);
  }

  #watch;

  // `key` says which series there are: while it stays the same only the data are replaced.
  show(key, make, data, words) {
    this.frame.setAttribute("aria-label", words);
    [this.#make, this.#data] = [make, data];
    if (this.#plot && key === this.#key) { this.#plot.setData(data); return; }
    this.#key = key;
    this.redraw();
  }

  redraw() {
    if (!this.#make || !this.frame.clientWidth) return;
    this.#plot?.destroy();
    this.#plot = new uPlot({ ...this.#make(), ...this.#size() }, this.#data, this.frame);
  }

  end() {
    this.#watch.disconnect();
    this.#plot?.destroy();
  }

  #size() {
    const width = this.frame.clientWidth;
    const least = Math.min(width, 15 * rem()); // on a phone a flat chart would be all frame
    return { width, height: Math.round(Math.max(least, Math.min(width * this.ratio, 0.7 * innerHeight))) };
  }

  #fit() {
    if (!this.#plot) this.redraw();
    else if (Math.abs(this.#plot.width - this.frame.clientWidth) > 1) this.#plot.setSize(this.#size());
  }
}
