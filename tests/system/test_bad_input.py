"""Bad input to the command line: one clear line that names the thing, the value and what is allowed; exit code 2; nothing moves."""

import re
import socket
import sys

import pytest

from service import cli


def refused(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], *words: str) -> str:
    monkeypatch.setattr(sys, "argv", ["palmloop", *words])
    with pytest.raises(SystemExit) as ended:
        cli.main()
    assert ended.value.code == 2
    shown = capsys.readouterr()
    assert shown.out == ""
    assert "Traceback" not in shown.err
    return re.sub(r"\s+", " ", shown.err)


@pytest.mark.parametrize(
    ("words", "wanted"),
    [
        (("trial", "--simulated", "--rig", "nope"), "nope: no such file, and no shipped rig; shipped rigs: duo, polar, quad, trefoil"),
        (("trial", "--simulated", "--part", "nope"), "shipped parts: block-36, bracket-l, collar-60, nut-m30, roller-40"),
        (("trial", "--simulated", "--tolerance-mm", "-1"), "--tolerance-mm = -1.0: input should be greater than 0"),
        (("trial", "--simulated", "--goals", "0"), "--goals = 0: input should be greater than or equal to 1"),
        (("trial", "--simulated", "--kind", "spin"), "--kind = 'spin': input should be 'position', 'angle', 'pose' or 'turn'"),
        (("trial", "--simulated", "--vary", "frction=1"), "frction: did you mean friction? allowed: friction, plate_friction"),
        (("trial", "--simulated", "--vary", "friction=x"), "friction = 'x': allowed: a number"),
        (("trial", "--simulated", "--vary", "dropout=1.5"), "dropout = 1.5"),
        (("check", "nope"), "no shipped rig"),
        (("trial",), "serial_device"),
    ],
)
def test_refused_in_one_line(monkeypatch, capsys, words: tuple[str, ...], wanted: str) -> None:
    assert wanted in refused(monkeypatch, capsys, *words)


def test_broken_toml_is_refused_with_its_place(monkeypatch, capsys, tmp_path) -> None:
    own = tmp_path / "own.toml"
    own.write_text("name = [")
    assert "own.toml: not valid TOML" in refused(monkeypatch, capsys, "check", str(own))


def test_port_in_use_is_refused_before_anything_starts(monkeypatch, capsys) -> None:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = str(taken.getsockname()[1])
        message = refused(monkeypatch, capsys, "serve", "--simulated", "--port", port)
    assert f"--port {port} on 127.0.0.1: address already in use" in message
