// Puts the page together: what is heard goes to the panels, what is pressed goes to the bench.

import { call, get, listen, onTokenNeeded, post } from "./api.js";
import { showLayer } from "./layers.js";
import { BlendPanel, Plot, showGoals, showHealth, showState, showUnknown } from "./panels.js";
import { Stage } from "./stage.js";
import { Steering } from "./steer.js";

const $ = (id) => document.getElementById(id);
const SILENCE_MS = 2000, HZ = 15;
const say = (text) => { if ($("said").textContent !== text) $("said").textContent = text; };

let state = null, heardAt = performance.now(), trouble = "", goals = [];

onTokenNeeded(() => new Promise((resolve) => {
  $("asking").showModal();
  $("asking").addEventListener("close", () => resolve($("token").value.trim()), { once: true });
}));

async function stop() {
  try {
    await post("/v1/stop");
  } catch (error) {
    say(`The stop did not get through (${error.message}). Cut the supply.`);
  }
}

async function attempt(action) {
  try {
    say("");
    return await action();
  } catch (error) {
    say(error.status === undefined ? "The bench does not answer." : error.message);
    return null;
  }
}

function draftFromFields() {
  return { x_mm: Number($("goal-x").value), y_mm: Number($("goal-y").value), angle_deg: Number($("goal-angle").value) };
}

function fieldsFromDraft(pose) {
  $("goal-x").value = pose.x_mm.toFixed(1);
  $("goal-y").value = pose.y_mm.toFixed(1);
  $("goal-angle").value = pose.angle_deg.toFixed(1);
}

async function begin() {
  const body = {
    kind: $("goal-kind").value, ...draftFromFields(), tolerance_mm: Number($("goal-mm").value), tolerance_deg: Number($("goal-deg").value),
    timeout_s: 60,
  };
  const goal = await attempt(() => post("/v1/goals", body));
  if (goal !== null) tellGoal(goal);
  await showRecent();
}

function tellGoal(goal) {
  $("goal-said").textContent = goal.ended === null ? `${goal.id} is under way` : `${goal.id}: ${goal.ended.outcome.replace("_", " ")} – ${goal.ended.reason}`;
}

async function showRecent() {
  goals = (await get("/v1/goals")).goals;
  showGoals(goals);
}

function buttons() {
  const on = (id, action) => $(id).addEventListener("click", action);
  on("stop", stop);
  on("arm", () => $("arming").showModal());
  on("arm-no", () => $("arming").close());
  on("arm-yes", () => { $("arming").close(); attempt(() => post("/v1/arm")); });
  on("disarm", () => attempt(() => post("/v1/disarm")));
  on("reset", () => attempt(() => post("/v1/reset")));
  on("cancel", () => attempt(() => call("DELETE", `/v1/goals/${state.goal.id}`)));
  on("put-back", () => attempt(() => post("/v1/simulation/reset")));
  on("push", () => attempt(() => post("/v1/simulation/push", { x_ns: 0.03, y_ns: 0.02 })));
  $("goal").addEventListener("submit", (event) => { event.preventDefault(); begin(); });
  document.addEventListener("keydown", (event) => {
    const isArming = $("arming").open && !["ready", "servoing", "holding"].includes(state?.state);
    if (event.key === "Escape" && !isArming && !$("asking").open) stop();
  });
}

function joinStage(stage) {
  for (const id of ["goal-x", "goal-y", "goal-angle"]) {
    $(id).addEventListener("input", () => { if ($("goal").checkValidity()) stage.setDraft(draftFromFields()); });
  }
  $("to-part").addEventListener("click", () => { if (state?.measured) stage.setDraft({ ...state.measured }, true); });
  $("show-marks").addEventListener("change", (event) => stage.setVisible(event.target.checked));
  $("map").addEventListener("change", async (event) => {
    $("map-said").textContent = event.target.value ? "working out the map …" : "";
    const told = await attempt(() => showLayer(event.target.value, state, stage.camera, stage.part.part_height_mm));
    $("map-said").textContent = told ?? "";
  });
}

function watchConnection() {
  setInterval(() => {
    const silent = performance.now() - heardAt, isLost = silent > SILENCE_MS;
    $("lost").hidden = !isLost;
    $("stage").classList.toggle("lost", isLost);
    if (!isLost) return;
    showUnknown();
    const text = `No word from the bench for ${Math.floor(silent / 1000)} s. The hand may still move; its board lets go by itself. ${trouble}`;
    $("lost").textContent = text.trim();
  }, 500);
}

async function start() {
  buttons();
  watchConnection();
  let rig = null;
  while (rig === null) {
    rig = await get("/v1/rig").catch(() => null);
    if (rig === null) await new Promise((resume) => setTimeout(resume, 1000));
  }
  $("rig-name").textContent = `${rig.name} with ${rig.profile.part.name}${rig.is_simulated ? ", simulated" : ""}`;
  document.title = `palmloop – ${rig.name}`;
  $("bench").hidden = !rig.is_simulated;
  $("cautions").replaceChildren(...rig.cautions.map((caution) => Object.assign(document.createElement("li"), { textContent: caution })));
  const stage = new Stage(rig, fieldsFromDraft), blend = new BlendPanel(say), plot = new Plot();
  new Steering(say, stop);
  joinStage(stage);
  stage.showPictures();
  await showRecent().catch(() => null);
  listen(`/v1/state/stream?hz=${HZ}`, (name, value) => {
    if (name === "trouble") { trouble = value.detail; return; }
    heardAt = performance.now();
    trouble = "";
    if (name === "goal") { tellGoal(value); showRecent().catch(() => null); return; }
    state = value;
    showState(state);
    showHealth(state);
    stage.show(state);
    blend.show(state);
    plot.add(state);
  });
}

start();
