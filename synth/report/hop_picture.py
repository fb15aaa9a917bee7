"""A string of vehicles over time: the signal and the gaps, each as a field of shades, vehicle by vehicle."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from synth.report.svg import INK, QUIET, Board, Scale
from synth.simulate.manoeuvres import HopRun, HopTrajectory

Array = NDArray[np.float64]
_WIDTH, _HEIGHT, _COLUMNS, _ROWS = 720.0, 230.0, 60, 40
_LEFT, _TOP = 58.0, 34.0
_SHADES = 24


def string_picture(trajectory: HopTrajectory, run: HopRun) -> str:
    """SVG text: above the signal, below the gap, both as differences from steady driving; dark is low.

    Time runs to the right, the string downwards (the first follower on top).
    """
    board = Board(
        "string",
        f"{run.name}: {trajectory.units} vehicles",
        "Two fields of shades over time and vehicles: the signal and the gap, as differences from steady driving.",
        _WIDTH,
        2 * _HEIGHT + 20,
    )
    unit = trajectory.unit
    length = unit[:-2] if unit.endswith("/s") else f"{unit} times s"
    fields = (
        (f"{trajectory.signal}, difference from steady driving, in {unit}", run.run.signal),
        (f"gap, difference from steady driving, in {length}", run.run.gap),
    )
    for k, (title, values) in enumerate(fields):
        _field(board, _TOP + k * _HEIGHT, title, run, values)
    return board.svg()


def _field(board: Board, top: float, title: str, run: HopRun, values: Array) -> None:
    """One field with its axes and its scale of shades."""
    times, vehicles = run.run.times, run.run.shown
    columns = np.unique(np.linspace(0, len(times) - 1, min(_COLUMNS, len(times))).round().astype(int))
    rows = np.unique(np.linspace(0, len(vehicles) - 1, min(_ROWS, len(vehicles))).round().astype(int))
    part = values[np.ix_(columns, rows)]
    low, high = float(part.min()), float(part.max())
    if not low < high:
        high = low + 1.0
    right, bottom = _WIDTH - 110, top + _HEIGHT - 64
    across, down = (right - _LEFT) / len(columns), (bottom - top) / len(rows)
    level = np.round((part - low) / (high - low) * _SHADES).astype(int)
    for j in range(len(rows)):
        starts = [0, *(int(i) for i in np.flatnonzero(np.diff(level[:, j])) + 1), len(columns)]
        for begin, end in pairwise(starts):
            width = (end - begin) * across + 0.3
            board.box(_LEFT + begin * across, top + j * down, width, down + 0.3, _shade(level[begin, j] / _SHADES))
    board.text(_LEFT, top - 8, title, bold=True)
    time = Scale(0.0, float(max(times[-1], 1e-9)), _LEFT, right)
    for value, text in time.ticks():
        board.line(time(value), bottom, time(value), bottom + 4)
        board.text(time(value), bottom + 17, text, "middle", QUIET)
    board.text((_LEFT + right) / 2, bottom + 32, "time, s", "middle", QUIET)
    for j in sorted({0, len(rows) // 2, len(rows) - 1}):
        board.text(_LEFT - 6, top + (j + 0.7) * down, f"{vehicles[rows[j]] + 1}", "end", QUIET)
    board.text(14, (top + bottom) / 2, "vehicle", "middle", QUIET, turned=True)
    for k in range(11):
        board.box(right + 20, top + k * (bottom - top) / 11, 14, (bottom - top) / 11 + 0.3, _shade(1 - k / 10))
    board.text(right + 40, top + 9, f"{high:.3g}", fill=INK)
    board.text(right + 40, bottom, f"{low:.3g}", fill=INK)


def _shade(share: float) -> str:
    """From dark blue (0) to pale yellow (1); evenly growing lightness, so that it reads in grey."""
    low, high = np.array([20, 40, 90]), np.array([250, 245, 215])
    red, green, blue = (round(float(v)) for v in low + (high - low) * min(max(share, 0.0), 1.0))
    return f"#{red:02x}{green:02x}{blue:02x}"
