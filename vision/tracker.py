"""The tracker: frames in, observations out; the same frames always give the same observations."""

from __future__ import annotations

from hw_profiles.calibration import ColourCalibration
from hw_profiles.camera import Camera
from hw_profiles.observation import NoPose, Observation
from hw_profiles.part import Part, Spots
from vision.camera_model import model_of
from vision.edge_checks import Quality
from vision.fiducial import Finder
from vision.frames import Frame
from vision.spot_track import SpotTrack
from vision.tag_track import TagTrack


class Tracker:
    """Watches one part or several; `observe` reports the first."""

    def __init__(self, camera: Camera, parts: tuple[Part, ...] | Part, taught: ColourCalibration | None = None) -> None:
        """Parts with a tag or with coloured spots; `taught` are the colours of the part it names."""
        self.camera = camera
        self.parts = (parts,) if isinstance(parts, Part) else parts
        model = model_of(camera)
        self._tracks: list[TagTrack | SpotTrack] = []
        for part in self.parts:
            if isinstance(part.fiducial, Spots):
                colours = taught if taught is not None and taught.part == part.name else None
                self._tracks.append(SpotTrack(model, part, part.fiducial, colours))
            else:
                self._tracks.append(TagTrack(model, part, part.fiducial))
        self._tagged = [index for index, track in enumerate(self._tracks) if isinstance(track, TagTrack)]
        self._finder = Finder(model, tuple(self.parts[index] for index in self._tagged)) if self._tagged else None

    @property
    def qualities(self) -> tuple[Quality | None, ...]:
        """How well each part's tag was seen in the last frame; None where nothing was fitted."""
        return tuple(track.quality for track in self._tracks)

    def observe(self, frame: Frame) -> Observation:
        """What one frame shows of the first part."""
        return self.observe_all(frame)[0]

    def observe_all(self, frame: Frame) -> tuple[Observation, ...]:
        """What one frame shows of every part, in their order.

        Raises
        ------
        ValueError
            A frame of another size than the camera's.
        """
        if frame.pixels.shape[:2] != (self.camera.height_px, self.camera.width_px):
            shown = f"{frame.pixels.shape[1]} × {frame.pixels.shape[0]}"
            wanted = f"{self.camera.width_px} × {self.camera.height_px}"
            raise ValueError(f"frame of {shown} px; camera '{self.camera.name}' gives {wanted}")
        sights = [track.follow(frame) for track in self._tracks]
        lost = [index for index in self._tagged if isinstance(sights[index], NoPose)]
        if self._finder is not None and lost:
            for sighting in self._finder.find(frame.pixels):
                index = self._tagged[sighting.part_index]
                track = self._tracks[index]
                if index in lost and isinstance(track, TagTrack):
                    sights[index] = track.restart(frame, sighting)
        return tuple(Observation(frame.captured_at_us, sight) for sight in sights)
