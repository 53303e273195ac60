"""The main job, closed on the simulated bench: rendered frames, the real tracker, the real bytes. Seeds here were not tuned on."""

import json

import pytest
from typer.testing import CliRunner

from service.cli import app
from service.trials.figures import WALL_CLOCK_KEYS

RUNNER = CliRunner()


def figures(*options: str) -> dict:
    result = RUNNER.invoke(app, ["trial", "--simulated", "--json", *options])
    assert result.exit_code in (0, 1), result.output
    return json.loads(result.stdout)


@pytest.mark.slow
@pytest.mark.parametrize("part", ["roller-40", "collar-60", "nut-m30", "block-36"])
def test_positions_are_reached_with_the_cage_certified_on_every_tick(part: str) -> None:
    found = figures("--kind", "position", "--goals", "6", "--seed", "210", "--part", part)
    assert found["reached"] == 6
    assert found["median_error_mm"] < 0.3
    assert found["ejections"] == 0
    assert found["ticks_without_cage"] == 0


@pytest.mark.slow
def test_poses_are_reached_by_grasping_anew_where_needed() -> None:
    found = figures("--kind", "pose", "--goals", "6", "--seed", "211")
    assert found["reached"] == 6
    assert found["median_error_mm"] < 0.3
    assert found["median_error_deg"] < 0.6
    assert found["ejections"] == 0


@pytest.mark.slow
def test_angles_within_the_twist_are_reached() -> None:
    found = figures("--kind", "angle", "--goals", "6", "--seed", "212", "--part", "collar-60")
    assert found["reached"] == 6
    assert found["median_error_deg"] < 0.6


@pytest.mark.slow
def test_one_seed_gives_one_result() -> None:
    options = ("--kind", "pose", "--goals", "3", "--seed", "213", "--vary", "friction=0.9")
    first, second = figures(*options), figures(*options)
    for key in WALL_CLOCK_KEYS:
        del first[key], second[key]
    assert first == second


@pytest.mark.slow
def test_another_seed_gives_another_result() -> None:
    one, other = (figures("--kind", "position", "--goals", "2", "--seed", seed) for seed in ("214", "215"))
    assert one["median_error_mm"] != other["median_error_mm"]


@pytest.mark.slow
def test_report_is_one_file_that_needs_nothing_else(tmp_path) -> None:
    result = RUNNER.invoke(app, ["trial", "--simulated", "--kind", "position", "--goals", "2", "--seed", "216", "--out", str(tmp_path)])
    assert result.exit_code == 0, result.output
    text = (tmp_path / "report.html").read_text()
    assert "<svg" in text
    assert 'src="http' not in text
    assert 'href="http' not in text
    assert json.loads((tmp_path / "results.json").read_text())["figures"]["goals"] == 2
