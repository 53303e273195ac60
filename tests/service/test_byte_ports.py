"""One contract for every byte port: the in-memory one of the lockstep bench, and pyserial on a real pseudo-terminal."""

import os
import time
import tty
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import pytest

from hw_profiles.errors import DeviceError
from service.devices.servo_port import SerialPort
from service.ports import BytePort
from service.simulated.bench import MemoryPort


@dataclass
class Line:
    """A port, and the other end of its line."""

    port: BytePort
    far_read: Callable[[int], bytes]
    far_write: Callable[[bytes], None]


class _Loopback:
    """The board's end of an in-memory line."""

    def __init__(self) -> None:
        self.taken, self.to_give = b"", b""

    def receive(self, data: bytes, now_us: int) -> None:
        self.taken += data

    def transmit(self, now_us: int) -> bytes:
        data, self.to_give = self.to_give, b""
        return data

    def now_us(self) -> int:
        return 0


@pytest.fixture(params=["memory", "pseudo-terminal"])
def line(request: pytest.FixtureRequest) -> Iterator[Line]:
    if request.param == "memory":
        far = _Loopback()

        def give(data: bytes) -> None:
            far.to_give += data

        yield Line(MemoryPort(far, far), lambda n: far.taken, give)
        return
    master, slave = os.openpty()
    tty.setraw(slave)
    port = SerialPort(os.ttyname(slave), 115200)

    def read_far(n: int) -> bytes:
        data = b""
        while len(data) < n:
            data += os.read(master, n - len(data))
        return data

    yield Line(port, read_far, lambda data: _all_written(master, data))
    port.close()
    os.close(master)
    os.close(slave)


def _all_written(descriptor: int, data: bytes) -> None:
    assert os.write(descriptor, data) == len(data)


def _arrives(port: BytePort, n: int) -> bytes:
    data, deadline_s = b"", time.monotonic() + 5.0
    while len(data) < n and time.monotonic() < deadline_s:
        data += port.read()
    return data


def test_bytes_go_out_in_order(line: Line) -> None:
    line.port.write(b"\x00\x01\xff")
    assert line.far_read(3) == b"\x00\x01\xff"


def test_bytes_come_in_and_are_given_once(line: Line) -> None:
    line.far_write(b"\x00\x7f\x80\xff")
    assert _arrives(line.port, 4) == b"\x00\x7f\x80\xff"
    assert line.port.read() == b""


def _read_until(port: BytePort, deadline_s: float) -> None:
    while time.monotonic() < deadline_s:
        port.read()


def test_missing_device_is_refused_by_name() -> None:
    with pytest.raises(DeviceError, match=r"serial device /dev/none-such: no such file or directory"):
        SerialPort("/dev/none-such", 115200)


def test_pulled_cable_raises_and_names_the_device() -> None:
    master, slave = os.openpty()
    tty.setraw(slave)
    name = os.ttyname(slave)
    port = SerialPort(name, 115200)
    os.close(master)
    os.close(slave)
    deadline_s = time.monotonic() + 5.0
    with pytest.raises(DeviceError, match=name):
        _read_until(port, deadline_s)
    port.close()


def test_newest_message_wins_when_the_line_is_slow() -> None:
    master, slave = os.openpty()
    tty.setraw(slave)
    port = SerialPort(os.ttyname(slave), 115200)
    block = b"x" * 4096
    for _ in range(200):  # far more than the terminal takes
        port.write(block)
    assert port.n_replaced > 0
    os.set_blocking(master, False)
    deadline_s = time.monotonic() + 5.0
    port.write(b"last")
    data = b""
    while not data.endswith(b"last") and time.monotonic() < deadline_s:
        try:
            data = (data + os.read(master, 65536))[-8:]
        except BlockingIOError:
            continue
    assert data.endswith(b"last")
    port.close()
    os.close(master)
    os.close(slave)
