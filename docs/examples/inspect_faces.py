"""A scripted inspection: the part's scribed face is turned to the reader, step by step, and a picture taken at each.

Run it against `palmloop serve --simulated`:  python docs/examples/inspect_faces.py FOLDER
"""

import asyncio
import csv
import sys
from pathlib import Path

from service.client import AsyncRig, NotReached

FACES_DEG = (0.0, 60.0, 120.0)


async def inspect(rig: AsyncRig, folder: Path) -> list[dict[str, object]]:
    """One row a face: whether it came to the reader, how accurately, how fast, and its picture."""
    folder.mkdir(parents=True, exist_ok=True)
    await rig.arm()
    rows: list[dict[str, object]] = []
    for face_deg in FACES_DEG:
        try:
            found = await rig.go_to(x_mm=0.0, y_mm=0.0, angle_deg=face_deg, tolerance_deg=1.5, timeout_s=40.0)
        except NotReached as problem:
            rows.append({"face_deg": face_deg, "reached": False, "why": str(problem)})
            continue
        picture = folder / f"face-{face_deg:03.0f}.jpg"
        picture.write_bytes(await rig.picture(overlay=False))
        rows.append(
            {"face_deg": face_deg, "reached": True, "off_deg": found.error_deg, "took_s": round(found.took_s, 2), "picture": picture.name}
        )
    with (folder / "faces.csv").open("w", newline="") as file:
        table = csv.DictWriter(file, ["face_deg", "reached", "off_deg", "took_s", "picture", "why"])
        table.writeheader()
        table.writerows(rows)
    return rows


async def main(folder: Path) -> None:
    """Inspect, then relax the hand."""
    async with AsyncRig() as rig:
        for row in await inspect(rig, folder):
            print(row)
        await rig.disarm()


if __name__ == "__main__":
    asyncio.run(main(Path(sys.argv[1] if len(sys.argv) > 1 else "faces")))
