"""`palmloop calibrate …` and `palmloop track`: the camera without the hand."""

from __future__ import annotations

import datetime
import json
import math
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
import typer
from rich.console import Console
from rich.table import Table

from hw_profiles import load
from hw_profiles.calibration import Calibration
from hw_profiles.errors import DeviceError, Problem, ProfileError
from hw_profiles.observation import PartPose
from hw_profiles.rig import Rig
from service import calibrating, calibrations, sources, tracking
from service.ports import Camera
from vision import calibrate as lens_maths
from vision import calibrate_plate, print_board, print_mark, teach
from vision.camera_model import model_of
from vision.tracker import Tracker

RigOption = Annotated[str, typer.Option("--rig", help="shipped name or TOML file")]
PartOption = Annotated[str | None, typer.Option("--part", help="another part: shipped name or TOML file")]
Source = Annotated[str, typer.Argument(help=sources.MEANINGS)]
Json = Annotated[bool, typer.Option("--json", help="one JSON object on stdout")]
HEIGHT_WORTH_SAYING_MM = 0.5
SQUARE_HELP = "side of a printed square, as measured"

calibrate = typer.Typer(help="Calibrate the camera: its lens, its place over the plate, the colours of a part.", no_args_is_help=True)


@calibrate.command("board")
def board(
    out: Annotated[Path, typer.Argument(help="file to write, .pdf or .png")],
    square_mm: Annotated[float, typer.Option(help="side of a square", min=5.0, max=80.0)] = 22.0,
) -> None:
    """Print the calibration board at true scale."""
    _write(out, print_board.board_sheet(calibrating.board_of(square_mm), _sheet_form(out, "calibrate board")))
    Console(highlight=False).print(f"✔ {out}: print at 100 % and check that the bar measures 100 mm; glue the sheet on something flat")


@calibrate.command("mark")
def mark(
    out: Annotated[Path, typer.Argument(help="file to write, .pdf or .png")],
    part: Annotated[str, typer.Option("--part", help="whose tag or spots: shipped name or TOML file")] = "roller-40",
) -> None:
    """Print a part's tag or coloured spots at true scale."""
    form = _sheet_form(out, "calibrate mark")
    _write(out, print_mark.mark_sheet(load.load_part(part), form))
    Console(highlight=False).print(f"✔ {out}: print at 100 % on matt paper; glue it flat on the part as its profile says")


@calibrate.command("camera")
def camera(
    source: Source,
    rig: RigOption = load.DEFAULT_RIG,
    square_mm: Annotated[float, typer.Option(help=SQUARE_HELP)] = 22.0,
    max_views: Annotated[int, typer.Option(help="stop after so many pictures of the board", min=8)] = 40,
    as_json: Json = False,
) -> None:
    """Calibrate the lens from pictures of the board held at many places and angles."""
    loaded = load.load_rig(rig)
    views = calibrating.collect_views(loaded, source, calibrating.board_of(square_mm), max_views, Console(stderr=True, highlight=False))
    found = lens_maths.solve_lens(views, loaded.camera, f"{len(views)} views of {source}, squares of {square_mm:g} mm", _today())
    path = _keep(rig, loaded, found)
    if as_json:
        print(found.model_dump_json())
        return
    console = Console(highlight=False)
    table = Table("view", "reprojection RMS, px", title=f"lens of {loaded.camera.name}: {found.rms_px:.3f} px over all views")
    kept = [view.name for view in views if view.name not in found.rejected_views]
    for name, rms in zip(kept, found.view_rms_px, strict=True):
        table.add_row(name, f"{rms:.3f}")
    console.print(table)
    for name in found.rejected_views:
        console.print(f"put aside: {name} fits much worse than the rest")
    console.print(f"✔ focal length {found.focal_px[0]:.2f}, {found.focal_px[1]:.2f} px; written to {path}")


@calibrate.command("plate")
def plate(
    source: Source,
    rig: RigOption = load.DEFAULT_RIG,
    mark: Annotated[list[str] | None, typer.Option(help="X,Y=U,V of a mark: mm on the plate, px in the picture; four or more")] = None,
    board_at: Annotated[str | None, typer.Option(help="X,Y,DEG of the board's top left corner; left out: its middle on the origin")] = None,
    thickness_mm: Annotated[float, typer.Option(help="of the board, or height of the marks over the plate", min=0.0)] = 0.0,
    square_mm: Annotated[float, typer.Option(help=SQUARE_HELP)] = 22.0,
    as_json: Json = False,
) -> None:
    """Find where the camera hangs over the plate, from a board lying on it or from marks."""
    loaded = load.load_rig(rig)
    made = calibrations.calibrated(loaded, calibrations.folder_of(rig), _today()) if _has_lens(rig, loaded) else None
    seen_by = loaded.camera if made is None else made.rig.camera
    if mark:
        marks_mm, marks_px, made_from = *calibrating.marks(mark), f"{len(mark)} marks"
    else:
        marks_mm, marks_px, made_from = calibrating.board_on_plate(loaded, source, calibrating.board_of(square_mm), board_at)
    found = calibrate_plate.solve_plate(marks_mm, marks_px, seen_by, made_from, _today(), thickness_mm)
    path = _keep(rig, loaded, found)
    if as_json:
        print(found.model_dump_json())
        return
    eye = ", ".join(f"{value:.1f}" for value in found.mount.eye_mm)
    console = Console(highlight=False)
    console.print(f"✔ camera at ({eye}) mm, marks met within {found.rms_mm:.3f} mm; written to {path}")


@calibrate.command("colour")
def colour(
    source: Source,
    rig: RigOption = load.DEFAULT_RIG,
    part: PartOption = None,
    at: Annotated[
        list[str] | None, typer.Option(help="U,V of the first, then of the second spot, in px; left out: found by colour")
    ] = None,
    frames: Annotated[int, typer.Option(help="how many to learn from", min=3, max=500)] = 20,
    as_json: Json = False,
) -> None:
    """Teach the colours of a part's two spots, in the light they will be seen in."""
    loaded = load.load_rig(rig, part)
    model = model_of(loaded.camera)
    given = None if not at else np.array([calibrating.numbers(text, 2, "--at", "U,V") for text in at])
    if given is not None and len(given) != 2:
        raise ProfileError([Problem("calibrate colour", "--at", str(at), "allowed: given twice, first spot then second")])
    samples = []
    device = sources.open_source(source, loaded, frames, 0)
    try:
        for frame in tracking.frames_of(device, frames):
            sample = teach.sample(model, loaded.part, frame.pixels, given)
            samples += [] if sample is None else [sample]
    finally:
        device.close()
    found = teach.solve_colours(samples, model, loaded.part, f"{len(samples)} frames of {source}", _today())
    path = _keep(rig, loaded, found)
    if as_json:
        print(found.model_dump_json())
    else:
        Console(highlight=False).print(f"✔ two colours from {found.n_frames} frames, scatter {found.spread:.4f}; written to {path}")


def track(
    source: Source,
    rig: RigOption = load.DEFAULT_RIG,
    part: PartOption = None,
    frames: Annotated[int | None, typer.Option(help="stop after so many; left out: at the end, or 250 of a live source", min=1)] = None,
    video: Annotated[Path | None, typer.Option(help="annotated video to write, .mp4")] = None,
    table: Annotated[Path | None, typer.Option(help="poses to write, .csv")] = None,
    plot: Annotated[Path | None, typer.Option(help="poses over time to write, .png or .svg")] = None,
    seed: Annotated[int, typer.Option(help="of the simulated camera")] = 0,
    as_json: Json = False,
) -> None:
    """Follow a part through a video, a folder of pictures or a camera, and print its poses."""
    made = calibrations.calibrated(load.load_rig(rig, part), calibrations.folder_of(rig), _today())
    limit = frames if frames is not None else (250 if source == sources.SIMULATED or source.startswith("/dev/") else None)
    console = Console(stderr=as_json, highlight=False)
    annotator = tracking.Annotator(video, made.rig) if video is not None else None
    device = sources.open_source(source, made.rig, limit or 0, seed)
    try:
        found = _follow(console, device, Tracker(made.rig.camera, made.rig.part, made.colours), limit, annotator)
    finally:
        device.close()
        if annotator is not None:
            annotator.close()
    try:
        if table is not None:
            tracking.write_table(table, found)
        if plot is not None:
            tracking.write_plot(plot, found, f"{made.rig.part.name} in {source}")
    except (OSError, ValueError) as error:
        raise DeviceError(f"cannot write: {error}") from error
    summary = {"source": source, "rig": made.rig.name, "part": made.rig.part.name, "not_calibrated": list(made.missing)} | found.summary()
    if as_json:
        print(json.dumps(summary))
    else:
        _print_summary(console, found)
    if not found.poses:
        raise typer.Exit(1)


def _follow(console: Console, device: Camera, tracker: Tracker, limit: int | None, annotator: tracking.Annotator | None) -> tracking.Track:
    track_so_far = tracking.Track()
    with console.status("waiting for the first frame") as status:
        for seen, track_so_far in tracking.follow(device, tracker, limit, annotator):  # noqa: B007  # the last one is the answer
            at = f"{seen.captured_at_us * 1e-6:8.2f} s"
            if isinstance(seen.sight, PartPose):
                pose = seen.sight.measured
                status.update(f"{at}  x {pose.x_mm:+8.3f} mm  y {pose.y_mm:+8.3f} mm  {math.degrees(pose.yaw_rad):+8.2f}°")
            else:
                status.update(f"{at}  {seen.sight.reason}")
    return track_so_far


def _print_summary(console: Console, found: tracking.Track) -> None:
    summary = found.summary()
    rows = Table("time, s", "x, mm", "y, mm", "yaw, deg", title=f"{len(found.poses)} poses in {found.n_frames} frames")
    for index in np.unique(np.linspace(0, len(found.poses) - 1, min(len(found.poses), 16)).astype(int)):
        x_mm, y_mm, yaw_deg = found.poses[index]
        rows.add_row(f"{found.times_s[index]:.3f}", f"{x_mm:+.3f}", f"{y_mm:+.3f}", f"{yaw_deg:+.2f}")
    console.print(rows)
    noise = summary.get("step_noise")
    if noise:
        console.print(f"noise of a single pose: {noise['x_mm']:.4f} and {noise['y_mm']:.4f} mm, {noise['yaw_deg']:.3f}°")
    off_mm = summary.get("height_off_mm")
    if off_mm is not None and abs(off_mm) > HEIGHT_WORTH_SAYING_MM:
        way = "higher, or larger," if off_mm > 0 else "lower, or smaller,"
        console.print(f"by its size the tag stands {abs(off_mm):.1f} mm {way} than its profile says: measure both, or calibrate the camera")
    for reason, times in found.reasons.most_common(5):
        console.print(f"{times} frames without a pose: {reason}")


def _sheet_form(out: Path, command: str) -> Literal["pdf", "png"]:
    form = out.suffix.lower()
    if form not in (".pdf", ".png"):
        raise ProfileError([Problem(command, "OUT", repr(str(out)), "allowed: a name ending in .pdf or .png")])
    return "pdf" if form == ".pdf" else "png"


def _has_lens(rig_name: str, rig: Rig) -> bool:
    return calibrations.file_of(calibrations.folder_of(rig_name), rig, "lens").is_file()


def _keep(rig_name: str, rig: Rig, found: Calibration) -> Path:
    try:
        return calibrations.write(calibrations.folder_of(rig_name), rig, found)
    except OSError as error:
        raise DeviceError(f"cannot write the calibration: {error}") from error


def _write(path: Path, data: bytes) -> None:
    try:
        path.write_bytes(data)
    except OSError as error:
        raise DeviceError(f"cannot write {path}: {error}") from error


def _today() -> datetime.date:
    return datetime.date.today()
