// One run: the answer first, then the bound, the groups and energies, the modes, and how the intake does.

import { BoundSection } from "./boundsection.js";
import { energyTable } from "./energies.js";
import { h, say, table, wide } from "./elements.js";
import { intakeList, Rate, recordList, strange, strangeList } from "./health.js";
import { ModesSection } from "./modes.js";
import { SignalsSection } from "./signals.js";
import { VerdictPanel } from "./verdict.js";
import { answer, capital, degrees, groupName, percent } from "./words.js";

const MORE_MODES = 4; // energies shown beyond the wanted ones

export class RunView {
  #panel = new VerdictPanel();
  #rate = new Rate();
  #bound = new BoundSection();
  #name = h("h1", {}, "…");
  #labels = h("p", { class: "labels" });
  #parts = {};
  #shown = new Map();
  #facts = { run: null, report: null, reports: [], checkpoints: [] };
  #again = 0;
  #checkpoint = null;
  #novelty = null;
  #busy = false;
  #missed = false;

  constructor(line, id) {
    [this.line, this.id] = [line, id];
    this.path = `/v1/runs/${encodeURIComponent(id)}`;
    this.events = `${this.path}/events`;
    this.modes = new ModesSection(line, this.path, (report, n) => this.#chosen(report, n));
    this.signals = new SignalsSection(line, this.path);
    const part = (name, title) => {
      this.#parts[name] = h("div");
      return h("section", { class: name }, h("h2", {}, title), this.#parts[name]);
    };
    this.root = h("article", { class: "run" }, h("header", {}, this.#name, this.#labels), this.#panel.root,
      h("div", { class: "columns" }, this.#bound.root,
        h("div", { class: "aside" }, part("strange", "Strange now"), part("intake", "Intake"),
          part("record", "Record"))),
      h("div", { class: "columns even" }, part("groups", "Groups of modes"), part("energies", "Energies")), this.modes.root, this.signals.root,
      part("take", "Take away"));
  }

  trail() { return [h("a", { href: "#/" }, "All runs")]; }

  end() {
    clearTimeout(this.#again);
    this.#bound.end();
    this.modes.end();
    this.signals.end();
  }

  recolour() {
    this.#bound.recolour();
    this.modes.recolour();
    this.signals.recolour();
  }

  news({ name }) {
    if (name === "deleted") { say(this.#labels, "This run has been removed."); return; }
    clearTimeout(this.#again);
    this.#again = setTimeout(() => this.load(), 100);
  }

  // Between looks only counters and the published numbers move.
  async tick() {
    if (!this.#facts.run) { this.load(); return; }
    try {
      const run = await this.line.json(this.path);
      const moved = run.n_applied !== this.#facts.run.n_applied || run.status !== this.#facts.run.status;
      this.#facts.run = run;
      if (moved) this.#facts.report = await this.line.json(`${this.path}/convergence`);
      this.#show();
    } catch { /* the line tells when it is lost */ }
  }

  // Everything, read anew; a second call while one is on its way is made up for afterwards.
  async load() {
    if (this.#busy) { this.#missed = true; return; }
    this.#busy = true;
    try {
      const [run, report, history, kept] = await Promise.all(["", "/convergence", "/convergence/history", "/checkpoints"]
        .map((end) => this.line.json(this.path + end)));
      this.#facts = { run, report, reports: history.evaluations, checkpoints: kept.checkpoints };
      this.#show();
    } catch (refusal) {
      if (refusal.status === 404) this.#gone(refusal.message);
    } finally {
      this.#busy = false;
    }
    if (this.#missed) { this.#missed = false; await this.load(); }
  }

  #gone(text) {
    say(this.#name, "No such run");
    say(this.#labels, text);
    this.root.replaceChildren(this.#name, this.#labels);
  }

  #show() {
    const { run, report, reports, checkpoints } = this.#facts;
    const { declaration } = run;
    this.#rate.note(performance.now() / 1000, run.n_snapshots);
    say(this.#name, declaration.name);
    this.#showLabels(declaration);
    this.#panel.show(run, report, reports[reports.length - 1]);
    document.title = `${answer(run)} · ${declaration.name}`;
    this.#bound.show(run, [...reports, report]);
    const quiet = this.#rate.quietSeconds(performance.now() / 1000);
    this.#fill("strange", strangeList(strange(run, report, quiet, this.#novelty)));
    this.#fill("intake", intakeList(run, this.#rate));
    this.#fill("record", recordList(run, report));
    this.#fill("groups", groupTable(report, declaration.criterion));
    if (!checkpoints.length) this.#showEnergies(report);
    this.#fill("take", downloads(this.path, checkpoints, declaration.grid));
    this.modes.show(run, reports, report, checkpoints);
  }

  // The checkpoint under the slider, and the evaluation that was newest then.
  #chosen(report, checkpoint) {
    this.#showEnergies(report);
    if (checkpoint === this.#checkpoint) return;
    this.#checkpoint = checkpoint;
    this.signals.read(this.#facts.run.declaration, checkpoint, (found) => { this.#novelty = found; });
  }

  #showEnergies(report) {
    if (report) this.#fill("energies", energyTable(report, this.#facts.run.declaration.criterion.n_modes + MORE_MODES));
  }

  #showLabels({ campaign, labels, reference, criterion }) {
    const texts = Object.entries(labels).map(([name, value]) => `${name} ${value}`);
    if (reference) texts.push(`reference ${reference.length} at speed ${reference.speed}`);
    texts.push(`${criterion.n_modes} modes to ${criterion.max_angle_deg} deg at ${percent(criterion.confidence)}`);
    const link = campaign ? h("a", { href: `#/campaigns/${encodeURIComponent(campaign)}` }, campaign) : null;
    const key = texts.join(", ");
    if (this.#labels.dataset.key === key) return;
    this.#labels.dataset.key = key;
    this.#labels.replaceChildren(...(link ? ["Campaign ", link, ". "] : []), capital(key));
  }

  // A part is put in place only when its words differ, so that nothing flickers and selections stay.
  #fill(name, element) {
    const place = this.#parts[name];
    const key = element.outerHTML;
    if (this.#shown.get(name) === key) return;
    this.#shown.set(name, key);
    place.replaceChildren(element);
  }
}

function groupTable(report, criterion) {
  if (!report.groups.length) return h("p", { class: "note" }, "No groups yet: the first block is not full.");
  const rows = report.groups.map((group) => [capital(groupName(group.modes)), group.settled ? "yes" : "no",
    degrees(group.angle_bound_deg), degrees(group.angle_deg), degrees(group.truncation_angle_deg),
    group.energy_halfwidth === null ? "–" : `± ${percent(group.energy_halfwidth)}`]);
  const caption = `Groups of modes, tolerance ${degrees(criterion.max_angle_deg)}`;
  return wide(caption, table(caption, ["Modes", "Settled", "Bound", "Expected", "Truncation", "Energy"], rows, "numbers"));
}

function downloads(path, checkpoints, grid) {
  const links = [["Verdict and numbers (JSON)", "/convergence"], ["All evaluations (JSON)", "/convergence/history"],
    ...(checkpoints.length ? FILES : [])].map(([text, end]) => [text, path + end]);
  if (checkpoints.length) links.push(["Checkpoint (zipped zarr)", checkpoints[0].archive], ...vtkLinks(path, grid));
  return h("ul", { class: "downloads" }, links.map(([text, href]) => h("li", {}, h("a", { href, download: "" }, text))));
}

const FILES = [["Results (NetCDF)", "/results.nc"], ["Modes (NPY)", "/modes"], ["Mean (NPY)", "/mean"],
  ["Mean (PNG)", "/mean.png"], ["Coefficients (NPY)", "/coefficients"], ["Coefficients (CSV)", "/coefficients.csv"],
  ["Times (NPY)", "/times"], ["Singular values (CSV)", "/singular-values.csv"]];

// the kind of VTK file depends on the grid; points without positions have none
function vtkLinks(path, { kind }) {
  const suffix = { uniform: "vti", rectilinear: "vtr", points: "vtp" }[kind];
  return suffix ? [["Modes (VTK)", `${path}/modes.${suffix}`], ["Mean (VTK)", `${path}/mean.${suffix}`]] : [];
}
