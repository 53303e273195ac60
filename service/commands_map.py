"""`palmloop map`: draw or print what the model knows of a hand and a part, before anything moves."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Annotated, Any

import typer
from rich.console import Console

from hw_profiles import load
from hw_profiles.errors import Problem, ProfileError
from hw_profiles.geometry import Pose2
from service import map_figures
from service.maps import LAYERS, Mapper


def map_layer(
    rig: Annotated[str, typer.Option(help="shipped name or TOML file")] = load.DEFAULT_RIG,
    part: Annotated[str | None, typer.Option(help="another part: shipped name or TOML file")] = None,
    layer: Annotated[str, typer.Option(help="energy, cage or reach")] = "energy",
    primitive: Annotated[str | None, typer.Option(help="posture: park, home, grip, or a primitive (--list names them)")] = None,
    blend: Annotated[str | None, typer.Option(help="NAME=WEIGHT,... of several primitives")] = None,
    at: Annotated[str, typer.Option(help="where the part lies: X,Y,ANGLE in mm and degrees")] = "0,0,0",
    out: Annotated[Path | None, typer.Option(help="PNG file")] = None,
    list_primitives: Annotated[bool, typer.Option("--list", help="only name the primitives there are with the part there")] = False,
    as_json: Annotated[bool, typer.Option("--json", help="one JSON object on stdout")] = False,
) -> None:
    """Draw where the part will go, where it could get out, and what the hand can hold."""
    console = Console(stderr=True, highlight=False)
    if layer not in LAYERS:
        raise ProfileError([Problem("map", "--layer", repr(layer), f"allowed: {', '.join(LAYERS)}")])
    pose, mapper = _pose(at), Mapper(load.load_rig(rig, part))
    if list_primitives:
        names = list(mapper.primitives(pose))
        print(json.dumps({"primitives": names}) if as_json else "\n".join(names))
        return
    with console.status("working out the map"):
        found = _layer(mapper, layer, _blend(primitive, blend, layer), pose)
        picture = None if as_json and out is None else map_figures.png(found)
    if picture is not None:
        path = out or Path(f"{mapper.rig.name}-{mapper.rig.part.name}-{layer}.png")
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(picture)
        console.print(f"written {path}")
    if as_json:
        print(json.dumps(found.numbers()))


def _layer(mapper: Mapper, layer: str, blend: dict[str, float], pose: Pose2) -> Any:
    if layer == "reach":
        return mapper.reach()
    command = mapper.command(blend, pose)
    return mapper.energy(command, pose) if layer == "energy" else mapper.cage(command, pose)


def _blend(primitive: str | None, blend: str | None, layer: str) -> dict[str, float]:
    """Weights by name; without either option the grip for energies and the park posture for cages."""
    if primitive is not None and blend is not None:
        raise ProfileError([Problem("map", "--blend", repr(blend), "allowed: one of --primitive and --blend")])
    if blend is None:
        return {primitive or ("grip" if layer == "energy" else "park"): 1.0}
    weights = {}
    for entry in blend.split(","):
        name, equals, text = entry.rpartition("=")
        try:
            weights[name] = float(text)
        except ValueError:
            equals = ""
        if not equals or not math.isfinite(weights.get(name, math.nan)):
            raise ProfileError([Problem("map", "--blend", repr(entry), "allowed: NAME=WEIGHT, several joined by commas")])
    return weights


def _pose(text: str) -> Pose2:
    try:
        x_mm, y_mm, angle_deg = (float(value) for value in text.split(","))
    except ValueError:
        raise ProfileError([Problem("map", "--at", repr(text), "allowed: X,Y,ANGLE in mm and degrees, e.g. 5,-3,90")]) from None
    if not all(math.isfinite(value) for value in (x_mm, y_mm, angle_deg)):
        raise ProfileError([Problem("map", "--at", repr(text), "allowed: finite numbers")])
    return Pose2(x_mm, y_mm, math.radians(angle_deg))
