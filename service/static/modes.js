// The leading modes as pictures, group by group, at the newest or an older checkpoint.

import { h, say } from "./elements.js";
import { GroupFigure } from "./group.js";
import { drawnHere, planOf } from "./field.js";
import { count } from "./words.js";

const FIRST_MODES = 6; // shown before the button for more
const LAST_SNAPSHOTS = 2000; // enough for some tens of periods, and 100 kB at most

export class ModesSection {
  #slider = h("input", { type: "range", id: "checkpoint", min: 0, max: 0, step: 1, value: 0 });
  #where = h("output", { for: "checkpoint" });
  #fields = h("fieldset", { class: "fields" });
  #figures = h("div", { class: "figures" });
  #more = h("button", { type: "button", class: "plain", hidden: true }, "More modes");
  #trouble = h("p", { class: "note" });
  #groups = [];
  #facts = null;
  #shown = "";
  #drawing = 0;
  #n = FIRST_MODES;
  #field = 0;
  #plan = null;

  // `chosen` is told the evaluation of the checkpoint under the slider
  constructor(line, path, chosen) {
    [this.line, this.path, this.chosen] = [line, path, chosen];
    this.#slider.addEventListener("input", () => this.#draw());
    this.#more.addEventListener("click", () => { this.#n += FIRST_MODES; this.#draw(); });
    this.root = h("section", { class: "modes" }, h("h2", {}, "Modes"),
      h("div", { class: "choices" }, this.#fields, h("p", { class: "slider" },
        h("label", { for: "checkpoint" }, "Checkpoint"), this.#slider, this.#where)),
      this.#trouble, this.#figures, this.#more);
  }

  show(run, reports, report, checkpoints) {
    const following = !this.#facts || this.#slider.value === this.#slider.max;
    const kept = [...checkpoints].reverse();
    const before = this.#facts?.kept[Number(this.#slider.value)]?.n_snapshots;
    this.#facts = { run, reports: [...reports, report], kept };
    this.#slider.max = Math.max(0, kept.length - 1);
    const same = kept.findIndex((one) => one.n_snapshots === before);
    this.#slider.value = following || same < 0 ? this.#slider.max : same;
    this.#offerFields(run.declaration.fields);
    this.#draw();
  }

  recolour() { for (const group of this.#groups) group.recolour(); }

  end() {
    this.#drawing += 1;
    for (const group of this.#groups) group.end();
  }

  #offerFields(fields) {
    if (this.#fields.childElementCount) return;
    this.#fields.append(h("legend", {}, "Field"), ...fields.map((field, k) => h("label", {},
      h("input", { type: "radio", name: "field", value: k, checked: k === 0, change: () => {
        this.#field = k;
        for (const group of this.#groups) group.draw(k);
      } }), ` ${field.name}${field.unit === "1" ? "" : ` (${field.unit})`}`)));
    this.#fields.hidden = fields.length < 2;
  }

  // The checkpoint under the slider; groups are taken from the evaluation that was newest then.
  #draw() {
    const { run, reports, kept } = this.#facts;
    const checkpoint = kept[Number(this.#slider.value)];
    this.#slider.disabled = kept.length < 2;
    if (!checkpoint) { say(this.#trouble, "No checkpoint yet: pictures come with the first one."); return; }
    const newest = Number(this.#slider.value) === kept.length - 1;
    say(this.#where, `${count(checkpoint.n_snapshots)} snapshots${newest ? " (newest)" : ""}`);
    this.#slider.setAttribute("aria-valuetext", this.#where.textContent);
    const then = reports.filter((one) => one.n_snapshots <= checkpoint.n_snapshots && one.groups.length);
    this.chosen(newest ? reports[reports.length - 1] : then[then.length - 1], checkpoint.n_snapshots);
    const groups = this.#wanted(run, then[then.length - 1]);
    const key = JSON.stringify([checkpoint.n_snapshots, groups.map((group) => [group.modes, group.travelling])]);
    if (key === this.#shown) return;
    this.#shown = key;
    this.#read(run, checkpoint.n_snapshots, groups);
  }

  #wanted(run, report) {
    const wanted = (report?.groups || []).filter(({ modes }) => modes[0] <= run.declaration.criterion.n_modes);
    const shown = wanted.filter(({ modes }, k) => k === 0 || modes[0] <= this.#n);
    this.#more.hidden = shown.length === wanted.length;
    return shown;
  }

  async #read(run, checkpoint, groups) {
    this.#drawing += 1;
    const turn = this.#drawing;
    const { declaration } = run;
    if (drawnHere(declaration)) this.#plan ??= planOf(declaration.grid);
    try {
      const coefficients = groups.length ? await this.#coefficients(groups, checkpoint) : null;
      if (turn !== this.#drawing) return;
      this.#arrange(groups, declaration);
      for (const [k, group] of this.#groups.entries()) {
        await group.read(checkpoint, coefficients, this.#field, groups[k].travelling || null);
        if (turn !== this.#drawing) return;
      }
      say(this.#trouble, "");
    } catch (refusal) {
      if (refusal.status > 0) say(this.#trouble, refusal.message);
      this.#shown = ""; // tried again with the next news
    }
  }

  #coefficients(groups, checkpoint) {
    const n = Math.max(...groups.flatMap((group) => group.modes));
    return this.line.npy(`${this.path}/coefficients?n=${n}&last=${LAST_SNAPSHOTS}&checkpoint=${checkpoint}`);
  }

  // Figures stay in place while their group stays the same, so that a live page does not jump.
  #arrange(groups, declaration) {
    const old = new Map(this.#groups.map((group) => [group.name, group]));
    this.#groups = groups.map(({ modes }) => {
      const found = old.get(modes.join());
      old.delete(modes.join());
      return found || new GroupFigure(this.line, this.path, modes, declaration, this.#plan);
    });
    for (const gone of old.values()) gone.end();
    const wanted = this.#groups.map((group) => group.root);
    if (wanted.some((root, k) => this.#figures.children[k] !== root) || this.#figures.childElementCount !== wanted.length) {
      this.#figures.replaceChildren(...wanted);
    }
  }
}
