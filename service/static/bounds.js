// Bound against tolerance over the length of the record, one line for each group of modes, both axes logarithmic, with
// the forecast continued to the tolerance line.

import { colour, logAxis, rem, SERIES } from "./chart.js";
import { capital, count, degrees, digits, groupName, rough, worst } from "./words.js";

const MAX_GROUPS = SERIES.length; // more lines than this cannot be told apart

// Columns of the chart from the evaluations so far; pure. Each snapshot number stands once, the latest report wins.
export function boundTable(reports, criterion) {
  const rows = new Map(reports.filter((one) => one.groups.length).map((one) => [one.n_snapshots, one]));
  const ordered = [...rows.values()].sort((a, b) => a.n_snapshots - b.n_snapshots);
  const last = ordered[ordered.length - 1];
  const names = last ? last.groups.slice(0, MAX_GROUPS).map((group) => groupName(group.modes)) : [];
  const forecast = last ? forecastOf(last, criterion.max_angle_deg) : null;
  const places = ordered.map((one) => one.n_snapshots);
  const x = [...places];
  const lines = names.map((name) => ordered.map((one) => boundOf(one, name)));
  if (forecast) {
    x.push(forecast.high);
    for (const line of lines) line.push(null);
  }
  return { x, places, names, lines, tolerance: x.map(() => criterion.max_angle_deg), forecast, last };
}

function boundOf(report, name) {
  const group = report.groups.find((one) => groupName(one.modes) === name);
  return group && group.angle_bound_deg > 0 ? group.angle_bound_deg : null;
}

// Where the line of the group that holds back meets the tolerance.
function forecastOf(report, tolerance) {
  const group = worst(report.groups);
  const toGo = report.verdict.snapshots_to_go;
  if (!toGo || !group || !(group.angle_bound_deg > tolerance) || !(toGo.estimate > 0)) return null;
  const n = report.n_snapshots;
  return { from: [n, group.angle_bound_deg], to: [n + toGo.estimate, tolerance],
    low: n + toGo.low, high: n + Math.max(toGo.high, toGo.estimate) };
}

export function boundWords(found, run) {
  if (!found.last) return "No bound yet: the first needs one full block.";
  const tolerance = degrees(run.declaration.criterion.max_angle_deg);
  const groups = found.last.groups.map((one) => `${groupName(one.modes)} ${degrees(one.angle_bound_deg)}`);
  const meets = found.forecast ? ` The forecast meets the tolerance near ${rough(found.forecast.to[0])} snapshots.` : "";
  return `Bound on the misalignment at ${count(found.last.n_snapshots)} snapshots, tolerated ${tolerance}: `
    + `${groups.join(", ")}.${meets}`;
}

export function boundOptions(found, current) {
  const series = found.names.map((name, k) => ({
    label: capital(name), stroke: () => colour(SERIES[k]), width: rem() / 7, spanGaps: true, dash: k % 2 ? [rem() / 2, rem() / 5] : undefined,
    points: { show: true, size: rem() / 2.6 }, value: (_, v) => (v === null ? "–" : `${digits(v)} deg`),
  }));
  const limit = { label: "Tolerance", stroke: () => colour("ink"), width: rem() / 8, points: { show: false },
    value: (_, v) => (v === null ? "–" : `${digits(v)} deg`) };
  return {
    scales: { x: { time: false, distr: 3, range: wholeRange }, y: { distr: 3, range: roomy } },
    axes: [logAxis("snapshots in the basis", { size: 2 * rem() }), logAxis("bound, deg")],
    series: [{ label: "Snapshots", value: (_, v) => (v === null ? "–" : count(v)) }, ...series, limit],
    hooks: { draw: [(plot) => drawForecast(plot, current())] },
  };
}

function wholeRange(_, low, high) {
  return low === null ? [10, 1000] : [low / 1.08, Math.max(high * 1.08, low * 2)];
}

function roomy(_, low, high) {
  return low === null ? [1, 90] : [low / 1.4, Math.min(180, high * 1.25)];
}

function drawForecast(plot, forecast) {
  if (!forecast) return;
  const at = ([x, y]) => [plot.valToPos(x, "x", true), plot.valToPos(y, "y", true)];
  const { ctx } = plot;
  const unit = devicePixelRatio * rem() / 16;
  ctx.save();
  ctx.strokeStyle = colour("ink");
  ctx.lineWidth = 2 * unit;
  ctx.setLineDash([3 * unit, 5 * unit]);
  path(ctx, [at(forecast.from), at(forecast.to)]);
  ctx.setLineDash([]);
  ctx.lineWidth = 7 * unit;
  ctx.globalAlpha = 0.45;
  path(ctx, [at([forecast.low, forecast.to[1]]), at([forecast.high, forecast.to[1]])]);
  ctx.globalAlpha = 1;
  ctx.beginPath();
  ctx.arc(...at(forecast.to), 6 * unit, 0, 2 * Math.PI);
  ctx.fillStyle = colour("paper");
  ctx.fill();
  ctx.lineWidth = 2 * unit;
  ctx.stroke();
  ctx.restore();
}

function path(ctx, [from, to]) {
  ctx.beginPath();
  ctx.moveTo(...from);
  ctx.lineTo(...to);
  ctx.stroke();
}
