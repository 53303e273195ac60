"""A robot arm sets a part into the hand; the hand carries it round a dial gauge that stands in the way, to where the arm takes it again.

Run it against `palmloop serve --simulated`:  python docs/examples/place_round_gauge.py
"""

import math
import sys

from service.client import PartPose, Reached, Rig, State

GAUGE_MM = (4.0, 2.0)  # where the gauge's foot stands, in the hand frame
CLEAR_MM = 9.0  # how far the part's centre must stay from it
TAKEN_AT = PartPose(14.0, 6.0, 90.0)


def way_round(start: PartPose, end: PartPose) -> list[tuple[float, float]]:
    """Places to pass so that the straight legs between them keep clear of the gauge."""
    dx, dy = end.x_mm - start.x_mm, end.y_mm - start.y_mm
    length = math.hypot(dx, dy)
    if length < 1e-6:
        return []
    along = ((GAUGE_MM[0] - start.x_mm) * dx + (GAUGE_MM[1] - start.y_mm) * dy) / length
    aside = ((GAUGE_MM[0] - start.x_mm) * dy - (GAUGE_MM[1] - start.y_mm) * dx) / length  # positive: the gauge stands to the right
    if not 0.0 < along < length or abs(aside) > CLEAR_MM:
        return []
    out = math.copysign(1.6 * CLEAR_MM - abs(aside), aside)
    return [(start.x_mm + along * dx / length - out * dy / length, start.y_mm + along * dy / length + out * dx / length)]


def place(rig: Rig) -> Reached:
    """Carry the part from wherever the arm has set it to where it is taken."""
    lies_at = rig.arm().pose
    assert lies_at is not None  # `arm` has waited for it
    for x_mm, y_mm in way_round(lies_at, TAKEN_AT):
        rig.go_to(x_mm=x_mm, y_mm=y_mm, tolerance_mm=2.0, hold_s=0.0, progress=told)
    return rig.go_to(x_mm=TAKEN_AT.x_mm, y_mm=TAKEN_AT.y_mm, angle_deg=TAKEN_AT.angle_deg, timeout_s=40.0, progress=told)


def told(now: State) -> None:
    """One line of progress."""
    left = "-" if now.error_mm is None else f"{now.error_mm:.1f} mm"
    print(f"\r{now.phase:<6} {left:>9} to go", end="", file=sys.stderr)


if __name__ == "__main__":
    with Rig() as rig:
        found = place(rig)
        print(f"\nthe arm may take it; off by {found.error_mm or 0.0:.2f} mm, {abs(found.error_deg or 0.0):.1f}°")
