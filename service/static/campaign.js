// The test points of one campaign side by side: which is settled, which drifts, what to run next, what it has cost.

import { ComparePart } from "./compare.js";
import { gauge, h, say, table, wide } from "./elements.js";
import { answer, count, degrees, digits, percent, rough, stateOf } from "./words.js";

const MODES_IN_TABLE = 4;

export class CampaignView {
  events = "/v1/events";
  #tiles = new Map();
  #summary = h("p", { class: "summary", "aria-live": "polite" });
  #points = h("ol", { class: "points" });
  #cost = h("p", { class: "note" });
  #table = h("div");
  #key = "";
  #loading = null;
  #again = 0;

  constructor(line, name) {
    [this.line, this.name] = [line, name];
    this.path = `/v1/campaigns/${encodeURIComponent(name)}`;
    this.compare = new ComparePart(line, this.path);
    this.root = h("div", { class: "campaign" }, h("h1", {}, name), this.#summary, this.#points, this.#cost,
      h("section", {}, h("h2", {}, "Side by side"), this.#table), this.compare.root);
  }

  trail() { return [h("a", { href: "#/" }, "All runs")]; }

  recolour() {}

  end() { clearTimeout(this.#again); }

  news() {
    clearTimeout(this.#again);
    this.#again = setTimeout(() => this.load(), 300);
  }

  tick() { this.load(); }

  load() {
    this.#loading ??= this.line.json(this.path).then((campaign) => this.#show(campaign), (refusal) => {
      if (refusal.status === 404) this.#show({ points: [], left_out: 0, totals: null });
    }).finally(() => { this.#loading = null; });
    return this.#loading;
  }

  #show({ points, left_out: leftOut, totals }) {
    document.title = `${points.filter((one) => one.verdict === "settled").length} of ${points.length} · ${this.name}`;
    say(this.#summary, summaryOf(points));
    say(this.#cost, totals ? costOf(totals, leftOut) : "");
    const kept = new Set(points.map((point) => point.run));
    for (const [id, tile] of this.#tiles) if (!kept.has(id)) { tile.element.remove(); this.#tiles.delete(id); }
    for (const point of points) this.#showTile(point);
    const key = JSON.stringify(points.map((point) => [point.name, point.modes, point.bound_deg]));
    if (key === this.#key) return;
    this.#key = key;
    this.#table.replaceChildren(sideBySide(points));
    this.compare.offer(points);
  }

  #showTile(point) {
    const key = JSON.stringify({ ...point, modes: null, wall_seconds: null });
    const known = this.#tiles.get(point.run);
    if (known?.key === key) return;
    const element = known?.element || h("li");
    const link = element.querySelector("a");
    element.className = `point ${stateOf(point)}`;
    const lines = linesOf(point);
    if (link) link.replaceChildren(...lines); // focus stays on the link
    else element.append(h("a", { href: `#/runs/${encodeURIComponent(point.run)}` }, lines));
    if (!known) this.#points.append(element);
    this.#tiles.set(point.run, { key, element });
  }
}

function linesOf(point) {
  const labels = Object.entries(point.labels).map(([name, value]) => `${name} ${value}`).join(", ");
  const state = stateOf(point);
  const bound = point.bound_deg === null ? "no bound yet"
    : `bound ${degrees(point.bound_deg)} of ${degrees(point.max_angle_deg)}`;
  return [h("span", { class: "name" }, point.name), labels ? h("span", { class: "labels" }, labels) : "",
    h("span", { class: "answer" }, gauge(state), answer(point)), h("span", { class: "state" }, state),
    h("span", { class: "more" }, `${bound}, ${count(point.n_applied)} snapshots`),
    h("span", { class: "more" }, left(point))];
}

function left(point) {
  const forecast = point.snapshots_to_go;
  if (point.status !== "open" || point.verdict === "settled") return point.status;
  return forecast ? `about ${rough(forecast.estimate)} to go` : "no forecast yet";
}

function sideBySide(points) {
  const n = Math.min(MODES_IN_TABLE, Math.max(0, ...points.map((point) => point.modes.length)));
  if (!n) return h("p", { class: "note" }, "No energies yet.");
  const strouhal = points.some((point) => point.modes.some((mode) => mode.strouhal !== null));
  const numbers = Array.from({ length: n }, (_, k) => k);
  const headings = ["Test point", "Bound", ...numbers.map((k) => `Share of mode ${k + 1}`),
    strouhal ? "Strouhal number" : "Peak frequency"];
  const rows = points.map((point) => [point.name, degrees(point.bound_deg),
    ...numbers.map((k) => shareOf(point.modes[k])),
    peakOf(point, strouhal ? "strouhal" : "peak_frequency")]);
  return wide("Energies of the test points", table("Share of the energy, with its interval", headings, rows, "numbers"));
}

// of the first mode that has a peak
function peakOf(point, name) {
  const mode = point.modes.find((one) => one[name] !== null);
  return mode ? `${digits(mode[name])} (mode ${mode.mode})` : "–";
}

function shareOf(mode) {
  if (!mode) return "–";
  const { energy_fraction: share, energy_fraction_low: low, energy_fraction_high: high } = mode;
  return `${percent(share)} (${digits(100 * low)} to ${digits(100 * high)})`;
}

function costOf(totals, leftOut) {
  const plan = totals.fixed_plan_snapshots;
  return [`${count(totals.n_snapshots)} snapshots stored at all points, ${count(totals.snapshots_past_settled)} of them `
    + "after their point had settled.",
  plan === null ? "" : `A plan that gives every point as much as the longest one took: ${count(plan)}.`,
  leftOut ? `${count(leftOut)} further points are not shown.` : ""].filter(Boolean).join(" ");
}

// How many are done, what drifts, and what to run next: the open point that is nearest to settled. Pure.
export function summaryOf(points) {
  if (!points.length) return "No run of this campaign has been declared yet.";
  const named = (point) => point.name;
  const settled = points.filter((point) => point.verdict === "settled");
  const drifting = points.filter((point) => point.verdict === "drifting").map(named);
  const unfinished = points.filter((point) => point.verdict !== "settled" && point.status !== "failed");
  const next = unfinished.filter((point) => point.status === "open").sort((a, b) => farFrom(a) - farFrom(b))[0];
  const again = unfinished.filter((point) => point.status !== "open").map(named);
  return [`${settled.length} of ${points.length} settled.`,
    drifting.length ? `Drifting: ${drifting.join(", ")}.` : "",
    next ? `Go on with ${named(next)}.` : "",
    again.length ? `Ended too early: ${again.join(", ")}.` : ""].filter(Boolean).join(" ");
}

// Judged points come before those that still gather, and those before the ones that have not begun.
function farFrom(point) {
  const far = point.n_snapshots === 0 ? 2e12 : point.verdict === "gathering" ? 1e12 : 0;
  return far + (point.snapshots_to_go?.estimate ?? 1e11);
}
