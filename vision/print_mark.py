"""A part's fiducial on paper at true scale: its tag, or its two coloured spots."""

from __future__ import annotations

import io
from typing import Literal

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_pdf import FigureCanvasPdf
from matplotlib.figure import Figure
from matplotlib.patches import Circle, Rectangle

from hw_profiles.part import Fiducial, Part, Spots
from vision import pattern
from vision.print_board import DPI, MM_PER_INCH

PAGE_MM = (100.0, 70.0)
BAR_MM = 50.0


def mark_sheet(part: Part, form: Literal["pdf", "png"]) -> bytes:
    """The sheet: the mark with lines to cut along, an arrow along its x axis, and a bar of 50 mm to check the print with."""
    figure = Figure(figsize=(PAGE_MM[0] / MM_PER_INCH, PAGE_MM[1] / MM_PER_INCH))
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_xlim(-PAGE_MM[0] / 2.0, PAGE_MM[0] / 2.0)
    axes.set_ylim(-PAGE_MM[1] / 2.0 - 5.0, PAGE_MM[1] / 2.0 - 5.0)
    axes.axis("off")
    mark = part.fiducial
    half = _draw_spots(axes, mark) if isinstance(mark, Spots) else _draw_tag(axes, mark)
    axes.add_patch(Rectangle((-half[0], -half[1]), 2.0 * half[0], 2.0 * half[1], fill=False, linewidth=0.3, edgecolor="0.6"))
    axes.annotate(
        "x", xy=(half[0] + 9.0, 0.0), xytext=(half[0] + 1.0, 0.0), va="center", fontsize=6, arrowprops={"arrowstyle": "->", "lw": 0.5}
    )
    axes.add_patch(Rectangle((-BAR_MM / 2.0, -34.0), BAR_MM, 1.0, facecolor="black", linewidth=0.0))
    axes.text(
        0.0, -37.5, f"{part.name}: the bar must measure {BAR_MM:g} mm; cut along the grey line, the arrow shows x", fontsize=5, ha="center"
    )
    sheet = io.BytesIO()
    if form == "pdf":
        FigureCanvasPdf(figure).print_pdf(sheet, metadata={"CreationDate": None, "Title": part.name})  # type: ignore[no-untyped-call]
    else:
        figure.set_dpi(DPI)
        FigureCanvasAgg(figure).print_png(sheet)  # type: ignore[no-untyped-call]
    return sheet.getvalue()


def _draw_tag(axes: Axes, tag: Fiducial) -> tuple[float, float]:
    """Black cells; returns half the extent with the white margin."""
    cell = tag.size_mm / pattern.N_CELLS
    for row, column in zip(*np.nonzero(~pattern.cells(tag.id)), strict=True):
        x, y = column * cell - tag.size_mm / 2.0, tag.size_mm / 2.0 - (row + 1) * cell
        axes.add_patch(Rectangle((x, y), cell, cell, facecolor="black", linewidth=0.0, antialiased=False))
    return tag.size_mm / 2.0 + cell, tag.size_mm / 2.0 + cell


def _draw_spots(axes: Axes, spots: Spots) -> tuple[float, float]:
    for side, rgb in ((-0.5, spots.first_rgb), (0.5, spots.second_rgb)):
        colour = tuple(value / 255.0 for value in rgb)
        axes.add_patch(Circle((side * spots.spacing_mm, 0.0), spots.spot_mm / 2.0, facecolor=colour, linewidth=0.0))
    return spots.half_mm
