"""A calibration board on paper at true scale, as PDF or PNG."""

from __future__ import annotations

import io
from typing import Literal

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_pdf import FigureCanvasPdf
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from vision.calibrate import Board

MM_PER_INCH = 25.4
MARGIN_MM = 12.0
DPI = 600
MARKER_CELLS = 7  # 5 × 5 code and its border


def board_sheet(board: Board, form: Literal["pdf", "png"]) -> bytes:
    """The sheet: the board, a bar of 100 mm to check the print with, and what the board is."""
    width_mm, height_mm = board.size_mm
    page = (width_mm + 2.0 * MARGIN_MM, height_mm + 2.0 * MARGIN_MM + 10.0)
    figure = Figure(figsize=(page[0] / MM_PER_INCH, page[1] / MM_PER_INCH))
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_xlim(0.0, page[0])
    axes.set_ylim(page[1], 0.0)
    axes.axis("off")
    for x, y, side in _squares(board):
        axes.add_patch(Rectangle((x + MARGIN_MM, y + MARGIN_MM), side, side, facecolor="black", linewidth=0.0, antialiased=False))
    foot = page[1] - MARGIN_MM
    axes.add_patch(Rectangle((MARGIN_MM, foot - 2.0), 100.0, 1.0, facecolor="black", linewidth=0.0))
    words = (
        f"The bar must measure 100 mm. Print at 100 %, no fitting to the page. "
        f"{board.columns} × {board.rows} squares of {board.square_mm:g} mm, markers {board.marker_mm:g} mm."
    )
    axes.text(MARGIN_MM + 104.0, foot - 1.0, words, fontsize=5.0, va="center")
    sheet = io.BytesIO()
    if form == "pdf":
        FigureCanvasPdf(figure).print_pdf(sheet, metadata={"CreationDate": None, "Title": "calibration board"})  # type: ignore[no-untyped-call]
    else:
        figure.set_dpi(DPI)
        FigureCanvasAgg(figure).print_png(sheet)  # type: ignore[no-untyped-call]
    return sheet.getvalue()


def _squares(board: Board) -> list[tuple[float, float, float]]:
    """Black squares as x, y of the top left corner and side [mm], the board's top left corner at the origin."""
    layout, side = board.layout(), board.square_mm
    found = [
        (column * side, row * side, side) for row in range(board.rows) for column in range(board.columns) if _is_black(row, column, board)
    ]
    family, cell = layout.getDictionary(), board.marker_mm / MARKER_CELLS
    for tag_id, corners in zip(np.asarray(layout.getIds()).reshape(-1), layout.getObjPoints(), strict=True):
        x, y = np.asarray(corners, dtype=float).reshape(4, 3)[0, :2]
        black = np.asarray(family.generateImageMarker(int(tag_id), MARKER_CELLS)) < 128
        found += [(x + column * cell, y + row * cell, cell) for row, column in zip(*np.nonzero(black), strict=True)]
    return found


def _is_black(row: int, column: int, board: Board) -> bool:
    """White squares hold the markers; the first square of the first row is black in the present ChArUco layout."""
    return (row + column) % 2 == 0
