"""The planar world of a rig as a MuJoCo model: fingers of capsules on servo joints, a part that slides on the plate."""

from __future__ import annotations

import math
from xml.sax.saxutils import quoteattr

import numpy as np

from control.model.kinematics import HandModel
from hw_profiles import geometry
from hw_profiles.geometry import Array
from hw_profiles.part import Disc, Part

MM = 1e-3
LINK_DENSITY = 1200.0  # kg/m³, a printed link
HORN_INERTIA = 4e-4  # kg·m², rotor and gears seen at the horn
THICKNESS_M = 0.012
SOLVER = 'integrator="implicitfast" solver="Newton" cone="elliptic" impratio="10"'
FIRST_FINGER_BIT = 2  # contact bit 1 is the part's


def world_xml(hand: HandModel, part: Part, timestep_s: float, friction: float, softness_mm_per_n: float) -> str:
    """MJCF text. Joints j0 … jn in joint order, then part_x, part_y, part_yaw; x, y [m], angles [rad].

    Gravity is off: weight acts through the plate friction that `World` applies. Contact settings as tuned for stiff small parts.
    """
    compliance = f' solref="{0.004 + 0.02 * softness_mm_per_n:.4f} 1" solimp=".95 .99 {0.0005 + 0.001 * softness_mm_per_n:.5f}"'
    parts = [
        f'<mujoco><option timestep="{timestep_s}" gravity="0 0 0" {SOLVER}/>',
        f'<default><geom friction="{friction:.4f} 0 0" condim="3"{compliance}/></default>',
        f"<asset>{_meshes(part)}</asset><worldbody>",
        *(_finger(hand, finger) for finger in range(hand.n_fingers)),
        _part(part),
        "</worldbody></mujoco>",
    ]
    return "".join(parts)


def _finger(hand: HandModel, finger: int) -> str:
    """Nested bodies from the base outward; a finger's own links do not touch each other."""
    own = hand.joints_of(finger)
    bit = FIRST_FINGER_BIT << finger
    others = 1 | (sum(FIRST_FINGER_BIT << f for f in range(hand.n_fingers)) & ~bit)
    collides = f'contype="{bit}" conaffinity="{others}"'
    x_m, y_m = hand.base_mm[finger] * MM
    text, closing, reach_m = "", "", 0.0
    for k in range(own.start, own.stop):
        place = f'pos="{x_m:.6f} {y_m:.6f} 0"' if k == own.start else f'pos="{reach_m:.6f} 0 0"'
        turn = f' euler="0 0 {math.degrees(hand.base_yaw_rad[finger]):.6f}"' if k == own.start else ""
        text += f"<body {place}{turn}>"
        closing += "</body>"
        radius_m = hand.link_radius_mm[k] * MM
        if hand.is_slide[k]:
            text += f'<joint name="j{k}" type="slide" axis="1 0 0"/>'
            back_m = hand.high[k] * MM  # the slide reaches back through its pinion
            text += f'<geom type="capsule" fromto="{-back_m:.6f} 0 0 0 0 0" size="{radius_m:.6f}" density="{LINK_DENSITY}" {collides}/>'
            reach_m = 0.0
        else:
            text += f'<joint name="j{k}" type="hinge" axis="0 0 1"/>'
            reach_m = hand.link_mm[k] * MM
            if reach_m > 0.0:
                text += f'<geom type="capsule" fromto="0 0 0 {reach_m:.6f} 0 0" size="{radius_m:.6f}" density="{LINK_DENSITY}" {collides}/>'
            else:
                text += '<inertial pos="0 0 0" mass="0.02" diaginertia="1e-5 1e-5 1e-5"/>'
    tip_m = hand.tip_radius_mm[finger] * MM
    text += f'<geom type="cylinder" pos="{reach_m:.6f} 0 0" size="{tip_m:.6f} {THICKNESS_M}" density="{LINK_DENSITY}" {collides}/>'
    return text + closing


def _part(part: Part) -> str:
    mass_kg, inertia = part.mass_g * 1e-3, part.inertia_gmm2 * 1e-9
    middle = np.zeros(2) if isinstance(part.shape, Disc) else geometry.centroid(part.outline_mm) * MM
    joints = "".join(
        f'<joint name="part_{name}" type="{kind}" axis="{axis}"/>'
        for name, kind, axis in (("x", "slide", "1 0 0"), ("y", "slide", "0 1 0"), ("yaw", "hinge", "0 0 1"))
    )
    inertial = (
        f'<inertial pos="{middle[0]:.6f} {middle[1]:.6f} 0" mass="{mass_kg:.6f}" diaginertia="{inertia:.4g} {inertia:.4g} {inertia:.4g}"/>'
    )
    collides = 'contype="1" conaffinity="1022"'
    if isinstance(part.shape, Disc):
        geoms = f'<geom type="cylinder" size="{part.circumradius_mm * MM:.6f} {THICKNESS_M}" {collides}/>'
    else:
        geoms = "".join(f'<geom type="mesh" mesh="piece{k}" {collides}/>' for k in range(len(convex_pieces(np.array(part.outline_mm)))))
    return f'<body name="part">{inertial}{joints}{geoms}</body>'


def _meshes(part: Part) -> str:
    if isinstance(part.shape, Disc):
        return ""
    text = ""
    for k, piece in enumerate(convex_pieces(np.array(part.outline_mm))):
        corners = " ".join(f"{x * MM:.6f} {y * MM:.6f} {z}" for z in (-THICKNESS_M, THICKNESS_M) for x, y in piece)
        text += f"<mesh name={quoteattr(f'piece{k}')} vertex={quoteattr(corners)}/>"
    return text


def convex_pieces(outline_mm: Array) -> list[Array]:
    """A simple polygon as convex pieces: ears cut off (Meisters 1975), then joined again while they stay convex."""
    if geometry.is_convex(outline_mm):
        return [outline_mm]
    pieces = [np.array(ear) for ear in _ears([tuple(p) for p in outline_mm])]
    joined = True
    while joined:
        joined = False
        for i in range(len(pieces)):
            for j in range(i + 1, len(pieces)):
                union = geometry.convex_hull(np.concatenate([pieces[i], pieces[j]]))
                areas = geometry.signed_area(pieces[i]) + geometry.signed_area(pieces[j])
                if abs(geometry.signed_area(union) - areas) < 1e-6 * areas:
                    pieces[i] = union
                    del pieces[j]
                    joined = True
                    break
            if joined:
                break
    return pieces


def _ears(corners: list[tuple[float, ...]]) -> list[list[tuple[float, ...]]]:
    triangles = []
    corners = list(corners)
    while len(corners) > 3:
        for k in range(len(corners)):
            a, b, c = corners[k - 1], corners[k], corners[(k + 1) % len(corners)]
            triangle = np.array([a, b, c])
            others = np.array([p for p in corners if p not in (a, b, c)])
            if geometry.signed_area(triangle) > 1e-9 and not geometry.contains(triangle, others).any():
                triangles.append([a, b, c])
                del corners[k]
                break
        else:
            break  # what is left has no area
    return [*triangles, corners]
