// All runs with their verdicts, newest first, and the campaigns they belong to.

import { gauge, h, say, wide } from "./elements.js";
import { answer, clock, count, rough, stateOf } from "./words.js";

// Every run there is, page by page; the service keeps at most some thousand.
export async function allRuns(line) {
  const runs = [];
  for (let path = "/v1/runs"; path;) {
    const page = await line.json(path);
    runs.push(...page.runs);
    path = page.next;
  }
  return runs;
}

// name -> its runs, oldest first
export function campaignsOf(runs) {
  const found = new Map();
  for (const run of [...runs].reverse()) {
    const name = run.declaration.campaign;
    if (name) found.set(name, [...(found.get(name) || []), run]);
  }
  return found;
}

export class ListView {
  events = "/v1/events";
  #rows = new Map();
  #body = h("tbody");
  #campaigns = h("ul", { class: "campaigns" });
  #empty = h("p", { class: "note" });
  #find = h("input", { id: "find", type: "search", autocomplete: "off" });
  #loading = null;
  #again = 0;

  constructor(line) {
    this.line = line;
    this.#find.addEventListener("input", () => this.#filter());
    const head = h("tr", {}, ["Run", "Verdict", "Answer", "Snapshots", "Still to go", "Declared"].map((text) =>
      h("th", { scope: "col" }, text)));
    this.root = h("div", { class: "list" }, h("h1", {}, "Have the leading modes settled?"),
      h("section", { "aria-label": "Campaigns" }, this.#campaigns),
      h("p", { class: "find" }, h("label", { for: "find" }, "Find a run"), this.#find),
      wide("Runs", h("table", { class: "runs" }, h("caption", { class: "unseen" }, "Runs, newest first"),
        h("thead", {}, head), this.#body)), this.#empty);
  }

  trail() { return []; }

  recolour() {}

  end() { clearTimeout(this.#again); }

  news() {
    clearTimeout(this.#again);
    this.#again = setTimeout(() => this.load(), 300); // many runs report at once
  }

  tick() { this.load(); }

  load() {
    this.#loading ??= allRuns(this.line).then((runs) => this.#show(runs), () => {})
      .finally(() => { this.#loading = null; });
    return this.#loading;
  }

  #show(runs) {
    const kept = new Set(runs.map((run) => run.id));
    for (const [id, row] of this.#rows) if (!kept.has(id)) { row.element.remove(); this.#rows.delete(id); }
    runs.forEach((run, place) => {
      const row = this.#row(run);
      if (this.#body.children[place] !== row) this.#body.insertBefore(row, this.#body.children[place] || null);
    });
    say(this.#empty, runs.length ? "" : "No run has been declared yet: POST /v1/runs, or use a client.");
    this.#showCampaigns(campaignsOf(runs));
    this.#filter();
  }

  // The row of a run; built again only when what it shows has changed.
  #row(run) {
    const key = JSON.stringify([run.status, run.verdict, run.n_applied, run.n_snapshots, run.snapshots_to_go,
      run.waiting, run.declaration.labels]);
    const known = this.#rows.get(run.id);
    if (known?.key === key) return known.element;
    const element = known?.element || h("tr");
    const cells = cellsOf(run);
    if (known) [...element.children].slice(1).forEach((cell, k) => cell.replaceWith(cells[k + 1])); // focus stays
    else element.append(...cells);
    this.#rows.set(run.id, { key, element, text: `${run.declaration.name} ${run.id} ${run.declaration.campaign || ""}
      ${run.verdict} ${run.status} ${Object.entries(run.declaration.labels).flat().join(" ")}`.toLowerCase() });
    return element;
  }

  #showCampaigns(campaigns) {
    const texts = [...campaigns].map(([name, runs]) => {
      const settled = runs.filter((run) => run.verdict === "settled").length;
      return [name, `${name}: ${settled} of ${runs.length} settled`];
    });
    const now = [...this.#campaigns.children].map((item) => item.textContent).join("\n");
    if (now === texts.map(([, text]) => text).join("\n")) return;
    this.#campaigns.replaceChildren(...texts.map(([name, text]) =>
      h("li", {}, h("a", { href: `#/campaigns/${encodeURIComponent(name)}` }, text))));
  }

  #filter() {
    const wanted = this.#find.value.trim().toLowerCase();
    for (const { element, text } of this.#rows.values()) element.hidden = wanted !== "" && !text.includes(wanted);
  }
}

function cellsOf(run) {
  const forecast = run.snapshots_to_go;
  const toGo = run.status === "open" && run.verdict !== "settled" && forecast
    ? `${rough(forecast.estimate)} (${rough(forecast.low)} to ${rough(forecast.high)})` : "";
  const labels = Object.entries(run.declaration.labels).map(([name, value]) => `${name} ${value}`).join(", ");
  const state = stateOf(run);
  return [
    h("th", { scope: "row" }, h("a", { href: `#/runs/${encodeURIComponent(run.id)}` }, run.declaration.name),
      labels ? h("span", { class: "labels" }, labels) : null),
    h("td", {}, h("span", { class: `state ${state}` }, gauge(state), state)),
    h("td", {}, answer(run)),
    h("td", { class: "number" }, count(run.n_applied)),
    h("td", { class: "number" }, toGo),
    h("td", {}, clock(run.created)),
  ];
}
