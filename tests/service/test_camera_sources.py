"""Every camera source keeps the same contract; the webcam also survives being pulled."""

import queue
from collections.abc import Callable, Iterator
from itertools import pairwise
from pathlib import Path

import cv2
import numpy as np
import pytest

from hw_profiles.errors import DeviceEnded, DeviceError, DeviceTimeout
from hw_profiles.load import load_rig
from service import sources
from service.devices import webcam
from service.devices.pictures_on_disk import PictureFolder, VideoFile
from service.devices.webcam import Webcam
from service.ports import Camera
from service.simulated.tour import Tour
from vision.frames import Pixels

RIG = load_rig("trefoil")
PROFILE = RIG.camera.model_copy(
    update={"width_px": 320, "height_px": 180, "focal_px": (262.5, 262.5), "principal_px": (160.0, 89.0), "fps": 25.0, "exposure_ms": 4.0}
)
N_FRAMES = 6


class StepClock:
    """A clock that a test moves."""

    def __init__(self) -> None:
        self.us = 1_000_000

    def now_us(self) -> int:
        return self.us


class FakeCapture:
    """A V4L2 device as OpenCV shows it: plays pictures that a test puts in; None pulls the plug."""

    def __init__(self, clock: StepClock, size: tuple[int, int] = (320, 180), stamped: bool = True) -> None:
        self.pictures: queue.Queue[Pixels | None] = queue.Queue()
        self.clock, self.stamped, self.released, self.is_there = clock, stamped, False, True
        self.settings = {cv2.CAP_PROP_FRAME_WIDTH: size[0], cv2.CAP_PROP_FRAME_HEIGHT: size[1]}
        self.lag_us = 7_000

    def isOpened(self) -> bool:  # noqa: N802
        return self.is_there

    def read(self) -> tuple[bool, Pixels | None]:
        try:
            picture = self.pictures.get(timeout=0.02)
        except queue.Empty:
            return True, np.zeros((180, 320, 3), np.uint8)
        return picture is not None, picture

    def get(self, key: int, /) -> float:
        if key == cv2.CAP_PROP_POS_MSEC:
            return (self.clock.us - self.lag_us) * 1e-3 if self.stamped else 0.0
        return float(self.settings.get(key, 0.0))

    def set(self, key: int, value: float, /) -> bool:
        if key not in (cv2.CAP_PROP_FRAME_WIDTH, cv2.CAP_PROP_FRAME_HEIGHT, cv2.CAP_PROP_EXPOSURE):
            self.settings[key] = value  # type: ignore[assignment]
        return True

    def release(self) -> None:
        self.released = True


def tour(folder: Path) -> Camera:
    return Tour(RIG.model_copy(update={"camera": PROFILE}), N_FRAMES, 0)


def pictures(folder: Path) -> Camera:
    for index in range(N_FRAMES):
        cv2.imwrite(str(folder / f"{index:03d}.png"), np.full((180, 320, 3), 10 * index, np.uint8))
    return PictureFolder(PROFILE, folder)


def video(folder: Path) -> Camera:
    path = folder / "run.avi"
    writer = cv2.VideoWriter(str(path), cv2.VideoWriter.fourcc(*"MJPG"), 25.0, (320, 180))
    for index in range(N_FRAMES):
        writer.write(np.full((180, 320, 3), 10 * index, np.uint8))
    writer.release()
    return VideoFile(PROFILE, path)


def live(folder: Path) -> Camera:
    clock = TickingClock()
    return Webcam(PROFILE, "/dev/video7", clock, lambda _: FakeCapture(clock))


class TickingClock(StepClock):
    """A clock that goes on by a frame each time it is read."""

    def now_us(self) -> int:
        self.us += 40_000
        return self.us


@pytest.fixture(params=[tour, pictures, video, live])
def camera(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Camera]:
    source: Callable[[Path], Camera] = request.param
    found = source(tmp_path)
    yield found
    found.close()


class TestContract:
    def test_frames_have_the_profile_s_size_and_format_and_rising_times(self, camera: Camera) -> None:
        frames = [camera.read(2.0) for _ in range(N_FRAMES)]
        assert all(frame.pixels.shape == (180, 320, 3) and frame.pixels.dtype == np.uint8 for frame in frames)
        times = [frame.captured_at_us for frame in frames]
        assert all(later > earlier for earlier, later in pairwise(times))
        assert all(isinstance(at_us, int) for at_us in times)

    def test_a_closed_camera_gives_a_device_error(self, camera: Camera) -> None:
        camera.read(2.0)
        camera.close()
        with pytest.raises(DeviceError):
            camera.read(0.1)


@pytest.mark.parametrize("source", [tour, pictures, video])
def test_a_source_with_an_end_says_so(source: Callable[[Path], Camera], tmp_path: Path) -> None:
    camera = source(tmp_path)
    for _ in range(N_FRAMES):
        camera.read(1.0)
    with pytest.raises(DeviceEnded, match=f"has ended after {N_FRAMES}"):
        camera.read(1.0)
    camera.close()


def test_times_of_a_video_are_those_of_its_file(tmp_path: Path) -> None:
    camera = video(tmp_path)
    times = [camera.read(1.0).captured_at_us for _ in range(N_FRAMES)]
    np.testing.assert_allclose(np.diff(times), 40_000, atol=1_000)
    camera.close()


def test_a_mono_profile_gets_mono_frames(tmp_path: Path) -> None:
    pictures(tmp_path)
    camera = PictureFolder(PROFILE.model_copy(update={"pixel_format": "mono8"}), tmp_path)
    assert camera.read(1.0).pixels.shape == (180, 320)


def test_pictures_of_another_size_are_refused_by_name(tmp_path: Path) -> None:
    cv2.imwrite(str(tmp_path / "a.png"), np.zeros((100, 100, 3), np.uint8))
    with pytest.raises(DeviceError, match=r"a\.png gives pictures of 100 × 100 px, camera 'overhead-720p' says 320 × 180"):
        PictureFolder(PROFILE, tmp_path).read(1.0)


@pytest.mark.parametrize("stamped", [True, False])
def test_webcam_times_are_the_middle_of_the_exposure(stamped: bool) -> None:
    clock = StepClock()
    capture = FakeCapture(clock, stamped=stamped)
    camera = Webcam(PROFILE, "/dev/video7", clock, lambda _: capture)
    assert camera.read(2.0).captured_at_us == clock.us - round(PROFILE.latency_ms * 1e3)
    camera.close()
    assert capture.released


def test_a_late_thread_does_not_shift_the_time_of_a_stamped_frame() -> None:
    clock = StepClock()
    capture = FakeCapture(clock)
    camera = Webcam(PROFILE, "/dev/video7", clock, lambda _: capture)
    camera.close()  # its thread is gone; the reckoning is asked directly
    for _ in range(20):
        camera._exposed_us(capture, clock.us)
    capture.lag_us += 30_000  # the thread woke 30 ms late
    assert camera._exposed_us(capture, clock.us) == clock.us - 30_000 - round(PROFILE.latency_ms * 1e3)


def test_a_pulled_webcam_comes_back(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(webcam, "RETRY_S", 0.01)
    clock, opened = TickingClock(), []

    def opener(_: str) -> FakeCapture:
        capture = FakeCapture(clock)
        capture.is_there = len(opened) != 1  # the first try to come back fails
        opened.append(capture)
        return capture

    camera = Webcam(PROFILE, "/dev/video7", clock, opener)
    camera.read(2.0)
    opened[0].pictures.put(None)
    bright = np.full((180, 320, 3), 200, np.uint8)
    for _ in range(400):
        try:
            frame = camera.read(0.05)
        except DeviceTimeout:
            continue
        if len(opened) == 3:
            opened[2].pictures.put(bright)
            if frame.pixels[0, 0, 0] == 200:
                break
    else:
        pytest.fail("the camera did not come back")
    assert opened[0].released
    assert opened[1].released
    camera.close()


def test_a_webcam_that_gives_no_frames_times_out_and_settings_refused_are_named() -> None:
    clock = StepClock()
    capture = FakeCapture(clock)
    camera = Webcam(PROFILE, "/dev/video7", clock, lambda _: capture)
    assert camera.refused == ("exposure time",)
    camera.close()
    capture.pictures.put(None)


def test_a_webcam_of_another_resolution_or_missing_is_refused() -> None:
    clock = StepClock()
    with pytest.raises(DeviceError, match="gives 640 × 480 px, camera 'overhead-720p' says 320 × 180"):
        Webcam(PROFILE, "/dev/video7", clock, lambda _: FakeCapture(clock, (640, 480)))
    absent = FakeCapture(clock)
    absent.is_there = False
    with pytest.raises(DeviceError, match=r"/dev/video7 cannot be opened"):
        Webcam(PROFILE, "/dev/video7", clock, lambda _: absent)


def test_sources_are_told_apart_and_nonsense_is_refused(tmp_path: Path) -> None:
    rig = RIG.model_copy(update={"camera": PROFILE})
    pictures(tmp_path)
    assert isinstance(sources.open_source(str(tmp_path), rig, 1, 0), PictureFolder)
    assert isinstance(sources.open_source("simulated", rig, 1, 0), Tour)
    with pytest.raises(DeviceError, match="no such thing; allowed: a camera device"):
        sources.open_source("nowhere", rig, 1, 0)
    (tmp_path / "no.mp4").write_text("x")
    with pytest.raises(DeviceError, match="no video that can be read"):
        sources.open_source(str(tmp_path / "no.mp4"), rig, 1, 0)
    (tmp_path / "empty").mkdir()
    with pytest.raises(DeviceError, match="no pictures in it"):
        sources.open_source(str(tmp_path / "empty"), rig, 1, 0)
