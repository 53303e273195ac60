// The camera picture with what the loop believes and what the operator wants drawn on it; the wanted goal can be dragged and turned.

import { CameraView, placed } from "./camera_view.js";
import { picture } from "./api.js";

const SVG = "http://www.w3.org/2000/svg";
const FINGER_ABOVE_MM = 4, KNOB_MM = 16;

export class Stage {
  constructor(rig, onDraft) {
    this.camera = new CameraView(rig.view);
    this.part = rig.view;
    this.onDraft = onDraft;
    this.draft = null;
    this.isDragging = false;
    this.marks = document.getElementById("marks");
    this.marks.setAttribute("viewBox", `0 0 ${this.camera.width} ${this.camera.height}`);
    this.groups = Object.fromEntries(["fingers", "bridges", "goal", "part", "draft"].map((name) => [name, this.#group(name)]));
    for (const name of ["picture", "layer"]) {
      Object.assign(document.getElementById(name), { width: this.camera.width, height: this.camera.height });
    }
    this.#dragging();
  }

  #group(name) {
    const group = document.createElementNS(SVG, "g");
    this.marks.append(group);
    group.dataset.name = name;
    return group;
  }

  // Pictures one after another, each drawn before the next is asked for: a slow tablet is never flooded.
  async showPictures() {
    const canvas = document.getElementById("picture"), pen = canvas.getContext("2d"), note = document.getElementById("picture-note");
    for (let version = 0; ; ) {
      try {
        const shown = await picture(version);
        version = shown.version;
        pen.drawImage(shown.bitmap, 0, 0);
        shown.bitmap.close();
        note.hidden = true;
      } catch (error) {
        if (error.status === undefined) version = 0; // the server is gone; the next one counts anew
        note.hidden = false;
        await new Promise((resume) => setTimeout(resume, 500));
      }
    }
  }

  show(state) {
    const top = this.part.part_height_mm;
    const above = (points, z) => points.map(([x, y]) => this.camera.project(x, y, z));
    this.#strokes("fingers", state.fingers_mm.map((line) => ({ points: above(line, top + FINGER_ABOVE_MM), kind: "finger", width: 2.5 })));
    const bridges = state.measured === null ? [] : state.bridges_mm.filter((bridge) => bridge !== null);
    const kind = state.cage?.is_caged ? "bridge" : "bridge open";
    this.#strokes("bridges", bridges.map((bridge) => ({ points: above(bridge, top), kind, width: 3.5 })));
    this.#strokes("part", state.measured === null ? [] : this.#outline(state.measured, "part"));
    this.#strokes("goal", state.goal === null || state.goal.kind === "turn" ? [] : this.#outline(wanted(state.goal, state.measured), "goal"));
    if (this.draft === null && state.measured !== null) this.setDraft({ ...state.measured }, true);
  }

  setVisible(isVisible) {
    for (const name of ["fingers", "bridges", "goal", "part"]) this.groups[name].toggleAttribute("hidden", !isVisible);
    for (const name of ["fingers", "bridges", "goal", "part"]) this.groups[name].style.display = isVisible ? "" : "none";
  }

  setDraft(pose, tell = false) {
    this.draft = pose;
    const top = this.part.part_height_mm, radius = this.part.part_radius_mm, group = this.groups.draft;
    const knob = this.camera.project(...placed([[radius + KNOB_MM, 0]], pose)[0], top), centre = this.camera.project(pose.x_mm, pose.y_mm, top);
    this.#strokes("draft", [
      ...this.#outline(pose, "draft"),
      { points: [this.camera.project(...placed([[radius, 0]], pose)[0], top), knob], kind: "draft", width: 2.5 },
    ]);
    group.classList.add("draft");
    const body = element("polygon", { class: "body", "data-grip": "body", points: joined(this.#top(placed(this.part.part_outline_mm, pose))) });
    group.append(body, element("circle", { class: "grip", "data-grip": "knob", cx: knob[0], cy: knob[1], r: 13 }));
    const label = element("text", { x: centre[0], y: centre[1] + 7, "text-anchor": "middle", "font-size": 20, "pointer-events": "none" });
    label.textContent = "goal";
    if (this.isDragging) group.append(label);
    if (tell) this.onDraft(pose);
  }

  #top(points) { return points.map(([x, y]) => this.camera.project(x, y, this.part.part_height_mm)); }

  #outline(pose, kind) {
    const radius = this.part.part_radius_mm, outline = placed(this.part.part_outline_mm, pose);
    const pointer = placed([[0.62 * radius, 0], [1.12 * radius, 0]], pose);
    return [
      { points: this.#top([...outline, outline[0]]), kind, width: kind === "part" ? 3 : 2.5 },
      { points: this.#top(pointer), kind, width: 3 },
    ];
  }

  #strokes(name, strokes) {
    this.groups[name].replaceChildren(...strokes.map(({ points, kind, width }) => {
      const group = element("g", { class: kind });
      for (const [shade, extra] of [["halo", 3], ["core", 0]]) {
        group.append(element("polyline", { class: shade, points: joined(points), "stroke-width": width + extra }));
      }
      return group;
    }));
  }

  #dragging() {
    let grip = null, offset = [0, 0];
    const at = (event) => {
      const point = new DOMPoint(event.clientX, event.clientY).matrixTransform(this.marks.getScreenCTM().inverse());
      return this.camera.onPlane(point.x, point.y, this.part.part_height_mm, [this.draft.x_mm, this.draft.y_mm]);
    };
    this.marks.addEventListener("pointerdown", (event) => {
      grip = event.target.dataset?.grip ?? null;
      if (grip === null || this.draft === null) return;
      const [x, y] = at(event);
      offset = [this.draft.x_mm - x, this.draft.y_mm - y];
      this.isDragging = true;
      this.marks.setPointerCapture(event.pointerId);
      event.preventDefault();
    });
    this.marks.addEventListener("pointermove", (event) => {
      if (!this.isDragging) return;
      const [x, y] = at(event), draft = { ...this.draft };
      if (grip === "body") Object.assign(draft, { x_mm: x + offset[0], y_mm: y + offset[1] });
      else draft.angle_deg = (Math.atan2(y - draft.y_mm, x - draft.x_mm) * 180) / Math.PI;
      this.setDraft(draft, true);
    });
    for (const end of ["pointerup", "pointercancel"]) {
      this.marks.addEventListener(end, () => {
        if (!this.isDragging) return;
        this.isDragging = false;
        this.setDraft(this.draft, true);
      });
    }
  }
}

// What a goal leaves free is drawn where the part is.
function wanted(goal, part) {
  if (part === null) return goal;
  if (goal.kind === "position") return { ...goal, angle_deg: part.angle_deg };
  return goal.kind === "angle" ? { ...part, angle_deg: goal.angle_deg } : goal;
}

function element(name, attributes) {
  const made = document.createElementNS(SVG, name);
  for (const [key, value] of Object.entries(attributes)) made.setAttribute(key, value);
  return made;
}

const joined = (points) => points.map((point) => point.map((value) => value.toFixed(1)).join(",")).join(" ");
