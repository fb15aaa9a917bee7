"""Positive networks: columns against the linear program, against searches, and against published properties."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import networkx as nx
import numpy as np
import pytest
from scipy.optimize import minimize

from synth.base.errors import InputError, SolverFailure
from synth.base.exact import ExactMatrix
from synth.gain.assembly import assemble
from synth.gain.closed import close_unit
from synth.gain.unit import state_peaks
from synth.local import design as make_design
from synth.local import positive_design, positivity
from synth.local.positive.check import static_gains, statics
from synth.local.positive.design import _by_columns, _reference
from synth.local.positive.judge import judge
from synth.local.positive.program import solve_program
from synth.local.positive.sizes import least_sizes, separable
from synth.local.positive.web import Array, Web, web_of
from synth.network.gains import Gains, gain_set
from synth.network.model import Actuator, Disturbance, Goal, Kind, Link, Network, Signal
from tests.build import M, convoy
from tests.local.thermal import grid, thermal, zone

Table = Sequence[Sequence[int | float | str | Fraction]]


def kind_of(
    A: Table, B: Table, D: Table, H: Table, name: str = "unit", limit: str | None = None
) -> Kind:  # fmt: skip
    """A kind with the given matrices that reads all its states; disturbance on every state."""
    n, m, takes, offers = len(A), len(B[0]), len(D[0]), len(H)
    states = tuple(Signal(f"x{i}", "1") for i in range(n))
    return Kind(
        name, states, tuple(Actuator(f"u{i}", "1", None if limit is None else Fraction(limit)) for i in range(m)),
        (Disturbance("w", "1", Fraction(1, 10)),), tuple(Signal(f"v{i}", "1") for i in range(takes)),
        tuple(Signal(f"z{i}", "1") for i in range(offers)), states,
        M(A), M(B), M(D), M([[1]] * n), ExactMatrix.identity(n), ExactMatrix.zeros(n, takes), M(H),
        ExactMatrix.zeros(offers, takes), ExactMatrix.zeros(offers, 1),
    )  # fmt: skip


def pattern(kind: Kind, *strengths: tuple[int, int, str]) -> Network:
    """One kind on a line; each strength (take, offer, g) is a link from the unit before."""
    links = tuple(
        Link(f"l{k}", kind.name, kind.offers[o].name, (-1,), kind.name, kind.takes[t].name, Fraction(g))
        for k, (t, o, g) in enumerate(strengths)
    )
    return Network("Invented positive units", (kind,), links, Goal(Fraction(9, 10)))


def opened(web: Web) -> tuple[list[Array], list[np.ndarray]]:
    numbers = range(len(web.network.kinds))
    return [web.open_floats(k) for k in numbers], [web.units_of(k) for k in numbers]


def test_a_published_unit_becomes_metzler_and_hurwitz() -> None:
    """Plant from memory of Ait Rami & Tadeo, IEEE TCAS-II 54(2), 2007; only the properties are compared, not K."""
    kind = kind_of([["0.1", "0.5"], ["0.4", "-0.3"]], [[1], ["0.2"]], [[1], [0]], [[1, 0]])
    assert max(np.linalg.eigvals(kind.A.floats()).real) > 0
    design = positive_design(pattern(kind), kmax=10)
    assert design.gains is not None
    unit = close_unit(kind, (), design.gains["unit"].K)
    assert unit.A[0, 1] >= 0 and unit.A[1, 0] >= 0
    assert max(np.linalg.eigvals(unit.A.floats()).real) < 0
    with pytest.raises(SolverFailure, match="stable and positive"):
        positive_design(pattern(kind), kmax="1/10")  # type: ignore[arg-type]


def test_static_gains_of_a_published_system() -> None:
    """Positive systems' gains are static gains: Rantzer & Valcher, CDC 2018; numbers of this system from memory."""
    kind = kind_of(
        [[-1, ".2", 0], [".3", -1, ".4"], [".1", ".2", "-.8"]], [[0]] * 3,
        [[1, 0], [0, 1], [".5", ".2"]], [[1, 1, 0], [0, 0, 1]],
    )  # fmt: skip
    unit = close_unit(kind, (), ExactMatrix.zeros(1, 3))
    found = static_gains(unit)
    assert found is not None
    assert found.upper.sum(axis=1).max() == pytest.approx(3.4578313253, abs=2e-10)
    assert found.upper.sum(axis=0).max() == pytest.approx(2.8162650602, abs=2e-10)
    assert np.linalg.norm(found.upper, 2) == pytest.approx(2.6975006800, abs=2e-10)
    assert np.all(found.lower <= found.upper) and found.width < 1e-12
    peaks = state_peaks(unit).offers_takes  # the general engine knows nothing of positivity
    assert np.all(found.lower <= peaks.upper) and np.all(peaks.lower <= found.upper)
    assert static_gains(replace(unit, A=unit.A.scaled(-1))) is None
    assert static_gains(replace(unit, H=M([[1, -1, 0]]))) is None


def test_enclosures_of_static_gains_hold_in_rationals() -> None:
    rng = np.random.default_rng(5)
    A = rng.integers(0, 9, (40, 3, 3)) / 16 - 2.0 * np.eye(3)
    D, H = rng.integers(0, 5, (3, 2)) / 4, rng.integers(0, 5, (2, 3)) / 4
    found = statics(A, D[None], H)
    assert found.ok.all()
    for k in range(40):
        B = ExactMatrix.of([[Fraction(v) for v in row] for row in A[k]], (3, 3))
        det = _det(B)
        for i in range(2):
            for j in range(2):
                wide = [[*B.rows[r], Fraction(D[r, j])] for r in range(3)] + [[*map(Fraction, H[i]), Fraction(0)]]
                exact = _det(ExactMatrix.of(wide, (4, 4))) / det  # Schur: H (-A)^{-1} D
                assert Fraction(found.lower[k, i, j]) <= exact <= Fraction(found.upper[k, i, j])
    assert not statics(np.array([[[0.1]]]), np.ones((1, 1, 1)), np.ones((1, 1))).ok[0]


def _det(matrix: ExactMatrix) -> Fraction:
    if matrix.shape[0] == 1:
        return matrix[0, 0]
    rest = [
        ExactMatrix.of([r[:j] + r[j + 1 :] for r in matrix.rows[1:]], (matrix.shape[0] - 1,) * 2)
        for j in range(matrix.shape[0])
    ]
    return sum(((-1) ** j * matrix[0, j] * _det(m) for j, m in enumerate(rest)), Fraction(0))


@pytest.mark.parametrize("seed", range(4))
def test_columns_reach_the_optimum_of_the_linear_program(seed: int) -> None:
    """The program is feasible a little above the radius of the columns and infeasible a little below it."""
    rng = np.random.default_rng(seed)
    kinds = []
    for k in range(2):
        A = rng.uniform(0, 0.4, (3, 3)).round(2) - np.diag(rng.uniform(0.9, 2, 3).round(2))
        B = rng.uniform(-1, 1, (3, 1)).round(2)
        kinds.append(kind_of(A.tolist(), B.tolist(), [[1], [0], ["0.3"]], [[1, "0.5", 0]], f"k{k}"))
    links = tuple(
        Link(f"l{i}{j}", f"k{j}", "z0", (1,), f"k{i}", "v0", Fraction(f"{rng.uniform(0.1, 0.6):.2f}"))
        for i in range(2)
        for j in range(2)
    )
    network = Network("Invented pair", tuple(kinds), links, Goal())
    design = positive_design(network, kmax=1)
    assert design.gains is not None and design.method == "columns"
    web = web_of(network, 1)
    cells, judged = _by_columns(web, lambda _: None)
    blocks, units = opened(web)
    reference, _ = _reference(web, cells, units)
    assert solve_program(web, blocks, units, reference, judged.upper * 1.001) is not None
    assert solve_program(web, blocks, units, reference, judged.upper * 0.999) is None
    radius = assemble(network, design.gains).radius()  # from peak gains that know nothing of positivity
    assert radius.lower <= design.upper and design.lower <= radius.upper


def test_columns_beat_an_independent_search() -> None:
    """Nelder-Mead over gains with positive loops, many starts, never passes the columns and comes within 1 %."""
    kind = kind_of(
        [["-0.3", "0.4", "0.1"], ["0.2", "-0.6", "0.3"], ["0.1", "0.2", "-0.5"]], [[1], ["-0.4"], ["0.1"]],
        [[1], [0], ["0.5"]], [[1, 0, "0.2"]],
    )  # fmt: skip
    network = pattern(kind, (0, 0, "0.2"))
    best = positive_design(network, kmax="0.8").upper  # type: ignore[arg-type]
    A, B, D, H = (getattr(kind, name).floats() for name in "ABDH")

    def radius(k: Array) -> float:
        k = np.clip(k, -0.8, 0.8)
        closed = A + B @ k[None]
        off = closed - np.diag(np.diag(closed))
        if off.min() < 0 or np.linalg.eigvals(closed).real.max() >= 0:
            return float(10 - off.min() + max(np.linalg.eigvals(closed).real.max(), 0))
        return float(0.2 * (H @ np.linalg.solve(-closed, D)).item())

    rng = np.random.default_rng(1)
    found = min(
        minimize(radius, rng.uniform(-0.8, 0.8, 3), method="Nelder-Mead", options={"maxfev": 1500}).fun
        for _ in range(12)
    )
    assert best <= found * (1 + 1e-9)
    assert found <= best * 1.01


@pytest.mark.parametrize(("inputs", "offers"), [(2, 1), (1, 2), (2, 2)])
def test_several_actuators_and_offers(inputs: int, offers: int) -> None:
    """Against the linear program, whose feasibility does not know how the gains were found."""
    B: list[list[int | float | str | Fraction]] = [[1, "0.2"], ["0.1", "-0.5"]]
    H: list[list[int | float | str | Fraction]] = [[1, 0], ["0.2", 1]]
    A: Table = [["-0.8", "0.5"], ["0.4", "-0.9"]]
    kind = kind_of(A, [row[:inputs] for row in B], [[1, 0], [0, 1]], H[:offers])
    links = [(0, 0, "0.3"), (1, 0, "0.2")] + ([(0, 1, "0.25"), (1, 1, "0.1")] if offers == 2 else [])
    network = pattern(kind, *links)
    design = positive_design(network, kmax="1/2")  # type: ignore[arg-type]
    web = web_of(network, Fraction(1, 2))
    cells, judged = _by_columns(web, lambda _: None)
    blocks, units = opened(web)
    reference, _ = _reference(web, cells, units)
    assert design.upper == judged.upper
    assert solve_program(web, blocks, units, reference, judged.upper * 1.002) is not None
    assert solve_program(web, blocks, units, reference, judged.upper * 0.998) is None


def test_limits_bind_and_are_kept() -> None:
    """With a limit on heat the columns break it; the gains from the program keep it, with the sizes proven."""
    network = thermal(grid(4), 16, limit="0.015")
    free = positive_design(thermal(grid(4), 16), kmax="1/5")  # type: ignore[arg-type]
    design = positive_design(network, kmax="1/5", smallest=False)  # type: ignore[arg-type]
    assert (free.method, design.method) == ("columns", "linear program")
    assert not design.broken and design.reached and free.upper < design.upper <= 0.9
    assert np.all(np.isfinite(design.sizes)) and design.gains is None
    # The worst disturbance of a positive network is the constant one: its rest state must stay within the sizes.
    web = web_of(network, Fraction(1, 5))
    rest = _rest(web, design)
    assert np.all(rest <= design.sizes * (1 + 1e-9)) and rest.max() > 0.99 * design.sizes.max()
    impossible = positive_design(thermal(grid(4), 16, limit="0.0001", target="0.5"), kmax="1/5", smallest=False)  # type: ignore[arg-type]
    assert impossible.broken and not impossible.reached


def _rest(web: Web, design: object) -> Array:
    """Dense rest state under the constant disturbance, assembled unit by unit from the exact gains."""
    network, members = web.network, web.network.members
    assert members is not None
    total = 2 * len(members.names)
    A, w = np.zeros((total, total)), np.zeros(total)
    to, source, link = members.expanded()
    for i, name in enumerate(members.names):
        kind = network.kinds[members.kind[i]]
        K = design.of(name).K.floats()  # type: ignore[attr-defined]
        A[2 * i : 2 * i + 2, 2 * i : 2 * i + 2] = kind.A.floats() + kind.B.floats() @ K
        w[2 * i] = 0.02
    for i, j, k in zip(to, source, link, strict=True):
        g = float(network.links[k].strength)
        A[2 * i, 2 * j] += g
        A[2 * i, 2 * i] -= g
    return np.asarray(np.linalg.solve(-A, w))


def test_the_smallest_radius_under_limits_is_the_same_both_ways() -> None:
    """A band that never binds closes the fast way, so HiGHS must reach what the local programs reach."""
    network = thermal(grid(3), 9, limit="0.015")
    kinds = tuple(replace(k, states=(k.states[0], replace(k.states[1], band=Fraction(9)))) for k in network.kinds)
    wide = replace(network, kinds=kinds)
    assert separable(web_of(network, 1)) and not separable(web_of(wide, 1))
    one, other = (positive_design(n, kmax=Fraction(1, 5)) for n in (network, wide))
    assert one.method == other.method == "linear program" and not one.broken and not other.broken
    assert one.upper == pytest.approx(other.upper, rel=1e-3)
    assert one.upper <= positive_design(network, kmax=Fraction(1, 5), smallest=False).upper * (1 + 1e-6)


@pytest.mark.parametrize("limit", ["0.012", "0.015", "0.018", "0.0165"])
def test_the_program_taken_apart_equals_the_program(limit: str) -> None:
    """Feasibility agrees, and the least sizes are those of the one large program."""
    network = thermal(grid(5), 25, seed=3, limit=limit)
    web = web_of(network, Fraction(1, 5))
    assert separable(web)
    cells, _ = _by_columns(web, lambda _: None)
    A, units = opened(web)
    reference, forced = _reference(web, cells, units)
    both = set()
    for weaker in (0.95, 0.8, 0.5, 0.4):
        apart = least_sizes(web, A, units, forced, weaker)
        whole = solve_program(web, A, units, reference, weaker)
        assert (apart is None) == (whole is None)
        both.add(apart is None)
        if apart is not None and whole is not None:
            assert np.allclose(apart.xi[::2], whole.xi[::2], rtol=1e-5)
    assert both == {True, False}


@pytest.mark.parametrize(
    ("name", "nodes", "edges"),
    [("ky4", 964, 1137), pytest.param("Net6", 3356, 3830, marks=pytest.mark.long)],
)
def test_a_thermal_network_on_a_published_graph(name: str, nodes: int, edges: int) -> None:
    """Water networks that wntr 1.5.0 (revised BSD) ships, as graphs; the thermal data on them is invented."""
    wntr = pytest.importorskip("wntr")
    file = next(Path(wntr.__file__).parent.rglob(f"{name}.inp"))
    graph = nx.Graph(wntr.network.WaterNetworkModel(str(file)).to_graph().to_undirected())
    place = {node: i for i, node in enumerate(graph.nodes)}
    assert (len(place), len(graph.edges)) == (nodes, edges)
    edges_by_number = np.array([(place[a], place[b]) for a, b in graph.edges])
    network = thermal(edges_by_number, len(place))
    design = positive_design(network, kmax="1/5")  # type: ignore[arg-type]
    assert design.reached and design.upper - design.lower <= 1e-6 * design.upper
    # Perron root by another way: static gains as written, sparse matrix, ARPACK.
    assert design.upper == pytest.approx(_perron(network, design), rel=1e-6)
    web = web_of(network, Fraction(1, 5))
    cells, _ = _by_columns(web, lambda _: None)
    blocks, units = opened(web)
    _, forced = _reference(web, cells, units)
    assert judge(web, cells).upper == design.upper
    assert least_sizes(web, blocks, units, forced, design.upper * 1.01) is not None
    assert least_sizes(web, blocks, units, forced, design.upper * 0.99) is None


def _perron(network: Network, design: object) -> float:
    from scipy.sparse import coo_array
    from scipy.sparse.linalg import eigs

    members = network.members
    assert members is not None
    own = np.zeros(len(members.names))
    strength = np.array([float(link.strength) for link in network.links])
    to, source, link = members.expanded()
    np.add.at(own, to, strength[link])
    p = np.empty(len(own))
    for i, name in enumerate(members.names):
        kind = network.kinds[members.kind[i]]
        A = kind.A.floats() + kind.B.floats() @ design.of(name).K.floats()  # type: ignore[attr-defined]
        A[0, 0] -= own[i]
        p[i] = np.linalg.solve(-A, [1.0, 0.0])[0]
    matrix = coo_array((p[to] * strength[link], (to, source)), shape=(len(own),) * 2).tocsr()
    return float(abs(eigs(matrix, k=1, which="LR", v0=np.ones(len(own)), tol=1e-10)[0][0]))


def test_what_is_not_positive_is_refused_with_reasons() -> None:
    reasons = positivity(convoy(), Fraction(1, 10)).reasons
    assert len(reasons) == 1 and "pulls" in reasons[0]
    assert positivity(thermal(grid(2), 4), 1).possible
    network = thermal(grid(2), 4)
    with pytest.raises(InputError, match="no bound, and the radius falls for ever"):
        positive_design(network)
    with pytest.raises(InputError, match="kmax must be above zero"):
        positive_design(network, kmax=0)
    with pytest.raises(InputError, match="between 0 and 1"):
        positive_design(network, target=1.5, kmax=1)
    kinds = tuple(replace(k, H=M([[1, -1]])) for k in network.kinds)
    assert "difference of states" in positivity(replace(network, kinds=kinds), 1).reasons[0]
    weak = replace(network, links=tuple(replace(link, weakens=True) for link in network.links))
    assert "may weaken" in positivity(weak, 1).reasons[0]


def test_results_are_plain_and_name_units() -> None:
    design = positive_design(thermal(grid(2), 4), kmax="1/5")  # type: ignore[arg-type]
    document = design.as_json()
    assert document["reached"] and document["cautions"] and set(document) >= {"gains", "radius", "target"}
    assert design.of("z1") == design.of(1)
    assert "Gains, u = K y" in design.as_text()
    with pytest.raises(InputError, match="no unit 'nobody'"):
        design.of("nobody")
    with pytest.raises(InputError, match="no unit number 9"):
        design.of(9)


def test_exact_zeros_of_the_loop_stay_zero() -> None:
    """The best gain cancels a coupling exactly; a rounding would turn the entry negative."""
    kind = kind_of([[-1, "1/3"], ["1/7", -1]], [[1], [0]], [[1], [1]], [[1, 1]])
    design = positive_design(pattern(kind, (0, 0, "0.1")), kmax=5)
    assert design.gains is not None
    K = design.gains["unit"].K
    assert K[0, 1] == Fraction(-1, 3)
    assert positive_design(pattern(kind, (0, 0, "0.1")), kmax="1/5").gains["unit"].K[0, 1] == Fraction(-1, 5)  # type: ignore[arg-type, index]


def test_modes_out_of_bounds_are_reported() -> None:
    network = thermal(grid(2), 4)
    goal = replace(network.goal, fastest=Fraction(1, 4))
    design = positive_design(replace(network, goal=goal), kmax="1/5")  # type: ignore[arg-type]
    assert not design.reached and "not slower than 0.25" in design.broken[0]


def test_shared_sensors_split_a_gain_within_their_bounds() -> None:
    kind = zone("zone0")
    twin = replace(
        kind, sensors=(*kind.sensors, Signal("air2", "K")), C=M([[1, 0], [0, 1], [2, 0]]), N=ExactMatrix.zeros(3, 1)
    )
    link = Link("air", "zone0", "warmth", (1,), "zone0", "draught", Fraction(1, 10))
    network = Network("Invented twin sensors", (twin,), (link,), Goal())
    design = positive_design(network, kmax="1/10")  # type: ignore[arg-type]
    assert design.gains is not None
    assert design.gains["zone0"].K.rows[0][::2] == (Fraction(-1, 10), Fraction(-1, 10))
    K = ExactMatrix.of([[0, 0, 0]], (1, 3))
    assert assemble(network, Gains((gain_set(twin, K),))).radius().upper > design.upper


def test_shared_gains_and_other_aims_are_refused() -> None:
    network = thermal(grid(2), 4)
    together = replace(network, kinds=tuple(replace(kind, group="zone") for kind in network.kinds))
    with pytest.raises(InputError, match="carry one gain set together"):
        positive_design(together, kmax=1)
    with pytest.raises(InputError, match="aim is 'effort'"):
        positive_design(replace(network, goal=replace(network.goal, aim="effort")), kmax=1)


@pytest.mark.long
@pytest.mark.parametrize(("wall", "mass", "best"), [("0.2", "0.2", -0.2), ("0.1", "0.12", -0.1)])
def test_the_general_design_finds_the_same_radius(wall: str, mass: str, best: float) -> None:
    """The descent on exact peak gains, which may leave the positive loops, gains nothing by it here: within 1 %."""
    kind = zone("zone0", wall)
    link = Link("air", "zone0", "warmth", (-1,), "zone0", "draught", Fraction(1, 10), Fraction(1, 10))
    bounds = {"zone0": {"heat": {"air": Fraction(1, 5), "mass": Fraction(mass)}}}
    network = Network(
        "Invented row of zones", (kind,), (link, replace(link, at=(1,))), Goal(Fraction(9, 10), gain_bounds=bounds)
    )
    positive, general = positive_design(network), make_design(network, starts=4, check_obstruction=False)
    assert positive.gains is not None and float(positive.gains["zone0"].K[0, 1]) == best
    assert positive.lower <= general.upper <= positive.upper * 1.01
