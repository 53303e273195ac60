"""Calibration files of a rig: where they are, writing them, and a rig with what they say."""

from __future__ import annotations

import datetime
from dataclasses import dataclass
from pathlib import Path

from hw_profiles import calibration
from hw_profiles.calibration import Calibration, ColourCalibration, LensCalibration, PlateCalibration
from hw_profiles.errors import Problem, ProfileError
from hw_profiles.part import Spots
from hw_profiles.rig import Rig

KINDS: dict[str, type[Calibration]] = {"lens": LensCalibration, "plate": PlateCalibration, "colour": ColourCalibration}


@dataclass(frozen=True)
class Calibrated:
    """A rig whose camera is as its calibrations found it.

    colours : taught colours of the rig's part; None: not taught.
    missing : kinds of calibration for which there is no file; the profile's own figures stand in.
    """

    rig: Rig
    colours: ColourCalibration | None
    missing: tuple[str, ...]


def folder_of(rig_name_or_path: str) -> Path:
    """Where a rig's calibrations lie: beside its TOML file; for a shipped rig in the working folder."""
    path = Path(rig_name_or_path).expanduser()
    return path.parent if path.is_file() else Path.cwd()


def file_of(folder: Path, rig: Rig, kind: str) -> Path:
    """The file of one kind of calibration; colours are the part's too."""
    name = f"{rig.name}.{rig.part.name}.colour.json" if kind == "colour" else f"{rig.name}.{kind}.json"
    return folder / name


def kind_of(found: Calibration) -> str:
    """lens, plate or colour."""
    return next(kind for kind, type_ in KINDS.items() if isinstance(found, type_))


def write(folder: Path, rig: Rig, found: Calibration) -> Path:
    """Write a calibration beside the rig, whole or not at all; returns the file. Raises OSError."""
    path = file_of(folder, rig, kind_of(found))
    draft = path.with_suffix(".part")
    draft.write_text(calibration.text_of(found), encoding="utf-8")
    draft.replace(path)
    return path


def calibrated(rig: Rig, folder: Path, today: datetime.date) -> Calibrated:
    """The rig with its calibrations, lens first.

    Raises
    ------
    ProfileError
        A file that cannot be read.
    CalibrationError
        A calibration of another camera, resolution or lens, or one that is too old.
    """
    lens, plate, colours = (_read(folder, rig, kind) for kind in KINDS)
    camera = rig.camera
    if isinstance(lens, LensCalibration):
        camera = calibration.with_lens(camera, lens, today)
    if isinstance(plate, PlateCalibration):
        camera = calibration.with_plate(camera, plate, today)
    if isinstance(colours, ColourCalibration):
        calibration.check(colours, camera, today)
    needed = ("lens", "plate", "colour") if isinstance(rig.part.fiducial, Spots) else ("lens", "plate")
    missing = tuple(kind for kind, found in zip(KINDS, (lens, plate, colours), strict=True) if found is None and kind in needed)
    return Calibrated(rig.model_copy(update={"camera": camera}), colours if isinstance(colours, ColourCalibration) else None, missing)


def _read(folder: Path, rig: Rig, kind: str) -> Calibration | None:
    path = file_of(folder, rig, kind)
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        return None
    except (OSError, UnicodeDecodeError) as error:
        raise ProfileError([Problem(path.name, "", "", f"cannot be read: {error}")]) from error
    return calibration.read(KINDS[kind], text, path.name)
