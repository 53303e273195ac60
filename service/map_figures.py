"""Drawing of map layers: hand, part, command and field, to be read at a glance."""

from __future__ import annotations

import io
import math
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure
from matplotlib.patches import Circle, Polygon

from control.model.escape import Escape
from control.model.kinematics import HandModel, centre_lines
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Disc, Part
from hw_profiles.rig import Rig
from service.maps import CageLayer, EnergyLayer, ReachLayer

ROOM = "#35b779"
INK, PAPER, FINGER, PART, WAY_OUT, HOLDS, LEAKS = "#1c2430", "#ffffff", "#8a94a3", "#f6f1e4", "#d1495b", "#1b7f4b", "#d1495b"
SIDE_MM = 128.0  # half side of the picture: the whole hand


def draw(layer: EnergyLayer | CageLayer | ReachLayer) -> Figure:
    """The figure of a layer."""
    match layer:
        case EnergyLayer():
            return _energy(layer)
        case CageLayer():
            return _cage(layer)
        case ReachLayer():
            return _reach(layer)


def png(layer: EnergyLayer | CageLayer | ReachLayer, dpi: int = 150) -> bytes:
    """The figure as a PNG file."""
    buffer = io.BytesIO()
    draw(layer).savefig(buffer, dpi=dpi, facecolor=PAPER)
    return buffer.getvalue()


def _energy(layer: EnergyLayer) -> Figure:
    figure, axes, bar = _sheet(layer.rig, "Energy to place the part")
    values = np.ma.masked_invalid(layer.values_mj[:, :, 0].T)
    top = _top(layer)
    shown = axes.pcolormesh(
        layer.grid.x_mm, layer.grid.y_mm, values, cmap="viridis", vmin=0.0, vmax=top, shading="gouraud", rasterized=True
    )
    levels = np.linspace(0.0, top, 9)[1:-1]
    lines = axes.contour(layer.grid.x_mm, layer.grid.y_mm, values, levels=levels, colors="white", linewidths=0.5, alpha=0.55)
    axes.clabel(lines, levels=levels[1::2], fmt="%.0f", fontsize=6.5, inline_spacing=2)
    _colour_bar(figure, bar, shown, "elastic energy of the servos [mJ]", extend="max")
    hand = HandModel(layer.rig.hand)
    _draw_hand(axes, hand, layer.command.joints, ghost=True)
    _draw_hand(axes, hand, layer.yielding.joints)
    _draw_route(axes, layer.out)
    _draw_part(axes, layer.rig.part, layer.pose)
    moved = np.hypot(*(layer.settled.pose.xy_mm - layer.pose.xy_mm)) > 0.5
    if moved or abs(math.remainder(layer.settled.pose.yaw_rad - layer.pose.yaw_rad, 2.0 * math.pi)) > math.radians(2.0):
        _draw_part(axes, layer.rig.part, layer.settled.pose, settles=True)
    told = [
        f"command  {layer.command.name}",
        f"part at  {_place(layer.pose)}   E {layer.yielding.energy_mj:.1f} mJ",
        f"settles at  {_place(layer.settled.pose)}",
        _told_out(layer.out),
    ]
    return _finish(
        figure, axes, told, [("command", "dashed finger"), ("as the part pushes it", "solid finger"), ("no room for the part", "pale")]
    )


def _top(layer: EnergyLayer) -> float:
    """Top of the colour scale: a little above the pass, so that basin and way out both show."""
    finite = layer.values_mj[np.isfinite(layer.values_mj)]
    high = float(np.percentile(finite, 90.0)) if len(finite) else 1.0
    wanted = 1.6 * layer.out.pass_mj if 1.0 < layer.out.pass_mj < math.inf else high
    step = 10.0 ** math.floor(math.log10(max(wanted, 1.0)))
    return math.ceil(wanted / step * 2.0) * step / 2.0


def _cage(layer: CageLayer) -> Figure:
    figure, axes, bar = _sheet(layer.rig, "Where the part can go while the fingers stand still")
    n, half = layer.space.room.shape[0], layer.space.half_mm
    play = np.ma.masked_less_equal(layer.play_deg.T, 0.0)
    edges = [centre + (np.arange(n + 1) - n // 2 - 0.5) * layer.space.cell[0] for centre in (layer.pose.x_mm, layer.pose.y_mm)]
    if isinstance(layer.rig.part.shape, Disc):
        axes.pcolormesh(edges[0], edges[1], play, cmap=ListedColormap([ROOM]), rasterized=True)
        bar.set_visible(False)
    else:
        shown = axes.pcolormesh(edges[0], edges[1], play, cmap="viridis", vmin=0.0, vmax=360.0, rasterized=True)
        _colour_bar(figure, bar, shown, "angles the part can reach there [°]", ticks=range(0, 361, 60))
    if half < SIDE_MM:
        box = [(layer.pose.x_mm + sx * half, layer.pose.y_mm + sy * half) for sx, sy in ((-1, -1), (1, -1), (1, 1), (-1, 1))]
        axes.add_patch(Polygon(box, fill=False, edgecolor=INK, linewidth=0.5, linestyle=(0, (1, 3)), zorder=2))
    _draw_hand(axes, HandModel(layer.rig.hand), layer.command.joints)
    for bridge, gap_mm in zip(layer.bridges_mm, layer.certificate.gaps_mm, strict=True):
        if np.isfinite(bridge).all():
            _draw_bridge(axes, bridge, float(gap_mm), layer.certificate.margin_mm + float(layer.certificate.gaps_mm.max()))
    _draw_route(axes, layer.out)
    _draw_part(axes, layer.rig.part, layer.pose)
    ring = f"margin {layer.certificate.margin_mm:+.1f} mm" if layer.certificate.is_caged else "no ring holds it"
    told = [
        f"posture  {layer.command.name}",
        f"part at  {_place(layer.pose)}",
        f"fingers still: {layer.space.verdict.value}   ring: {ring}",
        _told_out(layer.out),
    ]
    legend = [("a gap that holds the part [mm]", "green"), ("where the part's middle can be", "coloured area")]
    return _finish(figure, axes, told, legend)


def _draw_bridge(axes: Axes, bridge: Array, gap_mm: float, passes_mm: float) -> None:
    holds = gap_mm < passes_mm
    colour = HOLDS if holds else LEAKS
    axes.plot(*bridge.T, color=colour, linewidth=1.6, linestyle="solid" if holds else (0, (3, 2)), marker="|", markersize=7, zorder=7)
    middle, along = bridge.mean(axis=0), bridge[1] - bridge[0]
    outward = middle / max(float(np.linalg.norm(middle)), 1e-9) * 7.0
    if np.linalg.norm(along) > 0.0:
        normal = np.array([along[1], -along[0]]) / np.linalg.norm(along)
        outward = normal * math.copysign(6.5, float(normal @ middle))
    x_mm, y_mm = middle + outward
    axes.text(x_mm, y_mm, f"{gap_mm:.1f}", color=colour, fontsize=8, ha="center", va="center", zorder=8, bbox=_plate())


def _reach(layer: ReachLayer) -> Figure:
    figure, axes, bar = _sheet(layer.rig, "Where the grasps hold the part")
    x, y = layer.grid.x_mm, layer.grid.y_mm
    half = float(np.diff(x[:2])[0]) / 2.0
    edges = [np.append(ticks - half, ticks[-1] + half) for ticks in (x, y)]
    caged = np.ma.masked_equal(layer.caged.any(axis=2).T, False)
    axes.pcolormesh(edges[0], edges[1], caged, cmap=ListedColormap(["#d9dde3"]), vmin=0.0, vmax=1.0, rasterized=True)
    held = np.ma.masked_less_equal(layer.held_deg.T, 0.0)
    shown = axes.pcolormesh(edges[0], edges[1], held, cmap="viridis", vmin=0.0, vmax=360.0, rasterized=True)
    _colour_bar(figure, bar, shown, "part angles held [°]", ticks=range(0, 361, 60))
    _draw_hand(axes, HandModel(layer.rig.hand), layer.park, alpha=0.4)
    _draw_part(axes, layer.rig.part, Pose2(0.0, 0.0, 0.0), outline_only=True)
    shares = layer.shares()
    told = [
        f"held  {100 * shares['held_share_of_positions']:.0f} % of the positions, {100 * shares['held_share_of_poses']:.0f} % of the poses",
        f"at which a ring can cage the part ({shares['workspace_area_cm2']:.0f} cm², grey and coloured)",
    ]
    return _finish(figure, axes, told, [])


def _sheet(rig: Rig, title: str) -> tuple[Figure, Axes, Axes]:
    figure = Figure(figsize=(7.0, 7.4), facecolor=PAPER)
    axes = figure.add_axes((0.09, 0.15, 0.78, 0.74))
    bar = figure.add_axes((0.895, 0.15, 0.02, 0.74))
    axes.set_facecolor("#eef0f3")
    figure.text(0.09, 0.945, title, fontsize=13, color=INK, weight="bold")
    figure.text(0.09, 0.917, f"{rig.hand.name} hand, {rig.part.title or rig.part.name}", fontsize=9, color=INK)
    axes.set(xlim=(-SIDE_MM, SIDE_MM), ylim=(-SIDE_MM, SIDE_MM), aspect="equal")
    axes.set_xlabel("x of the part [mm]", fontsize=9, color=INK)
    axes.set_ylabel("y of the part [mm]", fontsize=9, color=INK)
    ticks = range(-120, 121, 40)
    axes.set_xticks(ticks)
    axes.set_yticks(ticks)
    axes.tick_params(labelsize=8, colors=INK, length=3)
    for spine in axes.spines.values():
        spine.set(color=INK, linewidth=0.6)
    return figure, axes, bar


def _colour_bar(figure: Figure, bar: Axes, shown: Any, label: str, **options: Any) -> None:
    scale = figure.colorbar(shown, cax=bar, **options)
    scale.set_label(label, fontsize=9, color=INK)
    scale.ax.tick_params(labelsize=8, colors=INK)
    scale.outline.set(edgecolor=INK, linewidth=0.6)


def _finish(figure: Figure, axes: Axes, told: list[str], legend: list[tuple[str, str]]) -> Figure:
    for row, line in enumerate(told):
        figure.text(0.09, 0.083 - 0.021 * row, line, fontsize=8.5, color=INK)
    for row, (meaning, look) in enumerate(legend):
        figure.text(0.915, 0.083 - 0.021 * row, f"{look}: {meaning}", fontsize=7.5, color=INK, ha="right")
    return figure


def _draw_hand(axes: Axes, hand: HandModel, joints: Array, ghost: bool = False, alpha: float = 0.95) -> None:
    """Links as capsules with their true width, tips, and bases with the fingers' names."""
    for f, line in enumerate(centre_lines(hand, joints)):
        own = hand.joints_of(f)
        n = own.stop - own.start
        if ghost:
            axes.plot(*line[: n + 1].T, color=INK, linewidth=0.8, linestyle=(0, (4, 3)), zorder=5)
            axes.add_patch(
                Circle(line[n], hand.tip_radius_mm[f], fill=False, edgecolor=INK, linewidth=0.8, linestyle=(0, (4, 3)), zorder=5)
            )
            continue
        for k in range(n):
            axes.add_patch(_capsule(line[k], line[k + 1], float(hand.link_radius_mm[own.start + k]), alpha))
        axes.add_patch(Circle(line[n], hand.tip_radius_mm[f], facecolor=FINGER, edgecolor=INK, linewidth=0.8, alpha=alpha, zorder=4))
        for point in line[:n]:
            axes.add_patch(Circle(point, 1.6, facecolor=PAPER, edgecolor=INK, linewidth=0.7, zorder=4.5))
        outward = line[0] / max(float(np.linalg.norm(line[0])), 1e-9)
        x_mm, y_mm = np.clip(line[0] + outward * 9.0, -SIDE_MM + 5.0, SIDE_MM - 5.0)
        axes.text(x_mm, y_mm, hand.hand.fingers[f].name, fontsize=9, color=INK, ha="center", va="center", style="italic", zorder=6)


def _capsule(a: Array, b: Array, radius_mm: float, alpha: float) -> Polygon:
    along = math.atan2(b[1] - a[1], b[0] - a[0])
    arc = np.linspace(-math.pi / 2.0, math.pi / 2.0, 17)
    head, tail = along + arc, along + math.pi + arc
    outline = np.concatenate(
        [b + radius_mm * np.stack([np.cos(head), np.sin(head)], 1), a + radius_mm * np.stack([np.cos(tail), np.sin(tail)], 1)]
    )
    return Polygon(outline, facecolor=FINGER, edgecolor=INK, linewidth=0.8, alpha=alpha, joinstyle="round", zorder=4)


def _draw_part(axes: Axes, part: Part, pose: Pose2, settles: bool = False, outline_only: bool = False) -> None:
    """The outline, and a stroke from the middle toward the part's own x axis that shows its angle."""
    outline = pose.apply(part.outline_mm)
    if settles or outline_only:
        axes.add_patch(Polygon(outline, fill=False, edgecolor=INK, linewidth=1.3, linestyle=(0, (1.5, 1.5)), zorder=6))
    else:
        axes.add_patch(Polygon(outline, facecolor=PART, edgecolor=INK, linewidth=1.3, alpha=0.72, zorder=5.5))
    mark = pose.apply([[0.0, 0.0], [0.55 * part.circumradius_mm, 0.0]])
    axes.plot(*mark.T, color=INK, linewidth=1.0, zorder=6.5)
    axes.plot(*mark[0], marker="o", color=INK, markersize=2.5, zorder=6.5)


def _draw_route(axes: Axes, out: Escape) -> None:
    """The easiest way out and its pass."""
    if not len(out.route) or out.pass_pose is None:
        return
    axes.plot(out.route[:, 0], out.route[:, 1], color=PAPER, linewidth=3.2, alpha=0.8, zorder=6.6, solid_capstyle="round")
    axes.plot(out.route[:, 0], out.route[:, 1], color=WAY_OUT, linewidth=1.6, zorder=6.7, solid_capstyle="round")
    (x_mm, y_mm), (from_x_mm, from_y_mm) = out.route[-1, :2], out.route[-2, :2]
    arrow = {"arrowstyle": "-|>", "color": WAY_OUT, "lw": 1.6}
    axes.annotate("", xy=(x_mm, y_mm), xytext=(from_x_mm, from_y_mm), arrowprops=arrow, zorder=6.8)
    if out.pass_mj > 0.05:
        axes.plot(out.pass_pose.x_mm, out.pass_pose.y_mm, marker="D", color=WAY_OUT, markeredgecolor=PAPER, markersize=6, zorder=7)
        text = f"pass {out.pass_mj:.0f} mJ" if out.pass_mj >= 10.0 else f"pass {out.pass_mj:.1f} mJ"
        axes.annotate(
            text,
            (out.pass_pose.x_mm, out.pass_pose.y_mm),
            xytext=(9, -13),
            textcoords="offset points",
            fontsize=8,
            color=WAY_OUT,
            zorder=9,
            bbox=_plate(),
        )


def _told_out(out: Escape) -> str:
    if not math.isfinite(out.pass_mj):
        return "way out: none, at any energy the servos can hold"
    if out.pass_mj < 0.05:
        return "way out: free"
    bound = "at least " if out.is_lower_bound else ""
    return f"way out: over a pass of {bound}{out.pass_mj:.1f} mJ, {out.pass_mj - out.start_mj:.1f} mJ above where it lies"


def _place(pose: Pose2) -> str:
    x, y, angle = round(pose.x_mm, 1) + 0.0, round(pose.y_mm, 1) + 0.0, round(math.degrees(pose.yaw_rad)) + 0
    return f"{x:+.1f}, {y:+.1f} mm, {angle:+d}°"


def _plate() -> dict[str, Any]:
    return {"boxstyle": "round,pad=0.15", "facecolor": PAPER, "edgecolor": "none", "alpha": 0.85}
