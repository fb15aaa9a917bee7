"""The radius of a network of any description, with what it is about: which units, how many, and which wirings.

A radius alone says nothing about size: a one-way string of five units has radius 0 whatever its links, and the string
without end has the gain of its link. So the result names what it covers, and nothing else may be read into it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import InputError
from synth.gain.assembly import Assembly, PeakTable, Rate, assemble_plan
from synth.gain.descriptions import across, plan_of
from synth.gain.edge_sections import Piece, bulk_piece, edge_piece, string_pieces, whole_piece
from synth.gain.peak import PeakGain
from synth.network.gains import Gains
from synth.network.model import Network


@dataclass(frozen=True, eq=False)
class NetworkRadius:
    """lower <= radius <= upper for the true peak gains of A + alpha I, and for everything that ``covers`` names.

    ``reached``: whether every enclosure is as narrow as the relative ``width`` asked for, apart from the widths of the
    peak gains. ``covers`` is a sentence without its full stop; ``size`` the number of units it is about (None: any).
    ``least_cells``: the shortest finite line that is covered (None: no finite line is). ``pieces``: the finite
    operators it rests on, each with its point; the first is the network's own (of an edge pattern, the endless
    pattern behind the edges). ``leading`` is the piece whose upper end is the largest.

    Under rules with relative links, and with links that may weaken, the operator is the worst case of everything that
    is admitted, so ``lower`` bounds the radius of the operator and need not be attained by any one wiring.
    """

    description: str
    lower: float
    upper: float
    reached: bool
    width: float
    alpha: Fraction
    covers: str
    size: int | None
    least_cells: int | None
    pieces: tuple[Piece, ...]

    @property
    def leading(self) -> Piece:
        """The piece that holds the radius up: its upper end is the largest."""
        return max(self.pieces, key=lambda piece: piece.upper)

    @property
    def assembly(self) -> Assembly:
        """The network's own operator (of an edge pattern, that of the endless pattern behind the edges)."""
        return self.pieces[0].assembly

    @property
    def outlets(self) -> tuple[tuple[str, str], ...]:
        """The rows of ``assembly`` by name."""
        return self.assembly.outlets

    def peaks(self) -> Mapping[str, PeakGain]:
        """Peak gains (offers x takes) of every specification in any piece, by the name of a unit that has it."""
        found: dict[str, PeakGain] = {}
        seen = set()
        for piece in self.pieces:
            plan = piece.assembly.plan
            for number, spec in enumerate(plan.specs):
                if spec not in seen:
                    seen.add(spec)
                    found[plan.units_of(number)[0]] = piece.assembly.unit_peaks[number]
        return found


def network_radius(
    network: Network,
    gains: Gains,
    alpha: Rate = Fraction(0),
    width: float = 1e-9,
    peak_width: float = 1e-6,
    table: PeakTable | None = None,
) -> NetworkRadius:
    """Enclose the radius of the gain operator of a network with the given gains, for everything it describes.

    ``alpha`` rate in 1/s, >= 0; ``width`` relative width of the radius for given peak gains, ``peak_width`` that of the
    peak gains. ``table``: peak gains that are known already, for these gains, rate and peak width.

    Raises UnstableLoop if a closed unit (shifted by alpha) is not Hurwitz, InputError for numbers out of range, missing
    gains or links that do not fit, WidthNotReached if a peak gain does not close. Theory (9), (10), (13), (14).
    """
    if not (isinstance(width, (int, float)) and 0 < width < 1):
        raise InputError(f"width must lie between 0 and 1 (relative), not {width!r}.")
    table = PeakTable(gains, alpha, peak_width) if table is None else table
    if network.description == "edge pattern":
        return _with_edges(network, table, width)
    name = {"pattern": "pattern", "rules": "worst wiring", "members": "members"}[network.description]
    piece = whole_piece(name, assemble_plan(plan_of(network), table), width)
    return NetworkRadius(
        network.description, piece.lower, piece.upper, piece.reached, width, table.alpha, _covers(network),
        network.units, None, (piece,),
    )  # fmt: skip


def _covers(network: Network) -> str:
    if network.description == "rules":
        return "every wiring within the rules, with any number of units, rewired at any time"
    if network.members is not None:
        return f"these {len(network.members.names)} units with their links, and no larger network"
    closed = "every ring" if network.dimension == 1 else "every field closed to a ring in each direction"
    return f"the pattern without end and {closed} of it, with any number of units"


def _with_edges(network: Network, table: PeakTable, width: float) -> NetworkRadius:
    line = across(network)
    bulk = bulk_piece(line, table, width)
    edges = [edge_piece(line, edge, bulk, table, width) for edge in line.edges]
    least: int | None = None
    lines: tuple[Piece, ...] = ()
    if len(edges) == 2:
        least, lines = string_pieces(line, edges, table, width)
    pieces = (bulk, *edges, *lines)
    upper = max(piece.upper for piece in pieces)
    lower = max(piece.lower for piece in pieces)
    # Only what may hold the radius up must be narrow.
    reached = all(piece.reached for piece in pieces if piece.upper > lower)
    form = {1: "line", 2: "half plane", 3: "half space"}[network.dimension]
    if least is None:
        covers = (
            f"the half line with this {line.edges[0].side} edge" if form == "line" else f"the {form} with this edge"
        )
    else:
        finite = "line" if form == "line" else "strip" if network.dimension == 2 else "layer"
        both = "half lines" if form == "line" else f"{form}s"
        covers = f"every {finite} of {least} or more cells between these two edges, and both {both}"
    return NetworkRadius(
        network.description, lower, upper, reached, width, table.alpha, covers, None, least, pieces
    )  # fmt: skip
