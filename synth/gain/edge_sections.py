"""Lines with edges: bounds of the radius from edge sections, and from one point for the whole line (theory (14)).

The radius of a half line is the larger of the bulk's (the endless pattern) and the limit of its edge sections.

*From below.* The section operator, cut off behind n cells, hears less than the half line: its radius lies below (10).
The bulk's does as well: far behind the edge G^n(1) is that of the endless pattern. Sections alone are not enough:
forward .9 and back .2 have sections of radius .8485 and less, and a radius of 1.1.

*From above.* One s > 0 for the whole half line: the bulk's point everywhere behind a window of W cells, and in the
window the least solution of  t s = G(s) + a little  with t just above both lower bounds. Every row of the window, which
holds all rows that differ from the pattern's, and every row that hears the window is checked with outward rounding; all
others have the quotients of the bulk (10). The window grows until the bounds meet, or a size is reached and said.

*Finite lines.* Both windows fit into every line of W1 + W2 + twice the longest link cells or more, and the same s
proves it. Shorter lines are enclosed one by one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.sparse import csc_array, eye_array
from scipy.sparse.linalg import splu

from synth.gain.assembly import Assembly, PeakTable, assemble_plan
from synth.gain.descriptions import (
    reach_of,
    section_wiring,
    settled_cells,
    shortest_string,
    string_wiring,
    wiring_of,
)
from synth.gain.operator import GainOperator
from synth.gain.plan import Floats, plan_of_units
from synth.gain.solving.certify import row_bounds
from synth.gain.solving.points import Exponents, plain
from synth.network.layout import Edge
from synth.network.model import Network

MOST_ROWS = 4000  # of a section: beyond this the window stops growing
MOST_STRINGS = 300  # lines enclosed one by one
_POLICY_STEPS = 60


@dataclass(frozen=True, eq=False)
class Piece:
    """A finite operator that a claim rests on, and what it says: ``name`` is a text such as 'first edge'.

    ``lower`` and ``upper`` bound the radius of this piece for the true peak gains. ``point`` has a positive number per
    row of ``assembly``, times 2**exponent where ``exponent`` is not None. At an edge its first ``checked`` rows have
    been checked, it is solved for the first ``window`` cells, and behind them it repeats the bulk's point without end.
    ``cells`` counts the cells of a section or a finite line.
    """

    name: str
    assembly: Assembly
    lower: float
    upper: float
    point: Floats
    exponent: Exponents | None
    checked: int
    reached: bool
    cells: int = 0
    window: int = 0


def whole_piece(name: str, assembly: Assembly, width: float, cells: int = 0) -> Piece:
    """A finite operator that is enclosed as it is."""
    found = assembly.radius(width)
    rows = assembly.plan.size
    return Piece(name, assembly, found.lower, found.upper, found.point, found.exponent, rows, found.reached, cells)


def bulk_piece(line: Network, table: PeakTable, width: float) -> Piece:
    """The endless pattern behind the edges; its upper end is that of its point."""
    piece = whole_piece("pattern", assemble_plan(plan_of_units(wiring_of(line)), table), width)
    point = plain(piece.point, piece.exponent)
    if point is None:  # it spans more than doubles hold; the windows need doubles, so a blunter one must do
        point = np.ones(piece.point.size)
    upper = piece.assembly.upper.upper_bound(point)
    return replace(piece, upper=max(piece.upper, upper), point=point, exponent=None)


def edge_piece(line: Network, edge: Edge, bulk: Piece, table: PeakTable, width: float) -> Piece:
    """The half line at one edge; ``lower`` and ``upper`` enclose the larger of its own radius and the bulk's."""
    reach, window = reach_of(line), settled_cells(line, edge)
    below_bulk = bulk.assembly.upper.radius(width / 8).lower
    best: Piece | None = None
    while True:
        cells = window + 2 * reach
        assembly = assemble_plan(plan_of_units(section_wiring(line, edge, cells)), table)
        section = assembly.upper.radius(width / 8)
        target = max(bulk.upper, section.upper) * (1 + width / 2)
        found = _windowed(assembly, bulk, window, reach, target)
        if found is not None:
            point, checked, upper = found
            # A radius of zero has no relative width; there the bound is compared with the largest entry.
            scale = float(assembly.upper.gain.max(initial=0.0))
            reached = upper <= max(below_bulk, section.lower) * (1 + width) or upper <= width * scale
            if best is None or reached or upper < best.upper:
                best = Piece(f"{edge.side} edge", assembly, 0.0, upper, point, None, checked, reached, cells, window)
        if (best is not None and best.reached) or 2 * assembly.plan.size > MOST_ROWS:
            break
        window *= 2
    if best is None:
        nothing = np.ones(assembly.plan.size)
        best = Piece(f"{edge.side} edge", assembly, 0.0, np.inf, nothing, None, 0, False, cells, window)
    # The last section is the largest, so its cut says most from below.
    return replace(best, lower=max(bulk.lower, assembly.lower.radius(width / 8).lower))


def _windowed(
    assembly: Assembly, bulk: Piece, window: int, reach: int, target: float
) -> tuple[Floats, int, float] | None:
    """The point of a section with the bulk's behind the window, how many rows were checked, and their bound."""
    plan, pattern = assembly.plan, bulk.assembly.plan
    slots = len(pattern.names)
    unit = np.arange(window * slots, len(plan.names))
    assert np.array_equal(
        plan.unit_kind[unit], pattern.unit_kind[unit % slots]
    )  # the pattern's own units, in its order
    inside = int(plan.first_row[window * slots])
    checked = int(plan.first_row[(window + reach) * slots])
    rows = np.arange(inside, plan.size)
    point = np.ones(plan.size)
    point[rows] = bulk.point[pattern.first_row[plan.row_unit[rows] % slots] + plan.row_offer[rows]]
    if not _solve_window(assembly.upper, point, inside, target):
        return None
    return point, checked, max(bulk.upper, _bound(assembly.upper, point, checked))


def _bound(operator: GainOperator, point: Floats, checked: int) -> float:
    """The largest quotient of the first rows, rounded up; whatever those rows hear stands in ``point``."""
    return float(np.max(row_bounds(operator, point, None)[1][:checked], initial=0.0))


def _solve_window(operator: GainOperator, point: Floats, inside: int, target: float) -> bool:
    """Put into the first ``inside`` entries the least s with target * s = G(s) + a little; False if there is none.

    Alternatives are settled by policy iteration: each round solves for the terms that were largest in the last one.
    """
    layout = operator.layout
    to, source, gain = layout.row_of_link, layout.source, layout.gain
    # The little keeps rows positive that hear nothing. It is far below everything, so that it amplifies nothing.
    little = target * float(point.min()) * 2.0**-60
    won, settled = layout.winners(gain * point[source]), False
    for _ in range(_POLICY_STEPS):
        used = won & (to < inside)
        near, far = used & (source < inside), used & (source >= inside)
        right = little + np.bincount(to[far], weights=gain[far] * point[source[far]], minlength=inside)[:inside]
        matrix = target * eye_array(inside) - csc_array((gain[near], (to[near], source[near])), shape=(inside, inside))
        try:
            # Pivots on the diagonal only: nothing but these is then subtracted, so tiny entries come out right too.
            factors = splu(
                matrix.tocsc(), permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True}
            )
            found = factors.solve(right)
        except RuntimeError:  # exactly singular: the target is no upper bound for the window
            return False
        if not (np.all(np.isfinite(found)) and np.all(found > 0)):
            return False
        point[:inside] = found
        before, won = won, layout.winners(gain * point[source])
        settled = bool(np.array_equal(before, won))
        if settled:
            break
    return True


def string_pieces(
    line: Network, edges: Sequence[Piece], table: PeakTable, width: float
) -> tuple[int, tuple[Piece, ...]]:
    """The finite lines that are too short for both windows, one by one, and the least length that is then covered.

    A line that has a point within the bound of the ``edges`` needs no enclosure of its own (its lower end is then 0).
    Where there would be too many of them, the shortest are left out and the least length says so.
    """
    long = sum(edge.window for edge in edges) + 2 * reach_of(line)
    goal = max(edge.upper for edge in edges)
    least = max(shortest_string(line), long - MOST_STRINGS)
    pieces = []
    for cells in range(least, long):
        name, assembly = f"line of {cells} cells", assemble_plan(plan_of_units(string_wiring(line, cells)), table)
        rows = assembly.plan.size
        point = np.ones(rows)
        if np.isfinite(goal) and _solve_window(assembly.upper, point, rows, goal):
            upper = _bound(assembly.upper, point, rows)
            if upper <= goal * (1 + width / 8):
                pieces.append(Piece(name, assembly, 0.0, upper, point, None, rows, True, cells))
                continue
        pieces.append(whole_piece(name, assembly, width / 2, cells))
    return least, tuple(pieces)
