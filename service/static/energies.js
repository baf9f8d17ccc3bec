// Energies with their intervals as a table, each with a mark on a common logarithmic axis; text first, picture beside.

import { h, svg, table, wide } from "./elements.js";
import { count, digits, percent } from "./words.js";

const [WIDTH, HEIGHT, PAD] = [200, 20, 6];
const LEAST_SHARE = 1e-6; // below this a share of the energy is not worth a longer axis

export function energyTable(report, n) {
  const modes = report.modes.slice(0, n);
  const edge = report.noise_edge === null || report.noise_edge === undefined || !(report.total_energy > 0)
    ? null : report.noise_edge / report.total_energy;
  const place = axisOf(modes, edge);
  const frequency = modes.some((one) => one.peak_frequency !== null && one.peak_frequency !== undefined);
  const strouhal = modes.some((one) => one.strouhal !== null && one.strouhal !== undefined);
  const headings = ["Mode", "Share of energy", "Interval", "On a logarithmic axis",
    ...(frequency ? ["Peak frequency"] : []), ...(strouhal ? ["Strouhal number"] : [])];
  const rows = modes.map((one) => [String(one.mode), percent(one.energy_fraction),
    `${percent(one.energy_fraction_low)} to ${percent(one.energy_fraction_high)}`, mark(one, edge, place),
    ...(frequency ? [digits(one.peak_frequency)] : []), ...(strouhal ? [digits(one.strouhal)] : [])]);
  const caption = `Energies of the modes, with intervals, at ${count(report.n_snapshots)} snapshots`;
  return h("div", {}, wide(caption, table(caption, headings, rows, "numbers")),
    h("p", { class: "note" }, notes(report, edge)));
}

function notes(report, edge) {
  const captured = `The basis holds ${percent(report.captured_energy_fraction)} of the energy.`;
  const noise = edge === null ? "" : ` The upright line is the noise edge, ${percent(edge)} of the energy.`;
  const suggested = report.suggested_n_modes ? ` ${report.suggested_n_modes} modes stand above the noise.` : "";
  return captured + noise + suggested;
}

function axisOf(modes, edge) {
  const shares = modes.flatMap((one) => [one.energy_fraction_low, one.energy_fraction, one.energy_fraction_high, edge]);
  const usable = shares.filter((share) => share > LEAST_SHARE);
  const low = Math.log(Math.min(...usable, 1)) - 0.1;
  const high = Math.log(Math.max(...usable, LEAST_SHARE)) + 0.1;
  return (share) => PAD + ((WIDTH - 2 * PAD) * (Math.log(Math.max(share, Math.exp(low))) - low)) / (high - low || 1);
}

function mark(mode, edge, place) {
  const middle = HEIGHT / 2;
  const line = { x1: place(mode.energy_fraction_low), x2: place(mode.energy_fraction_high), y1: middle, y2: middle };
  return svg("svg", { viewBox: `0 0 ${WIDTH} ${HEIGHT}`, class: "interval", "aria-hidden": "true" },
    edge === null ? null : svg("line", { class: "edge", x1: place(edge), x2: place(edge), y1: 0, y2: HEIGHT }),
    svg("line", { class: "span", ...line }),
    svg("circle", { cx: place(mode.energy_fraction), cy: middle, r: 4 }));
}
