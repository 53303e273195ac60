"""Profiles: every shipped one loads, and bad input is refused with file, key, value and what is allowed."""

import pytest

from hw_profiles import load
from hw_profiles.errors import ProfileError
from hw_profiles.hand import Hand
from hw_profiles.part import Part

TREFOIL = (load.DATA / "hands" / "trefoil.toml").read_text()
ROLLER = (load.DATA / "parts" / "roller-40.toml").read_text()
RIG = (load.DATA / "rigs" / "trefoil.toml").read_text()


@pytest.mark.parametrize("name", load.shipped("rigs"))
@pytest.mark.parametrize("part", load.shipped("parts"))
def test_every_shipped_rig_takes_every_shipped_part(name: str, part: str) -> None:
    rig = load.load_rig(name, part)
    assert rig.part.name == part
    assert len(rig.wires) == rig.hand.n_joints


def refusal(kind: type, text: str) -> str:
    with pytest.raises(ProfileError) as caught:
        load.parse(kind, text, "own.toml")
    return str(caught.value)


@pytest.mark.parametrize(
    ("kind", "text", "old", "new", "wanted"),
    [
        (Hand, TREFOIL, "low_deg = -125.0", "low_dge = -125.0", ["own.toml", "low_dge", "did you mean low_deg", "allowed"]),
        (Hand, TREFOIL, "low_deg = -125.0", "low_deg = inf", ["chains.digit.joints[0].low_deg", "inf"]),
        (Hand, TREFOIL, "low_deg = -125.0", "low_deg = nan", ["chains.digit.joints[0].low_deg", "nan"]),
        (Hand, TREFOIL, "low_deg = -125.0", 'low_deg = "3"', ["chains.digit.joints[0].low_deg", "'3'", "number"]),
        (Hand, TREFOIL, "low_deg = -125.0", "low_deg = 125.0", ["low_deg 125 must be below high_deg 25"]),
        (Hand, TREFOIL, "low_deg = -125.0", "low_deg = -165.0", ["low_deg -165", "servo can reach", "-140 … 40"]),
        (Hand, TREFOIL, 'chain = "digit"', 'chain = "toe"', ["fingers[0].chain 'toe'", "allowed: digit"]),
        (Hand, TREFOIL, "pulse_low_us = 500.0", "pulse_low_us = 2600.0", ["pulse_low_us 2600 must be below pulse_high_us 2500"]),
        (Hand, TREFOIL, "[servos.standard]", "[[[", ["own.toml", "not valid TOML"]),
        (Part, ROLLER, "size_mm = 16.0", "size_mm = 30.0", ["fiducial.size_mm 30", "outline"]),
        (Part, ROLLER, "id = 40", "id = 600", ["fiducial.id", "600", "586"]),
        (Part, ROLLER, "diameter_mm = 40.0", "diameter_mm = -4.0", ["shape.diameter_mm", "-4.0", "greater than 0"]),
    ],
)
def test_bad_profile_is_refused_by_name(kind: type, text: str, old: str, new: str, wanted: list[str]) -> None:
    assert old in text
    message = refusal(kind, text.replace(old, new, 1))
    for words in wanted:
        assert words in message


@pytest.mark.parametrize(
    ("old", "new", "wanted"),
    [
        ("channel = 1\n", "channel = 0\n", ["wiring[1].channel 0", "a.0 and a.1"]),
        ("channel = 1\n", "channel = 16\n", ["wiring[1].channel 16", "0 … 15"]),
        ('part = "roller-40"', 'part = "roler"', ["roler", "shipped parts", "roller-40"]),
    ],
)
def test_bad_rig_is_refused_by_name(tmp_path, old: str, new: str, wanted: list[str]) -> None:
    own = tmp_path / "own.toml"
    own.write_text(RIG.replace(old, new, 1))
    with pytest.raises(ProfileError) as caught:
        load.load_rig(str(own))
    for words in wanted:
        assert words in str(caught.value)


def test_unknown_rig_lists_the_shipped_ones() -> None:
    with pytest.raises(ProfileError, match="duo, polar, quad, trefoil"):
        load.load_rig("nope")
