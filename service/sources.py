"""What a SOURCE on the command line means: a camera device, a video, a folder of pictures, or the simulated camera."""

from __future__ import annotations

from pathlib import Path

from hw_profiles.errors import DeviceError
from hw_profiles.rig import Rig
from service.devices.clock import MonotonicClock
from service.devices.pictures_on_disk import PictureFolder, VideoFile
from service.devices.webcam import Webcam
from service.ports import Camera
from service.simulated.tour import Tour

SIMULATED = "simulated"
MEANINGS = f"a camera device such as /dev/video0, a video file, a folder of pictures, or '{SIMULATED}'"


def open_source(source: str, rig: Rig, n_frames: int, seed: int) -> Camera:
    """The camera that SOURCE names. Raises DeviceError where there is none."""
    path = Path(source).expanduser()
    if source == SIMULATED:
        return Tour(rig, n_frames, seed)
    if path.is_dir():
        return PictureFolder(rig.camera, path)
    if path.is_file():
        return VideoFile(rig.camera, path)
    if path.is_char_device() or source.startswith("/dev/"):
        return Webcam(rig.camera, source, MonotonicClock())
    raise DeviceError(f"source '{source}': no such thing; allowed: {MEANINGS}")
