"""`palmloop check`: read a rig's profile, check it, and say what is missing to run it."""

from __future__ import annotations

import json
from typing import Annotated, Any

import typer
from rich.console import Console

from hw_profiles import load
from hw_profiles.rig import Rig


def check(
    rig: Annotated[str, typer.Argument(help="shipped name or TOML file")] = load.DEFAULT_RIG,
    part: Annotated[str | None, typer.Option(help="another part: shipped name or TOML file")] = None,
    as_json: Annotated[bool, typer.Option("--json", help="one JSON object on stdout")] = False,
) -> None:
    """Read and check a profile; say what is missing to run it."""
    loaded = load.load_rig(rig, part)
    found = facts(loaded)
    if as_json:
        print(json.dumps(found))
        return
    console = Console(highlight=False)
    console.print(f"✔ rig [bold]{loaded.name}[/]: {loaded.title or 'checked'}")
    for name, value in found.items():
        if name not in ("rig", "missing"):
            console.print(f"  {name.replace('_', ' ')}: {value}")
    for line in found["missing"]:
        console.print(f"  to run it on hardware: {line}", style="yellow")


def facts(rig: Rig) -> dict[str, Any]:
    """What a person wants to know of a rig before switching it on."""
    missing = []
    if not rig.serial_device:
        missing.append("serial_device is empty; allowed: the board's device, best one under /dev/serial/by-id")
    if not rig.camera_device:
        missing.append("camera_device is empty; allowed: a V4L2 device such as /dev/video0")
    return {
        "rig": rig.name,
        "hand": f"{rig.hand.name}, {len(rig.hand.fingers)} fingers, {rig.hand.n_joints} servos",
        "part": f"{rig.part.name}, {'convex' if rig.part.is_convex else 'not convex'}, held by gaps below {rig.part.cage_gap_mm:.1f} mm",
        "camera": f"{rig.camera.name}, {rig.camera.width_px} × {rig.camera.height_px} at {rig.camera.fps:g} frames/s",
        "board": f"{rig.board.name}, {rig.board.codec}, watchdog {rig.board.watchdog_ms} ms",
        "supply_if_all_stall_a": round(rig.hand.stall_current_ma / 1000.0, 1),
        "cage": rig.cage,
        "missing": missing,
    }
