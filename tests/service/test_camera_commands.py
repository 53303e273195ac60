"""`palmloop calibrate …` and `palmloop track` from the command line, on pictures made here."""

import json
import math
from pathlib import Path

import cv2
import numpy as np
import pytest
import typer
from scipy.spatial.transform import Rotation
from typer.testing import CliRunner, Result

from hw_profiles.errors import PalmloopError
from hw_profiles.load import DATA, load_camera, load_rig
from service import commands_vision, sources
from vision.calibrate import Board
from vision.camera_model import model_of

CAMERA, BOARD, PER_MM = load_camera("overhead-720p"), Board(), 6
SPOTTED = """
name = "spotted"
height_mm = 20.0
mass_g = 68.0
shape = { kind = "disc", diameter_mm = 40.0 }
fiducial = { family = "two-spots", spot_mm = 8.0, spacing_mm = 15.0, first_rgb = [205, 40, 50], second_rgb = [30, 90, 200] }
"""

app = typer.Typer()
app.add_typer(commands_vision.calibrate, name="calibrate")
app.command("track")(commands_vision.track)


@pytest.fixture(autouse=True)
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Commands write beside the rig; for a shipped rig that is the working folder."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


def run(*words: str) -> Result:
    return CliRunner().invoke(app, words)


def refused(*words: str) -> str:
    result = run(*words)
    assert isinstance(result.exception, PalmloopError), result.output
    return str(result.exception)


@pytest.fixture(scope="session")
def board_print() -> np.ndarray:
    drawn = BOARD.layout().generateImage((round(BOARD.size_mm[0] * PER_MM), round(BOARD.size_mm[1] * PER_MM)))
    return np.asarray(cv2.GaussianBlur(drawn, (0, 0), 1.4))


@pytest.fixture(scope="session")
def ideal() -> np.ndarray:
    v, u = np.mgrid[: CAMERA.height_px, : CAMERA.width_px].astype(float)
    return model_of(CAMERA).undistort(np.stack([u, v], axis=-1))


def seen_through(lens_from_board: np.ndarray, board_print: np.ndarray, ideal: np.ndarray) -> np.ndarray:
    """The board through the camera's lens; lens_from_board: homography from board millimetres to ideal pinhole coordinates."""
    board_from_lens = np.linalg.inv(lens_from_board)
    on_board = ideal @ board_from_lens[:, :2].T + board_from_lens[:, 2]
    at = (on_board[..., :2] / on_board[..., 2:] * PER_MM - 0.5).astype(np.float32)
    return np.asarray(cv2.remap(board_print, at[..., 0], at[..., 1], cv2.INTER_LINEAR, borderValue=130))


def test_track_of_the_simulated_camera_prints_one_json_object_and_writes_its_files(folder: Path) -> None:
    result = run("track", "simulated", "--frames", "12", "--json", "--video", "out.mp4", "--table", "out.csv", "--plot", "out.png")
    assert result.exit_code == 0
    found = json.loads(result.stdout)
    assert (found["frames"], found["poses"], found["part"]) == (12, 12, "roller-40")
    assert found["not_calibrated"] == ["lens", "plate"]
    assert found["x_mm"]["first"] == pytest.approx(12.0, abs=0.02)
    assert found["step_noise"]["x_mm"] < 0.01
    assert abs(found["height_off_mm"]) < 0.2
    rows = (folder / "out.csv").read_text().splitlines()
    assert rows[0] == "time_s,x_mm,y_mm,yaw_deg"
    assert len(rows) == 13
    assert cv2.imread(str(folder / "out.png")) is not None
    video = cv2.VideoCapture(str(folder / "out.mp4"))  # noqa: TID251
    assert video.get(cv2.CAP_PROP_FRAME_COUNT) == 12
    video.release()


def test_track_prints_a_table_for_people() -> None:
    result = run("track", "simulated", "--frames", "10")
    assert result.exit_code == 0
    assert "10 poses in 10 frames" in result.stdout
    assert "noise of a single pose" in result.stdout


def test_track_says_when_the_part_is_higher_than_its_profile(folder: Path) -> None:
    tour = sources.open_source("simulated", load_rig("trefoil"), 4, 0)
    for index in range(4):
        cv2.imwrite(str(folder / f"{index}.png"), tour.read(1.0).pixels)
    tour.close()
    profile = (DATA / "parts" / "roller-40.toml").read_text().replace("height_mm = 20.0", "height_mm = 18.5")
    (folder / "low.toml").write_text(profile)
    words = " ".join(run("track", str(folder), "--part", "low.toml").stdout.split())
    assert "stands 1.4 mm higher, or larger, than its profile says" in words or "stands 1.5 mm higher" in words


def test_track_without_a_part_in_view_falls_short_and_says_why(folder: Path) -> None:
    for index in range(2):
        cv2.imwrite(str(folder / f"{index}.png"), np.full((720, 1280, 3), 90, np.uint8))
    result = run("track", str(folder))
    assert result.exit_code == 1
    assert "2 frames without a pose: tag 40 is not in view" in " ".join(result.stdout.split())


def test_camera_and_plate_are_calibrated_from_pictures_and_track_uses_them(
    folder: Path, board_print: np.ndarray, ideal: np.ndarray
) -> None:
    rng, views = np.random.default_rng(3), folder / "views"
    views.mkdir()
    for index in range(14):
        turn = Rotation.from_euler("xyz", [*rng.uniform(-35, 35, 2), rng.uniform(-20, 20)], degrees=True).as_matrix()
        shift = np.array([rng.uniform(-200, -20), rng.uniform(-140, -10), rng.uniform(330, 450)])
        picture = seen_through(np.stack([turn[:, 0], turn[:, 1], shift], axis=1), board_print, ideal)
        cv2.imwrite(str(views / f"{index:02d}.png"), picture)
    lens = json.loads(run("calibrate", "camera", str(views), "--json").stdout)
    assert np.abs(np.array(lens["focal_px"]) / 1050.0 - 1).max() < 1e-3
    assert (folder / "trefoil.lens.json").is_file()

    plate = folder / "plate"
    plate.mkdir()
    width, height = BOARD.size_mm
    hand_from_board = np.array([[1.0, 0.0, -width / 2], [0.0, -1.0, height / 2], [0.0, 0.0, 1.0]])
    picture = seen_through(model_of(CAMERA).pinhole_from_plane(0.0) @ hand_from_board, board_print, ideal)
    cv2.imwrite(str(plate / "board.png"), picture)
    found = json.loads(run("calibrate", "plate", str(plate), "--json").stdout)
    np.testing.assert_allclose(found["mount"]["eye_mm"], CAMERA.mount.eye_mm, atol=0.5)
    tracked = json.loads(run("track", "simulated", "--frames", "2", "--json").stdout)
    assert tracked["not_calibrated"] == []


def test_plate_from_four_marks_typed_in(folder: Path) -> None:
    marks = np.array([[-90.0, -60.0], [90.0, -60.0], [90.0, 60.0], [-90.0, 60.0]])
    px = model_of(CAMERA).project_plane(marks, 0.0)
    words = [word for (x, y), (u, v) in zip(marks, px, strict=True) for word in ("--mark", f"{x},{y}={u:.2f},{v:.2f}")]
    found = json.loads(run("calibrate", "plate", "marks", *words, "--json").stdout)
    np.testing.assert_allclose(found["mount"]["eye_mm"], CAMERA.mount.eye_mm, atol=0.2)
    assert "give 6 to see which is wrong" in refused(
        "calibrate", "plate", "marks", *[w.replace("90.0,-60.0=", "84.0,-60.0=") if w[0] == "9" else w for w in words]
    )


def test_colours_are_taught_from_frames(folder: Path) -> None:
    (folder / "spotted.toml").write_text(SPOTTED)
    found = json.loads(run("calibrate", "colour", "simulated", "--part", "spotted.toml", "--frames", "4", "--json").stdout)
    assert found["n_frames"] == 4
    assert (folder / "trefoil.spotted.colour.json").is_file()
    tracked = json.loads(run("track", "simulated", "--part", "spotted.toml", "--frames", "3", "--json").stdout)
    assert tracked["poses"] == 3
    assert "colour" not in tracked["not_calibrated"]


def test_sheets_are_printed(folder: Path) -> None:
    assert run("calibrate", "board", "board.pdf").exit_code == 0
    assert run("calibrate", "mark", "mark.png", "--part", "nut-m30").exit_code == 0
    assert (folder / "board.pdf").read_bytes().startswith(b"%PDF")
    sheet = cv2.imread(str(folder / "mark.png"))
    assert sheet is not None
    assert sheet.shape[1] == math.floor(100.0 / 25.4 * 600)


@pytest.mark.parametrize(
    ("words", "wanted"),
    [
        (("track", "nowhere"), "source 'nowhere': no such thing; allowed: a camera device"),
        (("track", "simulated", "--frames", "1", "--video", "no/such/place.mp4"), "cannot be written as an MP4 video"),
        (("track", "simulated", "--frames", "1", "--table", "no/such/place.csv"), "cannot write"),
        (("track", "simulated", "--rig", "trefol"), "no shipped rig"),
        (("calibrate", "board", "board.doc"), "allowed: a name ending in .pdf or .png"),
        (("calibrate", "board", "no/such/board.pdf"), "cannot write"),
        (("calibrate", "plate", "x", "--mark", "1,2"), "--mark = '1,2': allowed: X,Y=U,V"),
        (("calibrate", "plate", "x", "--mark", "1,a=2,3"), "allowed: X,Y=U,V, numbers parted by commas"),
        (("calibrate", "plate", "x", "--mark", "1,2=3,4"), "1 marks on the plate and 1 in the picture, needed: 4"),
        (("calibrate", "colour", "simulated", "--frames", "3", "--at", "1,2"), "given twice"),
        (("calibrate", "camera", "nowhere"), "no such thing"),
        (("track", "/dev/video99", "--frames", "1"), "cannot be opened"),
    ],
)
def test_bad_input_is_one_clear_error(words: tuple[str, ...], wanted: str) -> None:
    assert wanted in refused(*words)


def test_a_stale_or_foreign_calibration_is_refused_by_track(folder: Path) -> None:
    text = {"kind": "lens", "made_on": "2020-01-01", "made_from": "x", "camera": "overhead-720p", "width_px": 1280, "height_px": 720}
    text |= {"focal_px": [1050.0, 1050.0], "principal_px": [641.5, 357.0], "distortion": [0.0] * 5, "rms_px": 0.1, "view_rms_px": [0.1]}
    path = folder / "trefoil.lens.json"
    path.write_text(json.dumps(text))
    assert "calibrate again" in refused("track", "simulated", "--frames", "1")
    path.write_text(json.dumps(text | {"width_px": 640}))
    assert "made at 640 × 720 px" in refused("track", "simulated", "--frames", "1")
    path.write_text(json.dumps(text | {"focal_px": [0.0, 1.0]}))
    assert "trefoil.lens.json: focal_px" in refused("track", "simulated", "--frames", "1")
