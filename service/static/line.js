// The page's line to the service: questions with answers, one stream of events, and whether it stands.

export class Refusal extends Error {
  constructor(status, problem) {
    super(problem.detail || problem.title || `status ${status}`);
    this.status = status;
  }
}

export class Line extends EventTarget {
  #worker = new Worker("/page/line-worker.js", { type: "module" });
  #asked = new Map();
  #next = 1;
  #path = null;
  live = false;

  constructor() {
    super();
    this.#worker.onmessage = ({ data }) => this.#heard(data);
  }

  // Follow one stream of events; "live" is told when it stands (again), and everything should then be read anew.
  watch(path) {
    this.#path = path;
    this.#worker.postMessage({ kind: "watch", path });
  }

  pause() { this.#worker.postMessage({ kind: "unwatch" }); }

  resume() { if (this.#path) this.watch(this.#path); }

  json(path, options = {}) { return this.#ask(path, "json", options).then((answer) => answer.value); }

  // {shape, values, snapshots}: a float32 array and the number of snapshots it covers
  npy(path) { return this.#ask(path, "npy", {}).then((answer) => ({ ...answer.value, snapshots: answer.snapshots })); }

  post(path, body) {
    const headers = { "Content-Type": "application/json" };
    return this.#ask(path, "json", { method: "POST", headers, body: JSON.stringify(body) });
  }

  #ask(path, as, options) {
    const id = this.#next;
    this.#next += 1;
    return new Promise((keep, fail) => {
      this.#asked.set(id, { keep, fail });
      this.#worker.postMessage({ kind: "ask", id, path, as, options });
    });
  }

  #heard(message) {
    if (message.kind === "answer") this.#answered(message);
    else if (message.kind === "event") this.dispatchEvent(new CustomEvent("news", { detail: message }));
    else this.#stands(message.kind === "live");
  }

  #answered({ id, status, value, snapshots }) {
    const { keep, fail } = this.#asked.get(id);
    this.#asked.delete(id);
    if (status >= 200 && status < 300) { keep({ value, snapshots }); return; }
    if (status === 401) this.dispatchEvent(new Event("token"));
    if (status === 0) this.#stands(false);
    fail(new Refusal(status, value));
  }

  #stands(live) {
    if (live === this.live && !live) return;
    this.live = live;
    this.dispatchEvent(new Event(live ? "live" : "lost"));
  }
}
