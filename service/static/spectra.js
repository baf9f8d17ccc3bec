// Spectra of the wanted coefficients on logarithmic axes, over the Strouhal number when a reference is declared.

import { colour, logAxis, rem, SERIES } from "./chart.js";
import { count, digits } from "./words.js";

const LEAST = 1e-12; // of the strongest density: nothing below it is drawn

// Columns of the chart; pure.
export function spectraTable(found) {
  const top = Math.max(...found.densities.flat());
  const lines = found.densities.slice(0, SERIES.length).map((density) =>
    density.map((value) => (value > LEAST * top ? value : null)));
  return { x: found.strouhal || found.frequencies, lines };
}

export function spectraOptions(declaration, n) {
  const { reference, time } = declaration;
  const series = Array.from({ length: n }, (_, k) => ({ label: `Mode ${k + 1}`, stroke: () => colour(SERIES[k]),
    width: rem() / 10, points: { show: false }, value: (_, v) => (v === null ? "–" : digits(v)) }));
  const name = reference ? "Strouhal number" : `frequency, per ${time.unit}`;
  return {
    scales: { x: { time: false, distr: 3, range: tight }, y: { distr: 3, range: tight } },
    axes: [logAxis(name, { size: 2 * rem() }), logAxis("variance per frequency", { size: 4 * rem() })],
    series: [{ label: reference ? "Strouhal" : "Frequency", value: (_, v) => digits(v) }, ...series],
  };
}

function tight(_, low, high) {
  return low === null ? [0.1, 10] : [low / 1.1, high * 1.5];
}

export function spectraWords(found, declaration) {
  const x = found.strouhal || found.frequencies;
  const scale = found.strouhal ? found.strouhal[0] / found.frequencies[0] : 1;
  const unit = found.strouhal ? "" : ` per ${declaration.time.unit}`;
  const highest = found.densities.slice(0, SERIES.length).map((density, k) =>
    `mode ${k + 1} at ${digits(x[density.indexOf(Math.max(...density))])}${unit}`);
  return `From ${count(found.used_snapshots)} snapshots; strongest: ${highest.join(", ")}. Frequencies closer than `
    + `${digits(found.resolution * scale, 2)}${unit} cannot be told apart.`;
}
