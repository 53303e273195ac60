"""The report of a trial: one HTML file that needs nothing else, figures as inline SVG."""

from __future__ import annotations

import base64
import html
import io
import math
from typing import Any

import cv2
import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from control.model.kinematics import HandModel, centre_lines
from control.servoing.goals import Ending
from hw_profiles.rig import Rig
from service.trials.run import TrialRun
from vision.frames import Pixels

REACHED, MISSED, INK = "#1b6f8c", "#b0432b", "#26323a"
ARROW_SCALE = 20.0  # error vectors are drawn this much longer

STYLE = """
body{font:16px/1.5 system-ui,sans-serif;color:#26323a;max-width:60rem;margin:2rem auto;padding:0 1rem}
h1{font-size:1.5rem}h2{font-size:1.15rem;margin-top:2rem}table{border-collapse:collapse}
td,th{padding:.2rem .8rem;border-bottom:1px solid #d5dbdf;text-align:right}td:first-child,th:first-child{text-align:left}
figure{margin:1rem 0}figcaption{color:#55636c;font-size:.9rem}svg,img{max-width:100%;height:auto}.note{color:#55636c}
@media print{body{margin:0}figure{break-inside:avoid}}
"""


def report_html(rig: Rig, run: TrialRun, figures: dict[str, Any], picture: Pixels | None) -> str:
    """The report; `picture` is a BGR frame to show, if there is one."""
    truth = "Errors are against the true pose of the simulation, not the tracker's own estimate."
    sections = [
        f"<h1>{html.escape(rig.part.name)} in {html.escape(rig.name)}: {figures['kind']} goals</h1>",
        f"<p>{figures['reached']} of {figures['goals']} goals were held within {figures['tolerance_mm']:g} mm / "
        f"{figures['tolerance_deg']:g}° for {run.spec.hold_s:g} s. {truth}</p>",
        _numbers(figures),
        _section("Where the goals were", _svg(_map(rig, run)), f"Error vectors are drawn {ARROW_SCALE:g} times longer than they are."),
        _section("How near, and how fast", _svg(_spreads(run)), "Each dot is a goal; the line is the median."),
        _failures(run),
    ]
    if picture is not None:
        sections.insert(
            3, f'<figure><img alt="camera frame" src="{_jpeg(picture)}"><figcaption>The end of the trial.</figcaption></figure>'
        )
    title = html.escape(f"{rig.part.name} in {rig.name}")
    return f"<!doctype html><html lang=en><meta charset=utf-8><title>{title}</title><style>{STYLE}</style>{''.join(sections)}</html>"


def _numbers(figures: dict[str, Any]) -> str:
    rows = []
    for label, name, unit in (("position error", "error_mm", "mm"), ("angle error", "error_deg", "°"), ("time to goal", "time_s", "s")):
        if figures[f"median_{name}"] is not None:
            rows.append(f"<tr><td>{label}<td>{figures[f'median_{name}']:.2f} {unit}<td>{figures[f'p95_{name}']:.2f} {unit}</tr>")
    facts = (
        f"part lost: {figures['ejections']} · ticks: {figures['ticks']}, without a certified cage: {figures['ticks_without_cage']} · "
        f"seed {figures['seed']} · one tick {figures['loop_ms']['p50']:.1f} ms (99 %: {figures['loop_ms']['p99']:.1f} ms)"
    )
    head = "<tr><th><th>median<th>95 %</tr>"
    return f"<table>{head}{''.join(rows)}</table><p class=note>{facts}</p>"


def _section(title: str, body: str, caption: str) -> str:
    return f"<h2>{title}</h2><figure>{body}<figcaption>{caption}</figcaption></figure>"


def _failures(run: TrialRun) -> str:
    missed = [result for result in run.results if result.ending is not Ending.REACHED]
    if not missed:
        return "<h2>What failed</h2><p>Nothing.</p>"
    rows = "".join(f"<tr><td>{html.escape(r.goal.id)}<td>{r.ending.value}<td>{html.escape(r.reason)}</tr>" for r in missed)
    return f"<h2>What failed, and why</h2><table>{rows}</table>"


def _map(rig: Rig, run: TrialRun) -> Figure:
    figure = Figure(figsize=(7.0, 6.0), layout="constrained")
    axes = figure.subplots()
    _draw_hand(axes, HandModel(rig.hand))
    for result in run.results:
        is_reached = result.ending is Ending.REACHED
        wanted, ended = result.goal.pose, result.end_pose
        at = (ended.x_mm, ended.y_mm) if math.isnan(result.error_mm) else (wanted.x_mm, wanted.y_mm)
        axes.plot(*at, "o" if is_reached else "x", color=REACHED if is_reached else MISSED, ms=6 if is_reached else 8, mew=2)
        if is_reached and not math.isnan(result.error_mm):
            axes.plot(
                [at[0], at[0] + ARROW_SCALE * (ended.x_mm - wanted.x_mm)], [at[1], at[1] + ARROW_SCALE * (ended.y_mm - wanted.y_mm)],
                color=INK, lw=1.2,
            )  # fmt: skip
    axes.set(aspect="equal", xlabel="x [mm]", ylabel="y [mm]")
    axes.plot([], [], "o", color=REACHED, label="held")
    axes.plot([], [], "x", color=MISSED, mew=2, label="not held")
    axes.legend(loc="upper right", frameon=False)
    return figure


def _draw_hand(axes: Axes, hand: HandModel) -> None:
    for line in centre_lines(hand, hand.home):
        axes.plot(*line.T, color="#c9d2d8", lw=6, solid_capstyle="round", zorder=0)
    axes.plot(*hand.base_mm.T, "s", color="#8b9aa3", ms=9, zorder=0)


def _spreads(run: TrialRun) -> Figure:
    reached = [result for result in run.results if result.ending is Ending.REACHED]
    columns = [
        ("position error [mm]", [r.error_mm for r in reached]),
        ("angle error [°]", [r.error_deg for r in reached]),
        ("time to goal [s]", [r.time_s for r in reached]),
    ]
    shown = [(label, np.array([v for v in values if not math.isnan(v)])) for label, values in columns]
    shown = [(label, values) for label, values in shown if len(values)]
    figure = Figure(figsize=(7.0, 0.6 + 1.1 * max(len(shown), 1)), layout="constrained")
    if not shown:
        return figure
    scatter = np.random.default_rng(0)  # spreads overlapping dots; says nothing
    for axes, (label, values) in zip(np.atleast_1d(figure.subplots(len(shown))), shown, strict=True):
        axes.plot(values, scatter.uniform(-1.0, 1.0, len(values)), "o", color=REACHED, alpha=0.6, ms=5, mew=0)
        axes.axvline(float(np.median(values)), color=INK, lw=1.5)
        axes.set(xlabel=label, yticks=[], ylim=(-2.0, 2.0))
        axes.set_xlim(left=0.0)
        for side in ("left", "right", "top"):
            axes.spines[side].set_visible(False)
    return figure


def _svg(figure: Figure) -> str:
    buffer = io.StringIO()
    with matplotlib.rc_context({"svg.hashsalt": "palmloop"}):
        figure.savefig(buffer, format="svg", metadata={"Date": None})
    text = buffer.getvalue()
    return text[text.index("<svg") :]


def _jpeg(picture: Pixels) -> str:
    _, data = cv2.imencode(".jpg", picture, [cv2.IMWRITE_JPEG_QUALITY, 85])
    return "data:image/jpeg;base64," + base64.b64encode(data.tobytes()).decode()
