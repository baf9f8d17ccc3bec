// The test points of one campaign side by side: which is settled, which drifts, what to run next.

import { gauge, h, say } from "./elements.js";
import { allRuns, campaignsOf } from "./list.js";
import { answer, count, degrees, rough, stateOf, worst } from "./words.js";

const AT_ONCE = 4; // reports asked for together; a browser opens six connections to one service

export class CampaignView {
  events = "/v1/events";
  #tiles = new Map();
  #reports = new Map();
  #summary = h("p", { class: "summary", "aria-live": "polite" });
  #points = h("ol", { class: "points" });
  #loading = null;
  #again = 0;

  constructor(line, name) {
    [this.line, this.name] = [line, name];
    this.root = h("div", { class: "campaign" }, h("h1", {}, name), this.#summary, this.#points);
    document.title = name;
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
    this.#loading ??= this.#read().catch(() => {}).finally(() => { this.#loading = null; });
    return this.#loading;
  }

  async #read() {
    const runs = campaignsOf(await allRuns(this.line)).get(this.name) || [];
    this.#show(runs);
    const stale = runs.filter((run) => this.#reports.get(run.id)?.key !== keyOf(run) && run.n_applied > 0);
    for (let k = 0; k < stale.length; k += AT_ONCE) {
      await Promise.all(stale.slice(k, k + AT_ONCE).map((run) => this.#readReport(run)));
      this.#show(runs);
    }
  }

  async #readReport(run) {
    const report = await this.line.json(`/v1/runs/${encodeURIComponent(run.id)}/convergence`);
    this.#reports.set(run.id, { key: keyOf(run), report });
  }

  #show(runs) {
    say(this.#summary, summaryOf(runs));
    const kept = new Set(runs.map((run) => run.id));
    for (const [id, tile] of this.#tiles) if (!kept.has(id)) { tile.element.remove(); this.#tiles.delete(id); }
    for (const run of runs) this.#showTile(run);
  }

  #showTile(run) {
    const report = this.#reports.get(run.id)?.report || null;
    const key = `${keyOf(run)} ${report?.n_snapshots}`;
    const known = this.#tiles.get(run.id);
    if (known?.key === key) return;
    const element = known?.element || h("li");
    const link = element.querySelector("a");
    element.className = `point ${stateOf(run)}`;
    const lines = linesOf(run, report);
    if (link) link.replaceChildren(...lines); // focus stays on the link
    else element.append(h("a", { href: `#/runs/${encodeURIComponent(run.id)}` }, lines));
    if (!known) this.#points.append(element);
    this.#tiles.set(run.id, { key, element });
  }
}

function keyOf(run) {
  return [run.status, run.verdict, run.n_applied, JSON.stringify(run.declaration.labels)].join(" ");
}

function linesOf(run, report) {
  const labels = Object.entries(run.declaration.labels).map(([name, value]) => `${name} ${value}`).join(", ");
  const state = stateOf(run);
  const group = report ? worst(report.groups) : null;
  const bound = group ? `bound ${degrees(group.angle_bound_deg)} of ${degrees(run.declaration.criterion.max_angle_deg)}`
    : "no bound yet";
  return [h("span", { class: "name" }, run.declaration.name), labels ? h("span", { class: "labels" }, labels) : "",
    h("span", { class: "answer" }, gauge(state), answer(run)), h("span", { class: "state" }, state),
    h("span", { class: "more" }, `${bound}, ${count(run.n_applied)} snapshots`), h("span", { class: "more" }, left(run))];
}

function left(run) {
  const forecast = run.snapshots_to_go;
  if (run.status !== "open" || run.verdict === "settled") return run.status;
  return forecast ? `about ${rough(forecast.estimate)} to go` : "no forecast yet";
}

// How many are done, what drifts, and what to run next: the open point that is nearest to settled. Pure.
export function summaryOf(runs) {
  if (!runs.length) return "No run of this campaign has been declared yet.";
  const named = (run) => run.declaration.name;
  const settled = runs.filter((run) => run.verdict === "settled");
  const drifting = runs.filter((run) => run.verdict === "drifting").map(named);
  const unfinished = runs.filter((run) => run.verdict !== "settled" && run.status !== "failed");
  const next = unfinished.filter((run) => run.status === "open")
    .sort((a, b) => farFrom(a) - farFrom(b))[0];
  const again = unfinished.filter((run) => run.status !== "open").map(named);
  return [`${settled.length} of ${runs.length} settled.`,
    drifting.length ? `Drifting: ${drifting.join(", ")}.` : "",
    next ? `Go on with ${named(next)}.` : "",
    again.length ? `Ended too early: ${again.join(", ")}.` : ""].filter(Boolean).join(" ");
}

// Judged points come before those that still gather, and those before the ones that have not begun.
function farFrom(run) {
  const far = run.n_snapshots === 0 ? 2e12 : run.verdict === "gathering" ? 1e12 : 0;
  return far + (run.snapshots_to_go?.estimate ?? 1e11);
}
