// How new each snapshot was when it came: the larger of its two numbers, each as a share of its limit. Above 1 the
// snapshot lies outside of what was known.

import { axis, colour, logAxis, rem } from "./chart.js";
import { count, digits } from "./words.js";

// Columns of the chart; pure.
export function noveltyTable(found) {
  const share = (values, limits) => values.map((value, k) =>
    (value !== null && limits[k] > 0 ? Math.max(value / limits[k], 1e-4) : null));
  return { x: found.times, outside: share(found.outside, found.outside_limit),
    within: share(found.hotelling, found.hotelling_limit), limit: found.times.map(() => 1) };
}

export function noveltyOptions(declaration) {
  const value = (_, v) => (v === null ? "–" : digits(v, 2));
  const dots = (label, name) => ({ label, stroke: () => colour(name), width: 0, value,
    points: { show: true, size: rem() / 4, fill: () => colour(name) }, paths: () => null });
  return {
    scales: { x: { time: false }, y: { distr: 3, range: (_, low, high) => [Math.min(low ?? 0.1, 0.1), Math.max(high ?? 2, 2)] } },
    axes: [axis(`time, ${declaration.time.unit}`, { size: 2 * rem() }), logAxis("share of the limit")],
    series: [{ label: "Time", value: (_, v) => digits(v, 5) }, dots("Outside the basis", "series-1"),
      dots("Within the modes", "series-2"),
      { label: "Limit", stroke: () => colour("ink"), width: rem() / 8, points: { show: false }, value }],
  };
}

export function noveltyWords(found) {
  const judged = found.outside_limit.filter((limit) => limit !== null).length;
  if (!judged) return "No limit yet: too few blocks are known.";
  const expected = found.alarm_level * judged * 2;
  return `Of the newest ${count(found.times.length)} snapshots up to ${count(found.n_snapshots)}, `
    + `${count(found.n_beyond)} lie beyond a limit; about ${digits(expected, 2)} are expected of the same regime.`;
}
