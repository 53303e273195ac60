// Steering the part by buttons, keys and game pad: one person moves the part, not six servos.

import { post } from "./api.js";

const KEYS = {
  ArrowUp: [0, 1, 0], ArrowDown: [0, -1, 0], ArrowLeft: [-1, 0, 0], ArrowRight: [1, 0, 0], ",": [0, 0, 1], ".": [0, 0, -1],
};
const MM = 1, DEG = 3, EVERY_MS = 150, DEAD = 0.18;
const SHOULDERS = [4, 5], LOWER = 0;

export class Steering {
  constructor(say, stop) {
    this.say = say;
    this.stop = stop;
    this.isBusy = false;
    const pad = document.getElementById("pad");
    for (const button of pad.querySelectorAll("button")) {
      button.addEventListener("click", () => this.step(...button.dataset.step.split(" ").map(Number)));
    }
    pad.addEventListener("keydown", (event) => {
      const step = KEYS[event.key];
      if (step === undefined) return;
      event.preventDefault();
      this.step(...step);
    });
    document.getElementById("pad-on").addEventListener("change", (event) => { if (event.target.checked) this.#watchPad(); });
  }

  // A step of so many units; one on its way at a time, so that nothing piles up.
  async step(x, y, turn, share = 1) {
    if (this.isBusy) return;
    this.isBusy = true;
    const size = Number(document.getElementById("step").value) * share;
    try {
      await post("/v1/nudge", { dx_mm: x * MM * size, dy_mm: y * MM * size, dangle_deg: turn * DEG * size });
      this.say("");
    } catch (error) {
      this.say(error.message);
    } finally {
      this.isBusy = false;
    }
  }

  #watchPad() {
    const said = document.getElementById("pad-said"), box = document.getElementById("pad-on");
    let wasStop = false, told = "";
    const look = () => {
      const pad = [...navigator.getGamepads()].find((one) => one !== null);
      const now = !box.checked ? "" : pad ? `game pad: ${pad.id}` : "no game pad yet: press one of its buttons";
      if (now !== told) said.textContent = told = now;
      if (!box.checked) return;
      if (pad) {
        const isStop = pad.buttons[LOWER]?.pressed ?? false;
        if (isStop && !wasStop) this.stop();
        wasStop = isStop;
        const [x = 0, y = 0, turn = 0] = pad.axes.map((axis) => (Math.abs(axis) < DEAD ? 0 : axis));
        const isHeld = SHOULDERS.some((button) => pad.buttons[button]?.pressed);
        if (isHeld && (x || y || turn)) this.step(x, -y, -turn);
      }
      setTimeout(look, EVERY_MS);
    };
    look();
  }
}
