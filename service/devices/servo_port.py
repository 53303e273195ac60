"""A serial line on its own thread: a write to a tty can block for tens of milliseconds, the loop must not."""

from __future__ import annotations

import threading
from collections import deque

import serial

from hw_profiles.errors import DeviceError

N_QUEUED = 4  # messages that may wait; the newest wins
READ_LIMIT = 65536  # bytes kept unread


class SerialPort:
    """A byte port over pyserial.

    Attributes
    ----------
    n_sent, n_received, n_replaced : bytes over the line, and messages that a newer one replaced before they were sent.
    """

    def __init__(self, device: str, baud: int) -> None:
        try:
            self._serial = serial.Serial(device, baud, timeout=0.02, write_timeout=None, exclusive=True)
        except (serial.SerialException, OSError, ValueError) as error:
            raise DeviceError(f"serial device {device}: {_reason(error)}; check the cable, or serial_device in the rig") from error
        self.device = device
        self.n_sent = self.n_received = self.n_replaced = 0
        self._waiting: deque[bytes] = deque()
        self._arrived = bytearray()
        self._fault: str | None = None
        self._is_closing = False
        self._wake = threading.Condition()
        self._threads = [
            threading.Thread(target=self._write_on, name="serial write", daemon=True),
            threading.Thread(target=self._read_on, name="serial read", daemon=True),
        ]
        for thread in self._threads:
            thread.start()

    def write(self, data: bytes) -> None:
        """Hand bytes over for sending; the oldest waiting message gives way when too many wait."""
        with self._wake:
            self._raise_if_gone()
            if len(self._waiting) >= N_QUEUED:
                self._waiting.popleft()
                self.n_replaced += 1
            self._waiting.append(data)
            self._wake.notify_all()

    def read(self) -> bytes:
        """Whatever has arrived since the last call."""
        with self._wake:
            self._raise_if_gone()
            data = bytes(self._arrived)
            self._arrived.clear()
            return data

    def _raise_if_gone(self) -> None:
        if self._fault is not None:
            raise DeviceError(f"serial device {self.device}: {self._fault}; check the cable and the board's supply")

    def _write_on(self) -> None:
        while True:
            with self._wake:
                self._wake.wait_for(lambda: self._waiting or self._is_closing or self._fault)
                if self._fault or (self._is_closing and not self._waiting):
                    return
                data = self._waiting.popleft()
            try:
                self._serial.write(data)
                self.n_sent += len(data)
            except (serial.SerialException, OSError) as error:
                self._fail(error)
                return

    def _read_on(self) -> None:
        while not self._is_closing and self._fault is None:
            try:
                data = self._serial.read(self._serial.in_waiting or 1)
            except (serial.SerialException, OSError, TypeError) as error:  # TypeError: pyserial, when closed while it reads
                if not self._is_closing:
                    self._fail(error)
                return
            with self._wake:
                self.n_received += len(data)
                self._arrived += data[: READ_LIMIT - len(self._arrived)]

    def _fail(self, error: Exception) -> None:
        with self._wake:
            self._fault = _reason(error)
            self._wake.notify_all()

    def close(self) -> None:
        """Send what waits, then let the device go."""
        with self._wake:
            self._is_closing = True
            self._wake.notify_all()
        for thread in self._threads:
            thread.join(timeout=1.0)
        self._serial.close()


def _reason(error: Exception) -> str:
    """The cause in a few words, without pyserial's own wrapping."""
    cause = error.__cause__ or error.__context__ or error
    return str(getattr(cause, "strerror", None) or cause).lower()
