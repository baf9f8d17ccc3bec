// What the page says, made from the numbers of the service; pure functions, in the service's own words.

const THIN = "\u202f"; // narrow space that does not break

export function count(value) {
  return Math.round(value).toString().replace(/\B(?=(\d{3})+$)/g, ",");
}

// A forecast to the two digits it is worth: 8,361 is 8,400.
export function rough(value) {
  return count(Number(value.toPrecision(2)));
}

export function digits(value, n = 3) {
  if (value === null || value === undefined || !Number.isFinite(value)) return "–";
  if (value === 0) return "0";
  const size = Math.abs(value);
  return size >= 1e5 || size < 1e-3 ? value.toExponential(n - 1) : String(Number(value.toPrecision(n)));
}

export function percent(fraction) {
  return fraction === null || fraction === undefined ? "–" : `${digits(100 * fraction)}${THIN}%`;
}

export function degrees(value) {
  return value === null || value === undefined ? "–" : `${digits(value)}${THIN}deg`;
}

export function bytes(value) {
  const units = ["B", "kB", "MB", "GB", "TB"];
  const k = value > 0 ? Math.min(Math.floor(Math.log10(value) / 3), 4) : 0;
  return `${digits(value / 1000 ** k)}${THIN}${units[k]}`;
}

export function clock(iso) {
  return new Date(iso).toLocaleString([], { dateStyle: "medium", timeStyle: "short" });
}

export function groupName(modes) {
  const [first, last] = [modes[0], modes[modes.length - 1]];
  return first === last ? `mode ${first}` : `modes ${first} to ${last}`;
}

// What the service found of a travelling pair; empty when it found none.
export function travellingWords(found, unit) {
  if (!found) return "";
  const wave = [found.wave_length ? `wave length ${digits(found.wave_length)}` : "",
    found.speed ? `convection speed ${digits(found.speed)}` : ""].filter(Boolean).join(", ");
  return `A travelling pair: ${digits(found.frequency)} per ${unit}, coherence ${digits(found.coherence, 2)}, `
    + `phase ${degrees(found.phase_deg)}${wave ? `, ${wave}` : ""}.`;
}

export function capital(text) {
  return text.charAt(0).toUpperCase() + text.slice(1);
}

// The state that decides colour and shape.
export function stateOf(run) {
  return run.status === "failed" ? "failed" : run.verdict;
}

// May I stop: the largest words of the page.
export function answer(run) {
  if (run.status === "failed") return "Failed";
  if (run.status === "open" && run.n_snapshots === 0) return "No data yet";
  if (run.status === "open") return run.advice === "may stop" ? "May stop" : "Continue";
  return run.verdict === "settled" ? "Settled" : "Not settled";
}

const MEANING = {
  gathering: "too little recorded yet to judge",
  unsettled: "the modes have not settled yet",
  settled: "the modes have settled",
  drifting: "the record is not stationary",
  inseparable: "the wanted modes cannot be told from the next ones",
};

export function meaning(run) {
  if (run.status === "failed") return run.reason || "the run has failed";
  const ending = run.status === "open" ? "" : `; the run is ${run.status}`;
  return `${run.verdict}: ${MEANING[run.verdict]}${ending}`;
}

// How long still.
export function toGo(forecast, unit) {
  if (!forecast) return null;
  const { estimate, low, high, time } = forecast;
  const span = time === null || time === undefined ? "" : `, about ${digits(time, 2)} ${unit}`;
  return `about ${rough(estimate)} snapshots to go (${rough(low)} to ${rough(high)})${span}`;
}

export function howLong(run, report) {
  if (run.status === "failed") return "";
  if (run.verdict === "settled") {
    const since = report.verdict.settled_since;
    return since ? `settled since snapshot ${count(since)}, now ${count(report.n_snapshots)}` : "";
  }
  if (run.status !== "open") return `ended after ${count(report.n_snapshots)} snapshots`;
  return toGo(report.verdict.snapshots_to_go, run.declaration.time.unit) || "no forecast yet";
}

// Which group holds it back: the one furthest from settled; a bound that does not exist yet counts as the largest.
export function worst(groups) {
  const reach = (group) => (group.settled ? 0 : 1e6) + (group.angle_bound_deg ?? 1e5);
  return groups.reduce((most, group) => (most === null || reach(group) > reach(most) ? group : most), null);
}

export function holdsBack(run, report) {
  const group = worst(report.groups);
  if (!group) return "";
  const tolerance = degrees(run.declaration.criterion.max_angle_deg);
  const name = capital(groupName(group.modes));
  return `${name}: bound ${degrees(group.angle_bound_deg)}, tolerated ${tolerance}`;
}
