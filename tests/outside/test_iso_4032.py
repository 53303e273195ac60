"""The M30 nut against ISO 4032 (hexagon nuts, style 1): 46 mm across flats, at least 50.85 mm across corners, 25.6 mm high.

Twin: the ISO 4032 columns of the hex nut table in the PyPI package bd-warehouse (installed without its dependencies; only its table is
read).
"""

import csv
import importlib.metadata
import math

import numpy as np
import pytest

from hw_profiles import geometry, load


def table_row(size: str) -> dict[str, str]:
    files = importlib.metadata.files("bd_warehouse") or []
    table = next(file for file in files if file.name == "hex_nut_parameters.csv")
    with open(str(table.locate()), encoding="utf-8") as text:
        return next(row for row in csv.DictReader(text) if row["Size"].startswith(size + "-"))


def test_m30_has_its_standard_dimensions() -> None:
    nut = load.load_part("nut-m30")
    row = table_row("M30")
    assert nut.height_mm == float(row["iso4032:m"]) == 25.6
    across_flats = geometry.minimum_width(nut.outline_mm)
    assert across_flats == pytest.approx(float(row["iso4032:s"]), abs=1e-3)
    assert across_flats == pytest.approx(46.0, abs=1e-3)
    assert 2.0 * nut.circumradius_mm >= 50.85
    assert 2.0 * nut.circumradius_mm == pytest.approx(46.0 * 2.0 / math.sqrt(3.0), abs=1e-3)


def test_its_edges_are_those_of_a_regular_hexagon() -> None:
    outline = np.array(load.load_part("nut-m30").outline_mm)
    lengths = np.linalg.norm(np.roll(outline, -1, axis=0) - outline, axis=1)
    assert lengths == pytest.approx(np.full(6, 46.0 / math.sqrt(3.0)), abs=1e-3)
