"""palmloop's own frames: pulse widths to a servo board and its telemetry back. Bytes in, bytes out; no port here.

A frame on the line is 00, COBS(message, CRC-16/XMODEM of it, high byte first), 00. The leading zero ends whatever noise came before, so
that the next frame is never lost to it. docs/wire.md lists the messages byte by byte.
"""

from __future__ import annotations

import binascii
import struct
from dataclasses import dataclass

MAX_CHANNELS = 32
MAX_MESSAGE = 2 + 2 * MAX_CHANNELS
MAX_FRAME = MAX_MESSAGE + 2 + 2  # CRC, and what COBS adds to up to 254 bytes, with room for one
NO_PULSE = 0

TARGETS, REARM, LIMITS, TELEMETRY = 0x01, 0x02, 0x03, 0x81
REARM_KEY = b"\xa5\x5a"  # a re-arm must not be a lucky bit pattern


@dataclass(frozen=True, slots=True)
class Targets:
    """Pulse widths [µs] by channel, 0 for no pulse."""

    sequence: int
    pulses_us: tuple[int, ...]


@dataclass(frozen=True, slots=True)
class Rearm:
    """Unlatch the board's watchdog; pulses start with the next targets."""

    sequence: int


@dataclass(frozen=True, slots=True)
class Limits:
    """Least and greatest pulse width [µs] that a channel will ever give out."""

    sequence: int
    channel: int
    low_us: int
    high_us: int


@dataclass(frozen=True, slots=True)
class Telemetry:
    """What the board says of itself: the last sequence it took, whether its watchdog is latched, supply, temperature, errors seen.

    supply_mv and temperature_dc (tenths of a degree Celsius) are None where nothing is wired.
    """

    sequence: int
    is_latched: bool
    supply_mv: int | None
    temperature_dc: int | None
    n_errors: int


Message = Targets | Rearm | Limits | Telemetry


@dataclass(frozen=True, slots=True)
class BadFrame:
    """Bytes that were no message, and why."""

    reason: str


UNWIRED_MV, UNWIRED_DC = 0xFFFF, -0x8000


def encode(message: Message) -> bytes:
    """The bytes of a message on the line.

    Raises
    ------
    struct.error, ValueError
        A number that does not fit its field.
    """
    match message:
        case Targets(sequence, pulses_us):
            if len(pulses_us) > MAX_CHANNELS:
                raise ValueError(f"targets for {len(pulses_us)} channels; allowed: up to {MAX_CHANNELS}")
            body = struct.pack(f">BB{len(pulses_us)}H", TARGETS, sequence, *pulses_us)
        case Rearm(sequence):
            body = struct.pack(">BB", REARM, sequence) + REARM_KEY
        case Limits(sequence, channel, low_us, high_us):
            body = struct.pack(">BBBHH", LIMITS, sequence, channel, low_us, high_us)
        case Telemetry(sequence, is_latched, supply_mv, temperature_dc, n_errors):
            supply = UNWIRED_MV if supply_mv is None else supply_mv
            temperature = UNWIRED_DC if temperature_dc is None else temperature_dc
            body = struct.pack(">BBBHhH", TELEMETRY, sequence, is_latched, supply, temperature, n_errors)
    return b"\x00" + cobs_encode(body + struct.pack(">H", crc16(body))) + b"\x00"


class Decoder:
    """Turns any chunks of bytes into messages; noise becomes `BadFrame`, never an exception, and memory stays bounded."""

    def __init__(self) -> None:
        self._pending = bytearray()
        self._is_overlong = False

    def feed(self, data: bytes) -> list[Message | BadFrame]:
        """Messages completed by these bytes, in order."""
        found: list[Message | BadFrame] = []
        for byte in data:
            if byte != 0:
                if len(self._pending) < MAX_FRAME:
                    self._pending.append(byte)
                else:
                    self._is_overlong = True
                continue
            if self._is_overlong:
                found.append(BadFrame(f"longer than {MAX_FRAME} bytes"))
            elif self._pending:
                found.append(_parse(bytes(self._pending)))
            self._pending.clear()
            self._is_overlong = False
        return found


def _parse(frame: bytes) -> Message | BadFrame:
    content = cobs_decode(frame)
    if content is None or len(content) < 4:
        return BadFrame("not a COBS frame")
    body, checksum = content[:-2], content[-2:]
    if struct.pack(">H", crc16(body)) != checksum:
        return BadFrame("checksum does not match")
    kind, rest = body[0], body[1:]
    if kind == TARGETS and len(rest) % 2 == 1 and len(rest) <= 1 + 2 * MAX_CHANNELS:
        sequence, *pulses = struct.unpack(f">B{len(rest) // 2}H", rest)
        return Targets(sequence, tuple(pulses))
    if kind == REARM and len(rest) == 3 and rest[1:] == REARM_KEY:
        return Rearm(rest[0])
    if kind == LIMITS and len(rest) == 6:
        return Limits(*struct.unpack(">BBHH", rest))
    if kind == TELEMETRY and len(rest) == 8:
        sequence, latched, supply, temperature, n_errors = struct.unpack(">BBHhH", rest)
        supply_mv = None if supply == UNWIRED_MV else supply
        return Telemetry(sequence, bool(latched), supply_mv, None if temperature == UNWIRED_DC else temperature, n_errors)
    return BadFrame(f"message kind {kind:#04x} of {len(body)} bytes is not known")


def crc16(data: bytes) -> int:
    """CRC-16/XMODEM: polynomial 0x1021, start 0, not reflected."""
    return binascii.crc_hqx(data, 0)


def cobs_encode(data: bytes) -> bytes:
    """Consistent overhead byte stuffing (Cheshire & Baker, IEEE/ACM ToN 1999), without the delimiter."""
    out = bytearray()
    blocks = data.split(b"\x00")
    for index, block in enumerate(blocks):
        is_last = index == len(blocks) - 1
        while len(block) >= 254:
            out += b"\xff" + block[:254]
            block = block[254:]
            if not block and is_last:
                return bytes(out)
        out += bytes([len(block) + 1]) + block
    return bytes(out)


def cobs_decode(data: bytes) -> bytes | None:
    """The bytes stuffed in a COBS block; None when it is not one."""
    out, index = bytearray(), 0
    while index < len(data):
        code = data[index]
        block = data[index + 1 : index + code]
        if code == 0 or len(block) != code - 1 or 0 in block:
            return None
        out += block
        index += code
        if code < 0xFF and index < len(data):
            out.append(0)
    return bytes(out)
