"""What calibration finds out about one camera on one bench, and when it may be used.

A calibration is a file of its own beside the rig's profile: what it says, how well it fits, what it was made from and when. It
belongs to one camera at one resolution; the plate's belongs also to the lens it was made with. One that does not belong, or is too
old, is refused by name: a wrong calibration is worse than none.
"""

from __future__ import annotations

import datetime
from typing import Annotated, Literal, TypeVar

from pydantic import Field, StringConstraints

from hw_profiles.base import Name, NonNegative, Positive, Profile
from hw_profiles.camera import Camera, Mount
from hw_profiles.errors import CalibrationError
from hw_profiles.load import parse_json

Day = Annotated[str, StringConstraints(pattern=r"^\d{4}-\d{2}-\d{2}$")]
Chroma = tuple[float, float]
DEFAULT_MAX_AGE_DAYS = 365


class Calibration(Profile):
    """What every calibration says of itself."""

    made_on: Day
    made_from: str = Field(description="board, marks or frames it was made from")
    camera: Name
    width_px: int
    height_px: int


class LensCalibration(Calibration):
    """Intrinsics and distortion."""

    kind: Literal["lens"] = "lens"
    focal_px: tuple[Positive, Positive]
    principal_px: tuple[float, float]
    distortion: tuple[float, float, float, float, float]
    rms_px: NonNegative = Field(description="root mean square reprojection error over all views")
    view_rms_px: tuple[float, ...]
    rejected_views: tuple[str, ...] = ()


class PlateCalibration(Calibration):
    """Where the camera hangs over the plate."""

    kind: Literal["plate"] = "plate"
    focal_px: tuple[Positive, Positive] = Field(description="of the lens it was made with")
    mount: Mount
    rms_mm: NonNegative = Field(description="root mean square distance on the plate between marks and where the camera sees them")
    residuals_mm: tuple[float, ...]


class ColourCalibration(Calibration):
    """What the spots of a part look like to this camera.

    A chroma is (r, g) of a pixel divided channel by channel by the plate's colour, r + g + b = 1: light and white balance cancel.
    """

    kind: Literal["colour"] = "colour"
    part: Name
    first_chroma: Chroma
    second_chroma: Chroma
    spread: NonNegative = Field(description="largest root mean square distance of a spot's pixels from its chroma")
    n_frames: int = Field(ge=1)


C = TypeVar("C", bound=Calibration)


def read(kind: type[C], text: str, file: str) -> C:
    """A calibration from the text of its file. Raises ProfileError naming file, key and value."""
    return parse_json(kind, text, file)


def text_of(calibration: Calibration) -> str:
    """The text of a calibration's file."""
    return calibration.model_dump_json(indent=2) + "\n"


def check(calibration: Calibration, camera: Camera, today: datetime.date, max_age_days: int = DEFAULT_MAX_AGE_DAYS) -> None:
    """Raise CalibrationError where a calibration does not belong to this camera or is too old."""
    name = f"{type(calibration).__name__} of {calibration.made_on}"
    if calibration.camera != camera.name:
        raise CalibrationError(f"{name} was made for camera '{calibration.camera}', this one is '{camera.name}': calibrate it")
    if (calibration.width_px, calibration.height_px) != (camera.width_px, camera.height_px):
        made, now = f"{calibration.width_px} × {calibration.height_px}", f"{camera.width_px} × {camera.height_px}"
        raise CalibrationError(f"{name} was made at {made} px, camera '{camera.name}' runs at {now}: calibrate again at {now}")
    age = (today - datetime.date.fromisoformat(calibration.made_on)).days
    if age > max_age_days:
        raise CalibrationError(f"{name} is {age} days old, allowed: {max_age_days}: calibrate again")
    if age < 0:
        raise CalibrationError(f"{name} lies in the future, today is {today.isoformat()}: check the clock")


def with_lens(camera: Camera, lens: LensCalibration, today: datetime.date, max_age_days: int = DEFAULT_MAX_AGE_DAYS) -> Camera:
    """The camera with calibrated intrinsics. Raises CalibrationError (see `check`)."""
    check(lens, camera, today, max_age_days)
    found = {"focal_px": lens.focal_px, "principal_px": lens.principal_px, "distortion": lens.distortion}
    return Camera.model_validate(camera.model_dump() | found)


def with_plate(camera: Camera, plate: PlateCalibration, today: datetime.date, max_age_days: int = DEFAULT_MAX_AGE_DAYS) -> Camera:
    """The camera where the plate calibration found it. Raises CalibrationError, also where the lens has changed since."""
    check(plate, camera, today, max_age_days)
    change = max(abs(made / now - 1.0) for made, now in zip(plate.focal_px, camera.focal_px, strict=True))
    if change > 1e-4:
        raise CalibrationError(
            f"PlateCalibration of {plate.made_on} was made with focal length {plate.focal_px[0]:.1f} px, "
            f"camera '{camera.name}' has {camera.focal_px[0]:.1f}: calibrate the plate again"
        )
    return Camera.model_validate(camera.model_dump() | {"mount": plate.mount.model_dump()})
