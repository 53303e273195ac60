"""Following a part through a source of frames, without a hand: what `palmloop track` does."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from hw_profiles.errors import DeviceEnded, DeviceError
from hw_profiles.geometry import Array
from hw_profiles.observation import NoPose, Observation, PartPose
from hw_profiles.rig import Rig
from service.ports import Camera
from vision import overlay
from vision.edge_checks import Quality
from vision.frames import Frame
from vision.tracker import Tracker

READ_TIMEOUT_S = 5.0


@dataclass
class Track:
    """What was seen: times [s], poses (x, y [mm], yaw [deg, unwrapped]) and, for each frame without a pose, why.

    heights_off_mm : of tags, how much higher than its profile says the tag seems by its size, pose by pose.
    """

    times_s: list[float] = field(default_factory=list)
    poses: list[tuple[float, float, float]] = field(default_factory=list)
    heights_off_mm: list[float] = field(default_factory=list)
    reasons: Counter[str] = field(default_factory=Counter)
    n_frames: int = 0

    def take(self, seen: Observation, quality: Quality | None) -> None:
        """Add one frame."""
        self.n_frames += 1
        if isinstance(seen.sight, NoPose):
            self.reasons[seen.sight.reason] += 1
            return
        yaw = math.degrees(seen.sight.measured.yaw_rad)
        if self.poses:
            yaw += 360.0 * round((self.poses[-1][2] - yaw) / 360.0)
        self.times_s.append(seen.captured_at_us * 1e-6)
        if quality is not None:
            self.heights_off_mm.append(quality.height_off_mm)
        self.poses.append((seen.sight.measured.x_mm, seen.sight.measured.y_mm, yaw))

    def summary(self) -> dict[str, Any]:
        """Counts, range of the poses and why frames had none."""
        found: dict[str, Any] = {"frames": self.n_frames, "poses": len(self.poses)}
        found["track_rate"] = len(self.poses) / self.n_frames if self.n_frames else 0.0
        if self.poses:
            poses = np.array(self.poses)
            for axis, name in enumerate(("x_mm", "y_mm", "yaw_deg")):
                found[name] = {"first": poses[0, axis], "last": poses[-1, axis], "low": poses[:, axis].min(), "high": poses[:, axis].max()}
            found["step_noise"] = _step_noise(poses)
        if self.heights_off_mm:
            found["height_off_mm"] = float(np.median(self.heights_off_mm))
        found["without_pose"] = dict(self.reasons.most_common())
        return found


def _step_noise(poses: Array) -> dict[str, float]:
    """Noise of the poses from their third differences, in which a smooth motion cancels: sd = |Δ³| RMS / √20."""
    if len(poses) < 8:
        return {}
    sd = np.sqrt(np.mean(np.diff(poses, n=3, axis=0) ** 2, axis=0) / 20.0)
    return {"x_mm": float(sd[0]), "y_mm": float(sd[1]), "yaw_deg": float(sd[2])}


def frames_of(camera: Camera, limit: int | None) -> Iterator[Frame]:
    """Frames until the source ends or the limit is reached."""
    n_read = 0
    while limit is None or n_read < limit:
        try:
            yield camera.read(READ_TIMEOUT_S)
        except DeviceEnded:
            return
        n_read += 1


class Annotator:
    """Writes frames with what was seen drawn over them as an MP4 video."""

    def __init__(self, path: Path, rig: Rig) -> None:
        """Open the file. Raises DeviceError where it cannot be written."""
        size = (rig.camera.width_px, rig.camera.height_px)
        self._rig = rig
        self._writer = cv2.VideoWriter(str(path), cv2.VideoWriter.fourcc(*"mp4v"), rig.camera.fps, size)
        if not self._writer.isOpened():
            raise DeviceError(f"{path}: cannot be written as an MP4 video; allowed: a name ending in .mp4 in a folder that exists")

    def write(self, frame: Frame, seen: Observation) -> None:
        """Add one frame."""
        sight, at = seen.sight, f"{seen.captured_at_us * 1e-6:.2f} s"
        if isinstance(sight, PartPose):
            pose = sight.measured
            words = (f"x {pose.x_mm:+.2f}  y {pose.y_mm:+.2f} mm  {math.degrees(pose.yaw_rad):+.2f}°", at)
            scene = overlay.Scene(pose=pose, text=words)
        else:
            scene = overlay.Scene(text=("no pose", sight.reason, at))
        self._writer.write(overlay.draw(frame.pixels, self._rig.camera, self._rig.part, scene))

    def close(self) -> None:
        """Finish the file."""
        self._writer.release()


def write_table(path: Path, track: Track) -> None:
    """Poses as comma-separated values. Raises OSError."""
    rows = [f"{t:.6f},{x:.4f},{y:.4f},{yaw:.4f}" for t, (x, y, yaw) in zip(track.times_s, track.poses, strict=True)]
    path.write_text("\n".join(["time_s,x_mm,y_mm,yaw_deg", *rows]) + "\n", encoding="utf-8")


def write_plot(path: Path, track: Track, title: str) -> None:
    """Poses over time as a picture. Raises OSError."""
    figure = Figure(figsize=(9.0, 6.0), layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.subplots(3, 1, sharex=True)
    poses = np.array(track.poses).reshape(-1, 3)
    for axis, (place, name, colour) in enumerate(
        zip(axes, ("x [mm]", "y [mm]", "yaw [deg]"), ("#1b6f8a", "#b5651d", "#5a4a8a"), strict=True)
    ):
        place.plot(track.times_s, poses[:, axis], ".-", markersize=3.0, linewidth=0.8, color=colour)
        place.set_ylabel(name)
        place.grid(alpha=0.3)
    axes[-1].set_xlabel("time [s]")
    axes[0].set_title(title)
    figure.savefig(path, dpi=120)


def follow(camera: Camera, tracker: Tracker, limit: int | None, annotator: Annotator | None) -> Iterator[tuple[Observation, Track]]:
    """Track every frame of a source; yields each observation and the track so far."""
    track = Track()
    for frame in frames_of(camera, limit):
        seen = tracker.observe(frame)
        track.take(seen, tracker.qualities[0])
        if annotator is not None:
            annotator.write(frame, seen)
        yield seen, track
