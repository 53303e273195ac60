"""Gathering what calibration is made from: views of the board, marks on the plate, numbers typed on the command line."""

from __future__ import annotations

import math

import numpy as np
from rich.console import Console

from hw_profiles.errors import CalibrationError, Problem, ProfileError
from hw_profiles.geometry import Array, Pose2
from hw_profiles.rig import Rig
from service import sources, tracking
from vision import calibrate as lens_maths
from vision import calibrate_plate
from vision.calibrate import Board, View


def collect_views(rig: Rig, source: str, wanted: Board, max_views: int, console: Console) -> list[View]:
    """Views of the board that differ from the ones before; says what the next should show."""
    views: list[View] = []
    size = (rig.camera.width_px, rig.camera.height_px)
    device = sources.open_source(source, rig, 0, 0)
    live = source.startswith("/dev/")
    try:
        with console.status("looking for the board") as status:
            for index, frame in enumerate(tracking.frames_of(device, None)):
                view = lens_maths.detect(wanted, frame.pixels, f"picture {index + 1}")
                if view is None or (live and not lens_maths.is_new(view, views)):
                    continue
                views.append(view)
                hint = lens_maths.guidance(views, size)
                status.update(f"{len(views)} views; {hint or 'enough, a few more will do no harm'}")
                if len(views) == max_views or (live and not hint and len(views) >= max_views // 2):
                    break
    finally:
        device.close()
    return views


def board_on_plate(rig: Rig, source: str, wanted: Board, board_at: str | None) -> tuple[Array, Array, str]:
    device = sources.open_source(source, rig, 0, 0)
    try:
        views = [lens_maths.detect(wanted, frame.pixels, source) for frame in tracking.frames_of(device, 20)]
    finally:
        device.close()
    best = max((view for view in views if view is not None), key=lambda view: len(view.in_image_px), default=None)
    if best is None:
        raise CalibrationError(
            f"no board seen in {source}: does it lie in view, in even light, printed with squares of {wanted.square_mm:g} mm?"
        )
    width, height = wanted.size_mm
    x_mm, y_mm, deg = (-width / 2.0, height / 2.0, 0.0) if board_at is None else numbers(board_at, 3, "--board-at", "X,Y,DEG")
    marks_mm, marks_px = calibrate_plate.marks_of(best, Pose2(x_mm, y_mm, math.radians(deg)))
    return marks_mm, marks_px, f"board of {wanted.square_mm:g} mm squares in {source}"


def marks(texts: list[str]) -> tuple[Array, Array]:
    pairs = []
    for text in texts:
        on_plate, equals, in_picture = text.partition("=")
        if not equals:
            raise ProfileError([Problem("calibrate plate", "--mark", repr(text), "allowed: X,Y=U,V")])
        pairs.append((numbers(on_plate, 2, "--mark", "X,Y=U,V"), numbers(in_picture, 2, "--mark", "X,Y=U,V")))
    return np.array([pair[0] for pair in pairs]), np.array([pair[1] for pair in pairs])


def numbers(text: str, n: int, option: str, form: str) -> list[float]:
    try:
        values = [float(word) for word in text.split(",")]
    except ValueError:
        values = []
    if len(values) != n or not all(math.isfinite(value) for value in values):
        raise ProfileError([Problem("calibrate", option, repr(text), f"allowed: {form}, numbers parted by commas")])
    return values


def board_of(square_mm: float) -> Board:
    return Board(square_mm=square_mm, marker_mm=square_mm * 16.0 / 22.0)
