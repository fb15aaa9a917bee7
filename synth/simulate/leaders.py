"""What a leader may do: hard brake, stop and go, sine sweep, a recorded drive; as differences from steady driving.

Every manoeuvre made here keeps its rate of change within the largest acceleration declared; a recording keeps to
nothing, and its own largest rate is used in bounds.
"""

from __future__ import annotations

import csv
import io
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.network.reader import load_text

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Manoeuvre:
    """A leader's signal: straight lines between ``times`` (s, increasing from 0) through ``values``, then constant.

    ``values`` count from steady driving and begin with 0. ``peak``, ``rate``: largest modulus of the signal and of its
    rate of change.
    """

    name: str
    times: Array
    values: Array

    @property
    def peak(self) -> float:
        """Largest modulus."""
        return float(np.abs(self.values).max())

    @property
    def rate(self) -> float:
        """Largest modulus of the slope."""
        return float(np.abs(np.diff(self.values) / np.diff(self.times)).max(initial=0.0))

    def at(self, t: Array) -> Array:
        """Values at times of any shape; 0 before the start."""
        return np.asarray(np.interp(t, self.times, self.values, left=0.0), dtype=np.float64)

    def slope(self, t: Array) -> Array:
        """Rate of change just after each time."""
        slopes = np.append(np.diff(self.values) / np.diff(self.times), 0.0)
        place = np.searchsorted(self.times, t, side="right") - 1
        return np.asarray(np.where(place < 0, 0.0, slopes[np.clip(place, 0, len(slopes) - 1)]), dtype=np.float64)


def manoeuvres(speed: float, acceleration: float, seconds: float) -> tuple[Manoeuvre, ...]:
    """Hard brake, stop and go, sine sweep of a leader that drives at ``speed`` and stays within ``acceleration``."""
    if speed <= 0 or acceleration <= 0 or seconds <= 0:
        raise InputError("a manoeuvre needs a speed, an acceleration and a length above zero.")
    return (
        _brake(speed, acceleration),
        _stop_and_go(speed, acceleration, seconds),
        _sweep(speed, acceleration, seconds),
    )


def _lines(name: str, points: list[tuple[float, float]]) -> Manoeuvre:
    times, values = np.array(points, dtype=np.float64).T
    return Manoeuvre(name, times, values)


def _brake(speed: float, acceleration: float) -> Manoeuvre:
    """To a standstill as hard as allowed, and staying there."""
    return _lines("hard brake", [(0, 0), (1, 0), (1 + speed / acceleration, -speed)])


def _stop_and_go(speed: float, acceleration: float, seconds: float) -> Manoeuvre:
    """To a standstill and back again, over and over, with a short rest between."""
    ramp, rest = speed / acceleration, 3.0
    points, t = [(0.0, 0.0), (1.0, 0.0)], 1.0
    while t < seconds:
        points += [(t + ramp, -speed), (t + ramp + rest, -speed), (t + 2 * ramp + rest, 0.0)]
        t += 2 * ramp + 2 * rest
        points.append((t, 0.0))
    return _lines("stop and go", points)


def _sweep(speed: float, acceleration: float, seconds: float) -> Manoeuvre:
    """A sine from 0.02 to 2 rad/s whose rate stays within the acceleration and whose swing is below the speed."""
    t = np.linspace(0, seconds, max(200, round(seconds * 20)) + 1)
    low, high = 0.02, 2.0
    growth = np.log(high / low) / seconds
    phase = low / growth * np.expm1(growth * t)
    w = low * np.exp(growth * t)
    size = np.minimum(speed / 2, 0.9 * acceleration / w)  # its own slow decrease takes part of the rest
    values = -size * np.sin(phase)
    steepest = np.abs(np.diff(values) / np.diff(t)).max()
    return Manoeuvre("sine sweep", t, values * min(1.0, acceleration / steepest))


def recorded(path: Path, signal: str) -> tuple[Manoeuvre, float]:
    """A drive recorded in a CSV table with the columns time_s and ``signal``; and its first value.

    InputError for a missing file or column, for numbers that are none, and times that do not increase.
    """
    text = load_text(path, "recorded drive", "a CSV table of a recorded drive")
    rows = list(csv.reader(io.StringIO(text)))
    header = [name.strip() for name in rows[0]] if rows else []
    for name in ("time_s", signal):
        if name not in header:
            raise InputError(f"{path}: the column {name!r} is missing; the first line must name time_s and {signal}.")
    points: list[tuple[float, float]] = []
    for number, row in enumerate(rows[1:], start=2):
        if not any(cell.strip() for cell in row):
            continue
        try:
            here = (float(row[header.index("time_s")]), float(row[header.index(signal)]))
        except (ValueError, IndexError):
            raise InputError(f"{path}:{number}: two numbers are expected, time_s and {signal}.") from None
        if not np.all(np.isfinite(here)):
            raise InputError(f"{path}:{number}: the numbers must be finite.")
        if points and here[0] <= points[-1][0]:
            raise InputError(f"{path}:{number}: the times must increase from line to line.")
        points.append(here)
    if len(points) < 2:
        raise InputError(f"{path}: a recorded drive needs two lines of numbers or more.")
    times, values = np.array(points).T
    return Manoeuvre("recorded", times - times[0], values - values[0]), float(values[0])
