"""A shift of goals that survives a fault: what was stopped or has faulted is reset, armed and tried once more; what cannot be held is left.

Run it against `palmloop serve --simulated`, and press stop on the page while it runs:  python docs/examples/keep_going.py
"""

from collections import Counter

from service.client import HandFault, NotReached, PartPose, Rig

SHIFT = [PartPose(10.0, 0.0, 0.0), PartPose(-8.0, 8.0, 30.0), PartPose(0.0, -10.0, -20.0), PartPose(95.0, 0.0, 0.0)]
TRIES = 2


def work(rig: Rig, goals: list[PartPose]) -> Counter[str]:
    """How many goals were reached at once, at the second try, and not at all."""
    counts: Counter[str] = Counter()
    rig.arm()
    for goal in goals:
        counts[pursue(rig, goal)] += 1
    return counts


def pursue(rig: Rig, goal: PartPose) -> str:
    """One goal, tried again after a fault."""
    for attempt in range(TRIES):
        try:
            rig.go_to(x_mm=goal.x_mm, y_mm=goal.y_mm, angle_deg=goal.angle_deg)
        except HandFault as fault:
            print(f"  {fault}")
            rig.arm()  # resets first; only a script that may do so by itself should
        except NotReached as problem:
            print(f"  {problem}")
            return problem.outcome
        else:
            return "reached" if attempt == 0 else "reached at the second try"
    return "given up"


if __name__ == "__main__":
    with Rig() as rig:
        print(dict(work(rig, SHIFT)))
        rig.disarm()
