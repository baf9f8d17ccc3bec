// All requests of the page are made here, off its main thread: one event stream, and answers parsed to values.
//
// A service that is being started again refuses connections for a moment. Here such a refusal is a state that the page
// shows, and the next attempt follows by itself.

import { parseNpy } from "./npy.js";

const KINDS = ["declared", "changed", "evaluation", "checkpoint", "checkpoint-damaged",
  "closing", "closed", "failed", "deleted"];
const REOPEN_MILLISECONDS = 1500; // about as long as a restart takes; the browser's own retry is 2 s
const ANSWER_MILLISECONDS = 10000; // reading never waits for an update: a service this late is frozen or cut off

let source = null;
let address = null;
let last = null;
let timer = 0;

onmessage = ({ data }) => {
  if (data.kind === "watch") watch(data.path);
  else if (data.kind === "unwatch") unwatch();
  else if (data.kind === "ask") ask(data);
};

function watch(path) {
  if (path !== address) last = null; // numbers are global, but a new view starts from now on
  unwatch();
  address = path;
  source = new EventSource(last === null ? path : `${path}?after=${last}`);
  source.onopen = () => postMessage({ kind: "live" });
  source.onerror = () => lost(source);
  for (const kind of KINDS) source.addEventListener(kind, heard);
}

function unwatch() {
  clearTimeout(timer);
  if (source) source.close();
  source = null;
}

function heard(event) {
  const number = Number(event.lastEventId);
  if (last !== null && number <= last) return; // seen before a reconnection
  last = number;
  postMessage({ kind: "event", name: event.type, data: JSON.parse(event.data) });
}

// The browser tries again by itself after a cut, but gives up for good after a refusal; then we do.
function lost(which) {
  if (which !== source) return;
  postMessage({ kind: "lost" });
  if (source.readyState === EventSource.CLOSED) reopen();
}

function reopen() {
  clearTimeout(timer);
  timer = setTimeout(() => watch(address), REOPEN_MILLISECONDS);
}

async function ask({ id, path, as, options }) {
  const late = new AbortController();
  const alarm = setTimeout(() => late.abort(), ANSWER_MILLISECONDS);
  try {
    const answer = await fetch(path, { cache: "no-cache", credentials: "same-origin", signal: late.signal, ...options });
    clearTimeout(alarm); // what has begun to come may take its time
    const snapshots = answer.headers.get("Slackwater-Snapshots");
    const value = answer.ok ? await valueOf(answer, as) : await problemOf(answer);
    const owned = value instanceof Object && value.values instanceof Float32Array ? [value.values.buffer] : [];
    postMessage({ kind: "answer", id, status: answer.status, value, snapshots: Number(snapshots) }, owned);
  } catch {
    clearTimeout(alarm);
    postMessage({ kind: "answer", id, status: 0, value: { title: "The service does not answer" } });
    if (source) reopen(); // a stream that looks open may be cut off as well
  }
}

async function valueOf(answer, as) {
  if (answer.status === 204) return null;
  return as === "npy" ? parseNpy(await answer.arrayBuffer()) : answer.json();
}

async function problemOf(answer) {
  const text = await answer.text();
  try { return JSON.parse(text); } catch { return { title: `HTTP status ${answer.status}` }; }
}
