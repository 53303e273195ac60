"""`palmloop serve`: the loop as a service, driven over HTTP."""

from __future__ import annotations

import signal
import socket
from typing import Annotated

import typer
import uvicorn
from rich.console import Console

from hw_profiles import load
from hw_profiles.errors import DeviceError
from service.http.app import CAUTIONS, build
from service.processes import Hand
from service.simulated.variation import Variation


def serve(
    rig: Annotated[str, typer.Option(help="shipped name or TOML file")] = load.DEFAULT_RIG,
    part: Annotated[str | None, typer.Option(help="another part: shipped name or TOML file")] = None,
    simulated: Annotated[bool, typer.Option("--simulated", help="on the simulated bench")] = False,
    host: Annotated[str, typer.Option(help="address to listen on")] = "127.0.0.1",
    port: Annotated[int, typer.Option(min=1, max=65535, help="port to listen on")] = 8750,
    vary: Annotated[list[str] | None, typer.Option(help="NAME=VALUE: what the simulated world does unlike its profile")] = None,
    seed: Annotated[int, typer.Option(help="of the simulated world")] = 0,
) -> None:
    """Serve one rig over HTTP until Ctrl-C."""
    loaded = load.load_rig(rig, part)
    if not simulated:
        raise DeviceError(f"rig '{loaded.name}': serve runs with --simulated only, as yet; serial_device and camera_device are not opened")
    if host not in ("127.0.0.1", "::1", "localhost"):
        raise DeviceError(f"--host {host}: only this machine is served as yet; allowed: 127.0.0.1, ::1, localhost")
    listener = _listen(host, port)
    console = Console(highlight=False)
    for caution in CAUTIONS:
        console.print(f"⚠ {caution}")
    hand = Hand(loaded, Variation.parse(vary or []), seed)
    try:
        console.print(f"palmloop: {loaded.name} with {loaded.part.name} at http://{host}:{port}/v1/state — Ctrl-C ends it", style="bold")
        app = build(hand, [host, "localhost", f"{host}:{port}"])
        server = uvicorn.Server(uvicorn.Config(app, log_level="warning", timeout_keep_alive=5, timeout_graceful_shutdown=2))
        signal.signal(signal.SIGTERM, lambda *_: setattr(server, "should_exit", True))
        server.run(sockets=[listener])
    finally:
        hand.close()
        listener.close()


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
