// A travelling pair in motion: cos(phase) times the first mode plus sin(phase) times the second. It starts only when
// asked for, since moving pictures disturb, and stops after some turns.

import { h, say } from "./elements.js";
import { largest, paint } from "./field.js";

const [FRAMES, SECONDS_PER_TURN, TURNS] = [32, 3, 4];

export class Motion {
  #canvas = h("canvas", { role: "img", "aria-label": "The pair in motion", hidden: true });
  #button = h("button", { type: "button", class: "plain" }, "Show the pair in motion");
  #timer = 0;
  #frame = 0;
  #direction = 0;
  #pair = [];

  constructor(plan) {
    this.plan = plan;
    this.#button.addEventListener("click", () => (this.#timer ? this.stop() : this.#start()));
    this.root = h("div", { class: "motion", hidden: true }, this.#button, this.#canvas);
  }

  set(pair) {
    this.#pair = pair;
    if (this.#timer === 0 && !this.#canvas.hidden) this.#draw();
  }

  // +1 or -1: the way round; 0: the pair does not travel, and there is nothing to show.
  turn(direction) {
    this.#direction = direction;
    this.root.hidden = direction === 0;
    if (direction === 0) this.stop();
  }

  #start() {
    this.#canvas.hidden = false;
    this.#frame = 0;
    say(this.#button, "Stop");
    this.#timer = setInterval(() => this.#step(), (1000 * SECONDS_PER_TURN) / FRAMES);
  }

  stop() {
    clearInterval(this.#timer);
    this.#timer = 0;
    say(this.#button, "Show the pair in motion");
  }

  #step() {
    this.#frame += 1;
    if (this.#frame > FRAMES * TURNS || this.#pair.length !== 2) this.stop();
    else this.#draw();
  }

  #draw() {
    const phase = (2 * Math.PI * this.#direction * this.#frame) / FRAMES;
    const [c, s] = [Math.cos(phase), Math.sin(phase)];
    const [first, second] = this.#pair;
    const values = first.map((value, i) => c * value + s * second[i]);
    const top = Math.max(largest(first), largest(second));
    paint(this.#canvas, this.plan, values, -top, top);
  }
}
