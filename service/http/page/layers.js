// A map of the hand (reach, cage, energy) laid over the picture, on demand.

import { get } from "./api.js";

// A ramp of even lightness steps, dark to light (values of matplotlib's viridis).
const RAMP = [[68, 1, 84], [59, 82, 139], [33, 145, 140], [94, 201, 98], [253, 231, 37]];
const TOLD = {
  reach: (top) => `Reach: the lighter, the more angles can be held there (up to ${top.toFixed(0)}°).`,
  cage: (top) => `Cage: where the part can go now, the lighter the freer in angle (up to ${top.toFixed(0)}°).`,
  energy: (top) => `Energy the servos must give to let the part lie there: dark 0, light ${top.toFixed(0)} mJ and more.`,
};

export async function showLayer(name, state, camera, z) {
  const canvas = document.getElementById("layer"), pen = canvas.getContext("2d");
  pen.clearRect(0, 0, canvas.width, canvas.height);
  if (name === "") return "";
  const at = state.measured ?? { x_mm: 0, y_mm: 0, angle_deg: 0 };
  const map = await get(`/v1/map?layer=${name}&x_mm=${at.x_mm.toFixed(1)}&y_mm=${at.y_mm.toFixed(1)}&angle_deg=${at.angle_deg.toFixed(1)}`);
  const values = { reach: map.held_deg, cage: map.play_deg, energy: map.values_mj }[name];
  const top = scaleOf(name, values.flat().filter((value) => value !== null));
  draw(pen, map, values, top, camera, z, name !== "energy");
  return TOLD[name](top);
}

function scaleOf(name, values) {
  if (name !== "energy") return Math.max(...values, 1);
  const sorted = values.toSorted((a, b) => a - b);
  return Math.max(sorted[Math.floor(0.6 * sorted.length)] ?? 1, 1);
}

function draw(pen, map, values, top, camera, z, skipZero) {
  const { x_mm: xs, y_mm: ys } = map, dx = (xs[1] - xs[0]) / 2, dy = (ys[1] - ys[0]) / 2;
  for (let i = 0; i < xs.length; i += 1) {
    for (let j = 0; j < ys.length; j += 1) {
      const value = values[i][j];
      if (value === null || (skipZero && value <= 0)) continue;
      pen.fillStyle = colour(Math.min(value / top, 1));
      pen.beginPath();
      for (const [sx, sy] of [[-1, -1], [1, -1], [1, 1], [-1, 1]]) {
        pen.lineTo(...camera.project(xs[i] + 1.04 * sx * dx, ys[j] + 1.04 * sy * dy, z));
      }
      pen.fill();
    }
  }
}

function colour(share) {
  const at = share * (RAMP.length - 1), k = Math.min(Math.floor(at), RAMP.length - 2), f = at - k;
  return `rgb(${RAMP[k].map((low, c) => Math.round(low + f * (RAMP[k + 1][c] - low))).join(" ")})`;
}
