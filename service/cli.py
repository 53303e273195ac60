"""The command line of palmloop.

Exit codes: 0 done, 1 the run fell short of what was asked, 2 usage, profile or device error.
"""

from __future__ import annotations

import sys

import typer
from rich.console import Console

from hw_profiles.errors import PalmloopError
from service import commands_check, commands_map, commands_serve, commands_trial, commands_vision

FELL_SHORT, REFUSED = 1, 2

app = typer.Typer(
    name="palmloop",
    help="Closed-loop in-hand positioning for benchtop hands of hobby servos.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
)
app.command("check")(commands_check.check)
app.command("trial")(commands_trial.trial)
app.command("serve")(commands_serve.serve)
app.command("map")(commands_map.map_layer)
app.command("track")(commands_vision.track)
app.add_typer(commands_vision.calibrate, name="calibrate")


def main() -> None:
    """Entry point: errors of palmloop become one clear line and exit code 2."""
    try:
        app()
    except PalmloopError as error:
        Console(stderr=True, highlight=False, soft_wrap=True).print(f"palmloop: {error}", markup=False)
        sys.exit(REFUSED)
