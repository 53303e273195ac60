// The camera as geometry (pinhole, Brown distortion): hand frame [mm] to picture [px], and back onto a plane.

export class CameraView {
  constructor(view) {
    Object.assign(this, { width: view.width_px, height: view.height_px, lens: view.lens, motion: view.motion });
  }

  project(x, y, z) {
    const [a, b, c] = this.motion.map((row) => row[0] * x + row[1] * y + row[2] * z + row[3]);
    return this.#distorted(a / c, b / c);
  }

  #distorted(x, y) {
    const [fx, fy, cx, cy, k1, k2, p1, p2, k3] = this.lens;
    const r2 = x * x + y * y, radial = 1 + r2 * (k1 + r2 * (k2 + r2 * k3));
    return [
      fx * (x * radial + 2 * p1 * x * y + p2 * (r2 + 2 * x * x)) + cx,
      fy * (y * radial + p1 * (r2 + 2 * y * y) + 2 * p2 * x * y) + cy,
    ];
  }

  // The point of the plane z that a pixel shows: Newton's method with slopes taken over 0.01 mm.
  onPlane(u, v, z, near = [0, 0]) {
    let [x, y] = near;
    for (let n = 0; n < 12; n += 1) {
      const [u0, v0] = this.project(x, y, z), [ux, vx] = this.project(x + 0.01, y, z), [uy, vy] = this.project(x, y + 0.01, z);
      const a = (ux - u0) / 0.01, b = (uy - u0) / 0.01, c = (vx - v0) / 0.01, d = (vy - v0) / 0.01, det = a * d - b * c;
      const dx = (d * (u - u0) - b * (v - v0)) / det, dy = (a * (v - v0) - c * (u - u0)) / det;
      x += dx;
      y += dy;
      if (Math.hypot(dx, dy) < 1e-4) break;
    }
    return [x, y];
  }
}

export function placed(points, pose) {
  const turn = (pose.angle_deg * Math.PI) / 180, cos = Math.cos(turn), sin = Math.sin(turn);
  return points.map(([x, y]) => [pose.x_mm + cos * x - sin * y, pose.y_mm + sin * x + cos * y]);
}
