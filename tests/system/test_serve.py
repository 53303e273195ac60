"""`palmloop serve --simulated` as a robot script meets it: real processes, a real pseudo-terminal, real HTTP."""

import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import cv2
import httpx
import numpy as np
import pytest


@pytest.fixture(scope="module")
def server() -> Iterator[tuple[httpx.Client, subprocess.Popen[bytes]]]:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    command = [sys.executable, "-c", "from service.cli import main; main()", "serve", "--simulated", "--port", str(port), "--seed", "300"]
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)
    client = httpx.Client(base_url=f"http://127.0.0.1:{port}", timeout=70.0)
    deadline_s = time.monotonic() + 90.0
    while time.monotonic() < deadline_s:
        try:
            if client.get("/v1/state").status_code == 200:
                break
        except httpx.TransportError:
            assert process.poll() is None, process.stderr and process.stderr.read()
    yield client, process
    client.close()
    process.send_signal(signal.SIGTERM)
    _, errors = process.communicate(timeout=20.0)
    assert errors == b""
    assert process.returncode == 0


def armed(client: httpx.Client) -> None:
    client.post("/v1/stop")
    wait_for(client, "stopped", "faulted")
    assert client.post("/v1/reset").status_code == 200
    wait_for(client, "disarmed")
    reply = client.post("/v1/arm")
    assert reply.status_code == 200
    assert any("no emergency stop" in line for line in reply.json()["cautions"])
    wait_for(client, "ready")


def wait_for(client: httpx.Client, *states: str) -> None:
    deadline_s = time.monotonic() + 5.0
    while time.monotonic() < deadline_s:
        if client.get("/v1/state").json()["state"] in states:
            return
    pytest.fail(f"never came to be {states}: {client.get('/v1/state').json()}")


@pytest.mark.slow
def test_goal_is_reached_and_told(server) -> None:
    client, _ = server
    for _attempt in range(3):  # on a machine too busy to keep the wall clock the loop rightly faults; a script resets and goes on
        armed(client)
        begun = client.post("/v1/goals", json={"kind": "pose", "x_mm": 10.0, "y_mm": -6.0, "angle_deg": 30.0})
        assert begun.status_code == 202
        goal = client.get(begun.headers["location"], params={"wait_s": 30}).json()
        if goal["ended"]["outcome"] != "faulted":
            break
    assert goal["ended"]["outcome"] == "reached", goal
    assert goal["ended"]["error_mm"] < 1.0
    assert client.get("/v1/state").json()["state"] == "holding"


@pytest.mark.slow
def test_stop_takes_the_pulses_off_and_only_a_reset_leaves_it(server) -> None:
    client, _ = server
    armed(client)
    client.post("/v1/goals", json={"kind": "position", "x_mm": -20.0, "y_mm": 10.0})
    assert client.post("/v1/stop").status_code == 200
    assert client.post("/v1/stop").status_code == 200  # any number of times
    wait_for(client, "stopped")
    assert client.get("/v1/state").json()["joints"] is None
    refused = client.post("/v1/arm")
    assert refused.status_code == 409
    assert refused.headers["content-type"] == "application/problem+json"
    assert "arm is not possible while stopped; allowed: stop, fault, reset" in refused.json()["detail"]


@pytest.mark.slow
def test_goal_outside_reach_is_refused_with_the_nearest_pose(server) -> None:
    client, _ = server
    armed(client)
    begun = client.post("/v1/goals", json={"kind": "pose", "x_mm": 95.0, "y_mm": 0.0, "angle_deg": 0.0}).json()
    assert begun["ended"]["outcome"] == "unreachable"
    assert 20.0 < begun["ended"]["nearest"]["x_mm"] < 95.0
    assert client.get("/v1/state").json()["state"] == "ready"


@pytest.mark.slow
@pytest.mark.parametrize(
    ("body", "words"),
    [
        ({"kind": "pose", "x_mm": "ten", "y_mm": 0.0, "angle_deg": 0.0}, "x_mm"),
        ({"kind": "pose", "x_mm": 1.0}, "y_mm, angle_deg missing"),
        ({"kind": "spin", "angle_deg": 0.0}, "kind"),
        ({"kind": "angle", "angle_deg": 0.0, "tolerance_deg": -1.0}, "tolerance_deg"),
        ({"kind": "angle", "angle_deg": 0.0, "colour": 1}, "colour"),
    ],
)
def test_bad_goal_is_a_problem_that_names_the_key(server, body: dict, words: str) -> None:
    client, _ = server
    reply = client.post("/v1/goals", json=body)
    assert reply.status_code == 422
    assert {"type", "title", "status", "detail", "instance"} <= set(reply.json())  # RFC 9457
    assert words in reply.json()["detail"]


@pytest.mark.slow
def test_nan_and_foreign_host_are_refused(server) -> None:
    client, _ = server
    reply = client.post("/v1/goals", content='{"kind":"angle","angle_deg":NaN}', headers={"content-type": "application/json"})
    assert reply.status_code == 422
    assert client.get("/v1/state", headers={"host": "elsewhere.example"}).status_code == 400


@pytest.mark.slow
def test_frame_is_a_picture(server) -> None:
    client, _ = server
    for overlay in ("true", "false"):
        reply = client.get("/v1/camera/frame.jpg", params={"overlay": overlay})
        picture = cv2.imdecode(np.frombuffer(reply.content, np.uint8), cv2.IMREAD_COLOR)
        assert picture.shape == (720, 1280, 3)
        assert picture.std() > 10.0


@pytest.mark.slow
def test_children_die_with_a_killed_parent() -> None:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    command = [sys.executable, "-c", "from service.cli import main; main()", "serve", "--simulated", "--port", str(port)]
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    deadline_s = time.monotonic() + 60.0
    while time.monotonic() < deadline_s:
        try:
            httpx.get(f"http://127.0.0.1:{port}/healthz")
            break
        except httpx.TransportError:
            continue
    listed = Path(f"/proc/{process.pid}/task/{process.pid}/children").read_text()
    children = [int(pid) for pid in listed.split()]
    assert len(children) >= 2
    os.kill(process.pid, signal.SIGKILL)
    process.wait()
    deadline_s = time.monotonic() + 10.0
    while time.monotonic() < deadline_s and any(_is_alive(pid) for pid in children):
        continue
    assert not any(_is_alive(pid) for pid in children)


def _is_alive(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()[0] != "Z"
    except FileNotFoundError:
        return False
