// Intake health, and what is strange now: rate, queue, missing batches, repeats, drift.

import { h } from "./elements.js";
import { bytes, capital, count, digits, meaning, percent } from "./words.js";

const RATE_SECONDS = 20; // long enough to smooth batches, short enough to see a solver stop
const QUIET_SECONDS = 60;
const [NEWEST, MUCH_NEW] = [100, 0.05]; // snapshots looked at, and the share of them that is worth a word

// Snapshots in the last seconds, from counters read now and then.
export class Rate {
  #seen = [];
  #moved = null;

  note(seconds, n) {
    const last = this.#seen[this.#seen.length - 1];
    if (last && n !== last.n) this.#moved = seconds;
    this.#seen.push({ seconds, n });
    while (this.#seen.length > 2 && seconds - this.#seen[0].seconds > RATE_SECONDS) this.#seen.shift();
    this.#moved ??= seconds;
  }

  get perSecond() {
    const [first, last] = [this.#seen[0], this.#seen[this.#seen.length - 1]];
    return this.#seen.length < 2 ? null : (last.n - first.n) / (last.seconds - first.seconds);
  }

  quietSeconds(seconds) { return this.#moved === null ? 0 : seconds - this.#moved; }
}

export function intakeList(run, rate) {
  const queue = run.n_snapshots - run.n_applied;
  const waiting = run.waiting
    ? `${count(run.waiting.n_batches)} wait for batch ${run.waiting.missing_sequence}` : "none";
  const pairs = [
    ["Status", run.status],
    ["Rate", rate.perSecond === null ? "–" : `${digits(rate.perSecond, 2)} snapshots/s`],
    ["Stored", `${count(run.n_snapshots)} snapshots`],
    ["Not yet in the basis", `${count(queue)} snapshots (a block is ${count(blockOf(run.declaration))})`],
    ["Batches behind a gap", waiting],
    ["Journal", bytes(run.journal_bytes)],
  ];
  return h("dl", { class: "pairs" }, pairs.flatMap(([name, value]) => [h("dt", {}, name), h("dd", {}, value)]));
}

function blockOf({ block_length: length, retained_rank: rank, n_points: n, fields }) {
  return length || 2 * Math.min(rank, n * fields.length);
}

// Sentences about what needs a look; empty when nothing does. Pure.
export function strange(run, report, quietSeconds, novelty = null) {
  const still = report.stationarity;
  const found = [];
  if (run.status === "failed") found.push(`${capital(meaning(run))}.`);
  if (run.waiting) found.push(`Batch ${run.waiting.missing_sequence} is missing; what came after it waits.`);
  if (run.status === "open" && run.n_snapshots > 0 && quietSeconds > QUIET_SECONDS) {
    found.push(`No new snapshot for ${Math.floor(quietSeconds / 60)} min.`);
  }
  const beyond = novelty ? recentlyBeyond(novelty) : 0;
  if (beyond > MUCH_NEW) {
    found.push(`${percent(beyond)} of the newest snapshots up to ${count(novelty.n_snapshots)} are beyond what was known.`);
  }
  if (still.drifting) found.push(`The record drifts (p = ${digits(still.drift_p_value, 2)}).`);
  if (still.startup_in_doubt) found.push("No end of the start-up has been found.");
  if (still.repeated_snapshots > 0) found.push(`${count(still.repeated_snapshots)} snapshots repeat the one before.`);
  return found;
}

// Share of the newest snapshots that exceed a limit.
function recentlyBeyond({ outside, outside_limit: first, hotelling, hotelling_limit: second }) {
  const from = Math.max(0, outside.length - NEWEST);
  const over = (value, limit) => value !== null && limit !== null && value > limit;
  let n = 0;
  for (let k = from; k < outside.length; k += 1) n += over(outside[k], first[k]) || over(hotelling[k], second[k]) ? 1 : 0;
  return outside.length ? n / (outside.length - from) : 0;
}

export function strangeList(sentences) {
  return sentences.length
    ? h("ul", { class: "strange" }, sentences.map((text) => h("li", {}, text)))
    : h("p", { class: "note" }, "Nothing.");
}

export function recordList(run, report) {
  const { unit } = run.declaration.time;
  const pairs = [
    ["Record", `${digits(report.time_span, 4)} ${unit}`],
    ["Left out as start-up", `${count(report.startup_snapshots)} snapshots`],
    ["Integral time", report.integral_time === null ? "–" : `${digits(report.integral_time)} ${unit}`],
    ["Independent samples", digits(report.effective_samples)],
    ["Drift, p-value", digits(report.stationarity.drift_p_value, 2)],
  ];
  return h("dl", { class: "pairs" }, pairs.flatMap(([name, value]) => [h("dt", {}, name), h("dd", {}, value)]));
}
