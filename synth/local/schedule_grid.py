"""Operating grids: breakpoints of one or two variables, cells, weights, and breakpoints chosen to a tolerance."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix, Number, exact
from synth.network.model import Kind

Values = tuple[Fraction, ...]
PlantAt = Callable[..., Kind]
_MOST_POINTS = 200
_MATRICES = ("A", "B", "D", "E", "H")


@dataclass(frozen=True)
class Grid:
    """Breakpoints of one or two operating variables and the kind at every one of them.

    ``names`` of the variables; ``axes`` strictly rising breakpoints of each, in the variable's own unit; ``kinds`` in
    the order of ``points`` (last variable fastest), all with the same signals. ``error``: largest difference met
    between a kind and the interpolated one, relative to the largest entry of the matrix (None: not looked at).
    Law: ``weights`` are not negative, add up to one, and are one at a breakpoint for the point itself.
    """

    names: tuple[str, ...]
    axes: tuple[Values, ...]
    kinds: tuple[Kind, ...]
    error: float | None = None

    @property
    def points(self) -> list[Values]:
        """All breakpoints, last variable fastest."""
        return list(itertools.product(*self.axes))

    def cells(self) -> list[tuple[int, ...]]:
        """Corner numbers of every cell: two for an interval, four for a rectangle; one where an axis has one point."""
        place = {point: i for i, point in enumerate(self.points)}
        spans: list[list[Values]] = [[*itertools.pairwise(axis)] or [(axis[0],)] for axis in self.axes]
        return [tuple(place[corner] for corner in itertools.product(*cell)) for cell in itertools.product(*spans)]

    def weights(self, values: Sequence[Number]) -> dict[int, Fraction]:
        """Weight of every corner of the cell around ``values`` (products of linear weights); InputError outside."""
        given = [exact(v) for v in values]
        if len(given) != len(self.axes):
            raise InputError(f"{len(self.axes)} values are needed ({', '.join(self.names)}), not {len(given)}.")
        parts: list[list[tuple[Fraction, Fraction]]] = []
        for name, axis, value in zip(self.names, self.axes, given, strict=True):
            if not axis[0] <= value <= axis[-1]:
                raise InputError(
                    f"{name} = {float(value):g} lies outside the table ({float(axis[0]):g} to {float(axis[-1]):g}); "
                    "nothing is proven there."
                )
            k = max(i for i, v in enumerate(axis) if v <= value)
            if axis[k] == value:
                parts.append([(axis[k], Fraction(1))])
            else:
                share = (value - axis[k]) / (axis[k + 1] - axis[k])
                parts.append([(axis[k], 1 - share), (axis[k + 1], share)])
        place, found = {point: i for i, point in enumerate(self.points)}, {}
        for corner in itertools.product(*parts):
            weight = Fraction(1)
            for _, share in corner:
                weight *= share
            found[place[tuple(value for value, _ in corner)]] = weight
        return found


def grid_of(names: Sequence[str], axes: Sequence[Sequence[Number]], plant: PlantAt | Sequence[Kind]) -> Grid:
    """A grid with given breakpoints; ``plant`` is a function of the variables, or the kinds in order (last fastest).

    Raises InputError unless there are one or two variables, the breakpoints rise and the kinds have equal signals.
    """
    if not 1 <= len(axes) <= 2 or len(names) != len(axes):
        raise InputError(f"a gain table has one or two variables with a name each, not {len(axes)}.")
    values = tuple(tuple(exact(v) for v in axis) for axis in axes)
    for name, axis in zip(names, values, strict=True):
        if not axis or any(a >= b for a, b in itertools.pairwise(axis)):
            raise InputError(f"the breakpoints of {name} must rise strictly, and there must be one at least.")
    points = list(itertools.product(*values))
    if len(points) > _MOST_POINTS:
        raise InputError(
            f"the table has {len(points)} points; at most {_MOST_POINTS} are taken. Use fewer breakpoints."
        )
    kinds = tuple(plant(*point) for point in points) if callable(plant) else tuple(plant)
    if len(kinds) != len(points):
        raise InputError(f"{len(points)} kinds are needed, one per breakpoint, not {len(kinds)}.")
    first = kinds[0]
    for kind in kinds:
        for group in ("states", "inputs", "takes", "offers", "sensors", "disturbances"):
            if getattr(kind, group) != getattr(first, group):
                raise InputError(f"the {group} of {first.name} differ between breakpoints; all must be the same.")
        if kind.name != first.name or first.C != kind.C or any(map(any, kind.N.rows)):
            raise InputError(f"{first.name} must keep its name and sensors at every breakpoint, and hear no link.")
    return Grid(tuple(names), values, kinds)


def chosen_grid(
    names: Sequence[str], ranges: Sequence[tuple[Number, Number]], plant: PlantAt, tolerance: float = 0.05
) -> Grid:
    """Breakpoints by halving until linear interpolation of the plant is within ``tolerance``.

    The difference is looked at in the middle and at the quarter points of every cell: of each matrix the largest entry
    difference, relative to its largest entry over the grid. That is a measure of the table, not a bound in between.
    InputError if more than 200 points would be needed.
    """
    if not tolerance > 0:
        raise InputError(f"tolerance must be above zero, not {tolerance:g}.")
    axes = [[exact(a), exact(b)] for a, b in ranges]
    while True:
        grid = grid_of(names, axes, plant)
        sizes = {name: _largest(grid, name) for name in _MATRICES}
        worst, split = 0.0, [set[Fraction]() for _ in axes]
        for cell in grid.cells():
            corners = [grid.points[c] for c in cell]
            low, high = corners[0], corners[-1]
            for k in range(len(axes)):
                # Along each variable, from the low corner, through the middle and from the high corner.
                for base in {low, high, tuple((a + b) / 2 for a, b in zip(low, high, strict=True))}:
                    for quarter in (1, 2, 3):
                        at = list(base)
                        at[k] = low[k] + (high[k] - low[k]) * Fraction(quarter, 4)
                        error = _difference(grid, plant(*at), at, sizes)
                        worst = max(worst, error)
                        if error > tolerance:
                            split[k].add((low[k] + high[k]) / 2)
        if not any(split):
            return Grid(grid.names, grid.axes, grid.kinds, worst)
        axes = [sorted({*axis, *more}) for axis, more in zip(axes, split, strict=True)]


def _largest(grid: Grid, name: str) -> Fraction:
    entries = (abs(v) for kind in grid.kinds for row in getattr(kind, name).rows for v in row)
    return max(entries, default=Fraction(0))


def _difference(grid: Grid, kind: Kind, at: Sequence[Fraction], sizes: Mapping[str, Fraction]) -> float:
    weights = grid.weights(at)
    worst = Fraction(0)
    for name in _MATRICES:
        matrix: ExactMatrix = getattr(kind, name)
        mixed = ExactMatrix.zeros(*matrix.shape)
        for corner, weight in weights.items():
            mixed = mixed + getattr(grid.kinds[corner], name).scaled(weight)
        if sizes[name]:
            worst = max([worst, *(abs(v) / sizes[name] for row in (matrix - mixed).rows for v in row)])
    return float(worst)
