"""`palmloop serve`: the loop as a service, driven over HTTP."""

from __future__ import annotations

import datetime
import os
import socket
from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console

from hw_profiles import load
from hw_profiles.errors import DeviceError, Problem, ProfileError
from hw_profiles.rig import Rig
from service.calibrations import Calibrated, calibrated, folder_of
from service.cautions import CAUTIONS
from service.log import log_to
from service.simulated.variation import Variation

TOKEN, VIEW_TOKEN = "PALMLOOP_TOKEN", "PALMLOOP_VIEW_TOKEN"
MIN_TOKEN = 16
LOOPBACK = ("127.0.0.1", "::1", "localhost")


def serve(
    rig: Annotated[str, typer.Option(help="shipped name or TOML file")] = load.DEFAULT_RIG,
    part: Annotated[str | None, typer.Option(help="another part: shipped name or TOML file")] = None,
    simulated: Annotated[bool, typer.Option("--simulated", help="on the simulated bench")] = False,
    host: Annotated[str, typer.Option(help=f"address to listen on; beyond this machine only with a token in {TOKEN}")] = "127.0.0.1",
    port: Annotated[int, typer.Option(min=1, max=65535, help="port to listen on")] = 8750,
    known_as: Annotated[list[str] | None, typer.Option(help="a further host name that requests may come for")] = None,
    vary: Annotated[list[str] | None, typer.Option(help="NAME=VALUE: what the simulated world does unlike its profile")] = None,
    seed: Annotated[int, typer.Option(help="of the simulated world")] = 0,
    log: Annotated[Path | None, typer.Option(help="file for the log: one JSON object a line; '-' for stderr")] = None,
) -> None:
    """Serve one rig over HTTP until Ctrl-C."""
    found = _on_this_bench(load.load_rig(rig, part), rig, simulated)
    variation = Variation.parse(vary or [])
    tokens = _tokens(host)
    if not simulated:
        _check_devices(found.rig)
    with _listen(host, port) as listener, log_to(log):
        _serve(found, (variation, seed) if simulated else None, listener, (*(known_as or ()), host), tokens)


def _serve(
    found: Calibrated,
    simulated: tuple[Variation, int] | None,
    listener: socket.socket,
    names: tuple[str, ...],
    tokens: tuple[str | None, str | None],
) -> None:
    # Only here, so that no other command, and no child process, waits for the web to be imported.
    from service.http.guard import Policy, hosts_for
    from service.processes import Hand, Simulation
    from service.serving import run_server

    console = Console(highlight=False, soft_wrap=True)
    for caution in CAUTIONS:
        console.print(f"⚠ {caution}")
    if found.missing and simulated is None:
        console.print(f"! not calibrated: {', '.join(found.missing)}; the profile's own figures stand in")
    with console.status("starting: the grasps of this hand on this part"):
        hand = Hand(found.rig, None if simulated is None else Simulation(*simulated), found.colours)
    try:
        address, port = listener.getsockname()[:2]
        shown = f"[{address}]" if ":" in address else address
        console.print(f"palmloop: {found.rig.name} with {found.rig.part.name} at http://{shown}:{port}/ — Ctrl-C ends it", style="bold")
        why = run_server(hand, Policy(hosts_for(names), *tokens), listener)
    finally:
        hand.close()
    if why:
        raise DeviceError(why)


def _on_this_bench(rig: Rig, name: str, simulated: bool) -> Calibrated:
    """The rig as its calibrations found it; the simulated bench is as the profile says."""
    if simulated:
        return Calibrated(rig, None, ())
    return calibrated(rig, folder_of(name), datetime.date.today())


def _check_devices(rig: Rig) -> None:
    """Say what is missing before anything starts."""
    for key, device in (("serial_device", rig.serial_device), ("camera_device", rig.camera_device)):
        if not device:
            raise DeviceError(f"rig '{rig.name}': {key} is not set; fill in the profile, or run it with --simulated")
        if not Path(device).exists():
            raise DeviceError(f"rig '{rig.name}': {key} {device} is not there; is it plugged in? Or run it with --simulated")


def _tokens(host: str) -> tuple[str | None, str | None]:
    """Tokens of operators and of onlookers, from the environment: a command line is seen by everybody on the machine."""
    token, view = (os.environ.get(name) or None for name in (TOKEN, VIEW_TOKEN))
    for name, value in ((TOKEN, token), (VIEW_TOKEN, view)):
        if value is not None and (len(value) < MIN_TOKEN or not value.isascii() or not value.isprintable() or " " in value):
            raise ProfileError([Problem("serve", name, "", f"allowed: at least {MIN_TOKEN} printable ASCII characters, no spaces")])
    if token is None and (view is not None or host not in LOOPBACK):
        wanted = f"set {TOKEN} to a secret of at least {MIN_TOKEN} characters"
        raise ProfileError([Problem("serve", "--host", host, f"anybody on the network could move the hand; {wanted}, or use 127.0.0.1")])
    return token, view


def _listen(host: str, port: int) -> socket.socket:
    """The listening socket, taken before anything moves; a port in use is refused by name."""
    listener = socket.socket(socket.AF_INET6 if ":" in host else socket.AF_INET)
    listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    try:
        listener.bind((host, port))
    except OSError as error:
        listener.close()
        raise DeviceError(f"--port {port} on {host}: {(error.strerror or str(error)).lower()}; choose another with --port") from error
    return listener
