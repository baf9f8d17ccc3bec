// What another tolerance would mean, before anybody declares a run with it.

import { h, say } from "./elements.js";
import { degrees, groupName, rough } from "./words.js";

export class WhatIf {
  #field = h("input", { id: "whatif", type: "number", min: 0.1, max: 45, step: "any" });
  #words = h("output", { for: "whatif" });
  #facts = null;

  constructor() {
    this.#field.addEventListener("input", () => this.#say());
    this.root = h("p", { class: "whatif", hidden: true }, h("label", { for: "whatif" }, "With a tolerance, deg, of"),
      this.#field, this.#words);
  }

  show(run, report) {
    if (!report) return;
    this.root.hidden = false;
    if (!this.#facts) this.#field.value = run.declaration.criterion.max_angle_deg;
    this.#facts = { run, report };
    this.#say();
  }

  #say() {
    const tolerance = Number(this.#field.value);
    say(this.#words, tolerance > 0 && tolerance <= 45
      ? whatIfWords(this.#facts.report, tolerance, this.#facts.run.declaration.criterion)
      : "between 0 and 45 deg");
  }
}

// Record length at which every bound meets the tolerance: its sampling part falls like the inverse square root of the
// record, its truncation part stays. Pure; {total, group} or null when truncation alone is too much.
export function recordNeeded(report, tolerance) {
  const sine = (angle) => Math.sin((Math.min(angle, 90) * Math.PI) / 180);
  let found = { total: 0, group: null };
  for (const group of report.groups) {
    const [bound, cut] = [sine(group.angle_bound_deg ?? 90), sine(group.truncation_angle_deg)];
    const room = sine(tolerance) - cut;
    if (room <= 0) return null;
    const total = report.n_snapshots * (Math.max(0, bound - cut) / room) ** 2;
    if (total > found.total) found = { total, group };
  }
  return found;
}

export function whatIfWords(report, tolerance, criterion) {
  const found = recordNeeded(report, tolerance);
  if (!found) return `${degrees(tolerance)} is below the truncation angle: only a larger rank would help.`;
  if (!found.group) return "there is no bound yet.";
  const name = groupName(found.group.modes);
  const fixed = tolerance === criterion.max_angle_deg ? "" : " The criterion of this run stays as it was declared.";
  return found.total <= report.n_snapshots
    ? `all bounds are within it now.${fixed}`
    : `about ${rough(found.total)} snapshots would be needed, for ${name}.${fixed}`;
}
