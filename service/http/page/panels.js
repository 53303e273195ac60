// The panels beside the picture: state, health, goals, blend, plot.

import { call } from "./api.js";

const $ = (id) => document.getElementById(id);

// Every state has its own form, so that it is told without colour.
const FORMS = {
  unknown: "M16 4a12 12 0 1 0 .1 0", disarmed: "M16 4a12 12 0 1 0 .1 0", ready: "M16 4a12 12 0 1 0 .1 0M16 10a6 6 0 1 0 .1 0",
  servoing: "M5 16h20M17 7l9 9-9 9", holding: "M16 3l13 13-13 13L3 16z", stopped: "M6 6h20v20H6z", faulted: "M16 4l13 24H3zM16 13v7M16 23.500v.5",
};
const TOLD = {
  disarmed: "disarmed", ready: "armed, holding still", servoing: "working on a goal", holding: "goal reached, holding it",
  stopped: "stopped", faulted: "fault",
};

export function showState(state) {
  const box = $("state");
  if (box.dataset.state !== state.state) {
    box.dataset.state = state.state;
    box.querySelector("path").setAttribute("d", FORMS[state.state]);
    box.querySelector("strong").textContent = TOLD[state.state];
  }
  put("why", state.why);
  $("faults").hidden = state.faults.length < 2;
  if (state.faults.length > 1) $("faults").replaceChildren(...state.faults.map((fault) => item("li", fault)));
  const isOn = ["ready", "servoing", "holding"].includes(state.state);
  enable("arm", state.state === "disarmed");
  enable("disarm", isOn || state.state === "disarmed");
  enable("reset", state.state === "stopped" || state.state === "faulted");
  enable("go", isOn);
  enable("cancel", state.state === "servoing" || state.state === "holding");
  for (const button of $("pad").querySelectorAll("button")) button.disabled = !isOn;
  put("error-mm", number(state.error_mm, 2));
  put("error-deg", number(state.error_deg, 1));
}

export function showUnknown() {
  $("state").dataset.state = "unknown";
  $("state").querySelector("path").setAttribute("d", FORMS.unknown);
  $("state").querySelector("strong").textContent = "unknown";
  for (const id of ["arm", "disarm", "reset", "go", "cancel"]) enable(id, false);
}

function enable(id, isOn) { $(id).disabled = !isOn; }
function put(id, text) { if ($(id).textContent !== text) $(id).textContent = text; }
function item(name, text) { const made = document.createElement(name); made.textContent = text; return made; }
const number = (value, digits) => (value === null ? "–" : Math.abs(value).toFixed(digits));

export function showHealth(state) {
  const { board, cage, loop } = state;
  const rows = [
    ["camera", state.frame_age_ms === null ? "no frame yet" : `newest frame ${state.frame_age_ms.toFixed(0)} ms old`, state.frame_age_ms !== null && state.frame_age_ms < 150],
    ["part", state.measured === null ? "not seen" : "seen", state.measured !== null],
    ["cage", cage === null ? "–" : cage.is_caged ? `closed, ${cage.margin_mm} mm to spare` : "not shown to be closed", cage === null ? null : cage.is_caged],
    ["board", board === null ? "says nothing of itself" : `heard ${board.silent_ms.toFixed(0)} ms ago`, board === null ? null : board.silent_ms < 300],
    ["watchdog", board === null ? "–" : board.watchdog_latched ? "latched: pulses off" : "awake", board === null ? null : !(board.watchdog_latched && state.joints !== null)],
    ["supply", board?.supply_v == null ? "not measured" : `${board.supply_v.toFixed(2)} V`, null],
    ["board is at", board?.temperature_c == null ? "not measured" : `${board.temperature_c.toFixed(0)} °C`, board?.temperature_c == null ? null : board.temperature_c < 60],
    ["step takes", `${loop.busy_ms_p50.toFixed(1)} ms, 1 in 100 over ${loop.busy_ms_p99.toFixed(1)}`, null],
    ["scheduling", loop.scheduling, null],
  ];
  const list = $("health-list");
  if (list.children.length !== 2 * rows.length) {
    list.replaceChildren(...rows.flatMap(([name]) => [item("dt", name), document.createElement("dd")]));
  }
  rows.forEach(([, text, isGood], index) => {
    const shown = list.children[2 * index + 1];
    if (shown.textContent !== text) shown.textContent = text;
    shown.className = isGood === null ? "" : isGood ? "good" : "bad";
  });
}

const OUTCOMES = { reached: "✓ reached", timed_out: "⏱ out of time", cancelled: "– cancelled", unreachable: "✕ cannot be held", faulted: "⚠ fault" };

export function showGoals(goals) {
  if (goals.length === 0) return;
  $("goals").replaceChildren(...goals.slice(-30).reverse().map((goal) => {
    const row = document.createElement("tr"), ended = goal.ended;
    const took = ended === null ? "" : `${((ended.ended_at_us - goal.began_at_us) / 1e6).toFixed(1)} s`;
    for (const text of [goal.id, wanted(goal), ended === null ? "… under way" : OUTCOMES[ended.outcome], off(ended), took]) row.append(item("td", text));
    if (ended !== null && ended.outcome !== "reached") row.children[2].append(item("small", ended.reason));
    return row;
  }));
}

function wanted(goal) {
  const place = `${goal.x_mm.toFixed(1)}, ${goal.y_mm.toFixed(1)} mm`, angle = `${goal.angle_deg.toFixed(0)}°`;
  return { pose: `${place}, ${angle}`, position: place, angle, turn: `turn ${angle}` }[goal.kind];
}

function off(ended) {
  if (ended === null) return "";
  const parts = [];
  if (ended.error_mm !== null) parts.push(`${ended.error_mm.toFixed(2)} mm`);
  if (ended.error_deg !== null) parts.push(`${Math.abs(ended.error_deg).toFixed(1)}°`);
  return parts.join(" ");
}

// Sliders follow the loop until one is taken hold of; then the blend is the operator's, until the next goal.
export class BlendPanel {
  constructor(say) { this.say = say; this.names = ""; this.isHeld = false; this.isBusy = false; this.touchedAt = 0; }

  show(state) {
    const names = state.primitives.join();
    if (state.goal !== null && performance.now() - this.touchedAt > 1000) this.isHeld = false;
    if (names !== this.names && !this.isHeld) this.#lay(state.primitives, names);
    if (this.isHeld) return;
    for (const input of $("blend-list").querySelectorAll("input")) this.#set(input, state.weights[input.dataset.name] ?? 0);
  }

  #lay(primitives, names) {
    this.names = names;
    $("blend-hint").textContent = primitives.length
      ? "Weights of the grasps that the posture is a blend of. Move one to take over; the next goal gives it back."
      : "Nothing is grasped: there is nothing to blend yet.";
    $("blend-list").replaceChildren(...primitives.map((name) => {
      const label = item("label", ""), input = document.createElement("input");
      Object.assign(input, { type: "range", min: 0, max: 1, step: 0.01 });
      input.dataset.name = name;
      label.append(item("span", name), input, document.createElement("output"));
      input.addEventListener("input", () => {
        this.isHeld = true;
        this.touchedAt = performance.now();
        this.#set(input, Number(input.value));
        this.#send();
      });
      return label;
    }));
  }

  #set(input, value) {
    if (Number(input.value) !== value) input.value = value;
    input.nextElementSibling.textContent = value.toFixed(2);
  }

  async #send() {
    if (this.isBusy) { this.isStale = true; return; }
    this.isBusy = true;
    do {
      this.isStale = false;
      const weights = Object.fromEntries([...$("blend-list").querySelectorAll("input")].map((input) => [input.dataset.name, Number(input.value)]));
      try { await call("PUT", "/v1/blend", { weights }); this.say(""); } catch (error) { this.say(error.message); }
    } while (this.isStale);
    this.isBusy = false;
  }
}

const SPAN_S = 60, LOW = 0.02, HIGH = 200;

export class Plot {
  constructor() { this.points = []; }

  add(state) {
    const now = performance.now() / 1000;
    this.points.push([now, state.error_mm, state.error_deg]);
    while (this.points.length && this.points[0][0] < now - SPAN_S) this.points.shift();
    this.#draw(now);
  }

  #draw(now) {
    const canvas = $("plot"), scale = devicePixelRatio, width = canvas.clientWidth, height = canvas.clientHeight, pen = canvas.getContext("2d");
    if (canvas.width !== Math.round(width * scale)) Object.assign(canvas, { width: Math.round(width * scale), height: Math.round(height * scale) });
    const look = getComputedStyle(document.documentElement), of = (name) => look.getPropertyValue(name);
    const left = 34, x = (at) => left + (1 - (now - at) / SPAN_S) * (width - left - 4);
    const y = (value) => 6 + (height - 14) * (1 - Math.log(Math.min(Math.max(Math.abs(value), LOW), HIGH) / LOW) / Math.log(HIGH / LOW));
    pen.setTransform(scale, 0, 0, scale, 0, 0);
    pen.clearRect(0, 0, width, height);
    pen.font = "12px system-ui, sans-serif";
    pen.lineWidth = 1;
    for (const value of [0.1, 1, 10, 100]) {
      pen.fillStyle = of("--soft");
      pen.fillText(String(value), 0, y(value) + 4);
      pen.strokeStyle = of("--line");
      line(pen, [[left, y(value)], [width - 4, y(value)]]);
    }
    pen.lineWidth = 2.2;
    for (const [column, name, dash] of [[1, "--accent", []], [2, "--warn", [6, 5]]]) {
      pen.strokeStyle = of(name);
      pen.setLineDash(dash);
      for (const run of runs(this.points, column)) line(pen, run.map((point) => [x(point[0]), y(point[column])]));
    }
    pen.setLineDash([]);
  }
}

// Stretches without a gap.
function runs(points, column) {
  const found = [[]];
  for (const point of points) {
    if (point[column] === null) found.push([]);
    else found.at(-1).push(point);
  }
  return found.filter((run) => run.length > 1);
}

function line(pen, points) {
  pen.beginPath();
  for (const point of points) pen.lineTo(...point);
  pen.stroke();
}
