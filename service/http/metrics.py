"""The figures of a run as OpenMetrics 1.0 text."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any, get_args

from hw_profiles.errors import DeviceError
from service.http.replies import OutcomeName, StateName
from service.http.served import Served

MEDIA_TYPE = "application/openmetrics-text; version=1.0.0; charset=utf-8"


def text(here: Served) -> str:
    """All metrics; those of the loop are left out while it is not heard, and palmloop_up says 0."""
    try:
        shown: dict[str, Any] | None = here.hand.snapshot().parsed()
    except DeviceError:
        shown = None
    lines = [*_family("palmloop_up", "gauge", "1 while the loop is heard", [("", int(shown is not None))])]
    if shown is not None:
        lines += _of_loop(shown)
    lines += _of_web(here)
    return "\n".join([*lines, "# EOF", ""])


def _of_loop(shown: dict[str, Any]) -> Iterator[str]:
    states = [(f'{{palmloop_state="{name}"}}', int(shown["state"] == name)) for name in get_args(StateName)]
    yield from _family("palmloop_state", "stateset", "state of the loop", states)
    ended = [(f'_total{{outcome="{name}"}}', shown["n_by_outcome"].get(name, 0)) for name in get_args(OutcomeName)]
    yield from _family("palmloop_goals", "counter", "goals ended", ended)
    yield from _family("palmloop_ticks", "counter", "steps of the loop", [("_total", shown["loop"]["n_ticks"])])
    yield from _family("palmloop_refusals", "counter", "requests the loop refused", [("_total", shown["n_refusals"])])
    quantiles = [(f'{{quantile="{q}"}}', shown["loop"][key] / 1e3) for q, key in (("0.5", "busy_ms_p50"), ("0.99", "busy_ms_p99"))]
    yield from _family("palmloop_step_seconds", "summary", "from a frame in memory to its command on the line", quantiles, "seconds")
    gauges = {
        "palmloop_frame_age_seconds": ("age of the newest camera frame", _scaled(shown["frame_age_ms"], 1e-3), "seconds"),
        "palmloop_error_millimeters": ("from the part to the goal", shown["error_mm"], "millimeters"),
        "palmloop_error_degrees": ("from the part to the goal", shown["error_deg"], "degrees"),
    }
    if shown["cage"] is not None:
        gauges["palmloop_cage_margin_millimeters"] = ("how much wider the widest gap could be", shown["cage"]["margin_mm"], "millimeters")
    if shown["board"] is not None:
        gauges["palmloop_supply_volts"] = ("supply of the servos", shown["board"]["supply_v"], "volts")
        gauges["palmloop_board_celsius"] = ("temperature of the board", shown["board"]["temperature_c"], "celsius")
    for name, (told, value, unit) in gauges.items():
        if value is not None:
            yield from _family(name, "gauge", told, [("", value)], unit)


def _of_web(here: Served) -> Iterator[str]:
    if here.guard is not None:
        yield from _family("palmloop_http_requests", "counter", "requests let through", [("_total", here.guard.n_served)])
        yield from _family("palmloop_http_refused", "counter", "requests turned away at the door", [("_total", here.guard.n_refused)])
    yield from _family("palmloop_listeners", "gauge", "listeners to the state stream", [("", here.feed.n_streams)])
    yield from _family("palmloop_pictures_encoded", "counter", "camera pictures encoded", [("_total", here.pictures.n_encoded)])


def _family(name: str, kind: str, told: str, samples: Sequence[tuple[str, float]], unit: str = "") -> list[str]:
    head = [f"# TYPE {name} {kind}", *([f"# UNIT {name} {unit}"] if unit else []), f"# HELP {name} {told}"]
    return head + [f"{name}{suffix} {value:g}" if isinstance(value, float) else f"{name}{suffix} {value}" for suffix, value in samples]


def _scaled(value: float | None, factor: float) -> float | None:
    return None if value is None else value * factor
