"""`palmloop trial`: run goals on the simulated bench or on a rig, and say how accurate and repeatable it was."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated

import typer
from pydantic import ValidationError
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

from hw_profiles import load
from hw_profiles.errors import DeviceError, Problem, ProfileError
from hw_profiles.rig import Rig
from service.picture import annotated
from service.rig import simulated_stage
from service.simulated.variation import Variation
from service.snapshot import report_json
from service.trials import figures
from service.trials.report import report_html
from service.trials.run import Result, Stage, TrialRun, run_trial
from service.trials.spec import TrialSpec
from vision.frames import Pixels


def trial(
    rig: Annotated[str, typer.Option(help="shipped name or TOML file")] = load.DEFAULT_RIG,
    part: Annotated[str | None, typer.Option(help="another part: shipped name or TOML file")] = None,
    simulated: Annotated[bool, typer.Option("--simulated", help="on the simulated bench")] = False,
    kind: Annotated[str, typer.Option(help="position, angle, pose or turn")] = "pose",
    goals: Annotated[int, typer.Option(help="how many")] = 20,
    repeats: Annotated[int, typer.Option(help="of each goal")] = 1,
    tolerance_mm: Annotated[float, typer.Option(help="position counts as reached within this")] = 1.0,
    tolerance_deg: Annotated[float, typer.Option(help="angle counts as reached within this")] = 2.0,
    timeout_s: Annotated[float, typer.Option(help="time allowed for a goal")] = 20.0,
    vary: Annotated[list[str] | None, typer.Option(help="NAME=VALUE: what the world does unlike its profile")] = None,
    seed: Annotated[int, typer.Option(help="of the goals and the simulated world")] = 0,
    out: Annotated[Path | None, typer.Option(help="folder for report.html and results.json")] = None,
    as_json: Annotated[bool, typer.Option("--json", help="one JSON object on stdout")] = False,
) -> None:
    """Bring the part to one goal after another and measure."""
    spec = _spec(
        kind=kind, goals=goals, repeats=repeats, tolerance_mm=tolerance_mm, tolerance_deg=tolerance_deg, timeout_s=timeout_s, seed=seed
    )  # fmt: skip
    loaded = load.load_rig(rig, part)
    variation = Variation.parse(vary or [])
    if not simulated:
        missing = [key for key in ("serial_device", "camera_device") if not getattr(loaded, key)]
        lacks = f"{' and '.join(missing)} not set; fill in the profile, or" if missing else "not opened yet by trial;"
        raise DeviceError(f"rig '{loaded.name}': {lacks} run it with --simulated")
    console = Console(stderr=as_json, highlight=False)
    stage = simulated_stage(loaded, variation, seed)
    try:
        run = _with_progress(console, spec, stage)
    finally:
        stage.loop.close()
    found = figures.summary(loaded, run, recording=None)
    if out is not None:
        out.mkdir(parents=True, exist_ok=True)
        (out / "results.json").write_text(json.dumps({"figures": found, "goals": figures.per_goal(run)}, indent=1))
        (out / "report.html").write_text(report_html(loaded, run, found, _last_picture(stage, loaded)), encoding="utf-8")
    if as_json:
        print(json.dumps(found))
    else:
        figures.print_summary(console, found, run)
        if out is not None:
            console.print(f"  report: {out / 'report.html'}")
    if found["reached"] < found["goals"]:
        raise typer.Exit(1)


def _last_picture(stage: Stage, rig: Rig) -> Pixels | None:
    """The newest frame with what the loop last believed, before it was disarmed."""
    loop = stage.loop
    if loop.last_frame is None or stage.last_report is None:
        return None
    shown = report_json(stage.last_report, None, loop.clock.now_us())
    return annotated(loop.last_frame.pixels, rig, loop.controller.hand, shown)


def _spec(**options: object) -> TrialSpec:
    try:
        return TrialSpec.model_validate(options)
    except ValidationError as error:
        problems = [
            Problem(
                "trial", "--" + str(detail["loc"][0]).replace("_", "-"), repr(detail["input"]), detail["msg"][0].lower() + detail["msg"][1:]
            )
            for detail in error.errors(include_url=False)
        ]
        raise ProfileError(problems) from error


def _with_progress(console: Console, spec: TrialSpec, stage: Stage) -> TrialRun:
    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn(), TextColumn("{task.fields[last]}"))
    with Progress(*columns, console=console, transient=True) as progress:
        bar = progress.add_task("goals", total=spec.goals * spec.repeats, last="")

        def show(result: Result) -> None:
            progress.update(bar, advance=1, last=f"{result.goal.id} {result.ending.value}")

        return run_trial(stage, spec, show)
