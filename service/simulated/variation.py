"""What the simulated world does unlike its profile, for the controller to cope with."""

from __future__ import annotations

import difflib

from pydantic import Field, ValidationError

from hw_profiles.base import NonNegative, Positive, Profile
from hw_profiles.errors import Problem, ProfileError


class Variation(Profile):
    """Differences between the world and the profile that the controller goes by; the controller does not see them."""

    friction: Positive = Field(default=1.0, le=5.0, description="factor on the friction between part and fingers")
    plate_friction: NonNegative = Field(default=1.0, le=5.0, description="factor on the friction between part and plate")
    link_scale: Positive = Field(default=1.0, ge=0.5, le=1.5, description="factor on every link's length")
    link_spread: NonNegative = Field(default=0.0, le=0.3, description="each link's own factor is drawn from 1 ± this")
    servo_offset_deg: NonNegative = Field(default=0.0, le=20.0, description="each horn is turned by up to this, drawn by the seed")
    servo_weak: Positive = Field(default=1.0, le=1.0, description="factor on the torque and stiffness of one servo, drawn by the seed")
    dead_band_us: NonNegative | None = Field(default=None, le=50.0, description="dead band of every servo, instead of the profile's")
    latency_ms: NonNegative | None = Field(default=None, le=1000.0, description="of the camera, instead of the profile's")
    noise: NonNegative = Field(default=1.0, le=20.0, description="factor on the camera's noise")
    occlusion: float = Field(default=0.0, ge=0.0, lt=1.0, description="share of the tag that something covers")
    dropout: float = Field(default=0.0, ge=0.0, lt=1.0, description="share of the frames that never arrive")
    shake_mm: NonNegative = Field(default=0.0, le=50.0, description="amplitude of a shaken bench")
    shake_hz: NonNegative = Field(default=0.0, le=10.0, description="frequency of a shaken bench")
    softness: NonNegative = Field(default=0.0, le=2.0, description="give of the part's skin [mm/N]")

    @classmethod
    def parse(cls, settings: list[str]) -> Variation:
        """From NAME=VALUE texts.

        Raises
        ------
        ProfileError
            A name that is not known, or a value that is no number or not allowed.
        """
        values: dict[str, float] = {}
        for setting in settings:
            name, equals, text = setting.partition("=")
            if name not in cls.model_fields:
                near = difflib.get_close_matches(name, cls.model_fields, n=1)
                hint = f"did you mean {near[0]}? " if near else ""
                raise ProfileError([Problem("--vary", name, "", f"{hint}allowed: {', '.join(cls.model_fields)}")])
            try:
                values[name] = float(text)
            except ValueError as error:
                raise ProfileError([Problem("--vary", name, repr(text if equals else ""), "allowed: a number")]) from error
        try:
            return cls.model_validate(values)
        except ValidationError as error:
            problems = [Problem("--vary", str(d["loc"][0]), f"{d['input']:g}", d["msg"]) for d in error.errors(include_url=False)]
            raise ProfileError(problems) from error
