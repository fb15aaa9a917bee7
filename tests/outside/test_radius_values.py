"""Radii against published matrices and formulas; where each comes from stands beside the check."""

from __future__ import annotations

import math

import networkx as nx
import numpy as np
import pytest

from synth.gain import GainOperator, pattern_upper_bound, peak_to_peak_gain


def operator(matrix, rows="sum"):
    matrix = np.array(matrix, dtype=float)
    to, source = np.nonzero(matrix)
    return GainOperator.from_links(len(matrix), to, source, matrix[to, source], rows)


def encloses(radius, value, slack=1e-13):
    return radius.reached and radius.lower <= value * (1 + slack) and value * (1 - slack) <= radius.upper


def max_plus_value(matrix, shift=0.0):
    """The eigenvalue of a max-plus matrix (nan: no link) is the logarithm of the radius of max rows with gains e^a."""
    matrix = np.array(matrix, dtype=float)
    to, source = np.nonzero(~np.isnan(matrix))
    op = GainOperator.from_links(len(matrix), to, source, np.exp(matrix[to, source] - shift), "max")
    return op, op.radius(1e-12)


def test_c1_and_c2_max_plus_eigenvalues_and_vectors():
    """From memory: [[2,5],[3,3]] has eigenvalue 4 and vector (1,0) (Heidergott, Olsder, van der Woude, Max Plus at
    Work, 2006); [[3,7],[2,4]] has 4.5 and (2.5,0) (Baccelli, Cohen, Olsder, Quadrat 1992)."""
    for matrix, value, vector in (([[2, 5], [3, 3]], 4, (1, 0)), ([[3, 7], [2, 4]], 4.5, (2.5, 0))):
        op, radius = max_plus_value(matrix)
        assert encloses(radius, math.exp(value))
        # Both entries lie on the loop, so that the vector is unique up to scale.
        point = np.log(radius.point) + 0.0
        assert point[0] - point[1] == pytest.approx(vector[0] - vector[1], abs=1e-8)
        assert radius.bottleneck.loop
        assert sorted(radius.bottleneck.links) == [1, 2]
        assert np.log(op(np.exp(np.array(vector, dtype=float)))) == pytest.approx(np.array(vector) + value)


def test_c3_five_by_five_examples():
    """Examples credited to the same book of 2006 (from memory), blank = no link: eigenvalues 17 and 8."""
    no = math.nan
    first = [[4, 10, 5, 1, 6], [6, 7, 13, 10, 3], [7, 12, no, no, 16], [6, 10, 8, 5, 4], [11, 9, 18, 8, 2]]
    second = [[2, no, 8, 2, 9], [6, no, no, 8, 8], [8, no, 6, 1, 5], [0, 2, 5, 3, 10], [7, 4, no, no, 6]]
    for matrix, value in ((first, 17), (second, 8)):
        _, radius = max_plus_value(matrix)
        assert encloses(radius, math.exp(value))
        entries = np.array(matrix)
        to, source = np.nonzero(~np.isnan(entries))
        loop = [float(entries[to[k], source[k]]) for k in radius.bottleneck.links]
        assert sum(loop) / len(loop) == pytest.approx(value)


def test_b8_perron_scaling():
    """From memory: radius .75668192221 of this matrix of peak gains; scaled by its Perron vector all row sums equal it
    (Khammash & Pearson, IEEE TAC 36(4), 1991; Dahleh & Diaz-Bobillo, Control of Uncertain Systems, 1995)."""
    op = operator([[0.2, 0.5, 0], [0.3, 0.1, 0.4], [0.6, 0, 0.2]])
    radius = op.radius(1e-12)
    assert radius.lower - 6e-12 <= 0.75668192221 <= radius.upper + 6e-12
    scaled = op.dense() * radius.point / radius.point[:, None]
    assert scaled.sum(axis=1) == pytest.approx(np.full(3, 0.75668192221), abs=1e-11)


@pytest.mark.parametrize(
    ("a", "b", "c", "n"), [(0.3, 0.5, 0.2, 7), (0, 2, 0.125, 30), (1, 1e-6, 1e6, 12), (0.4, 1, 1, 1)]
)
def test_c8_tridiagonal_toeplitz(a, b, c, n):
    """Noschese, Pasquini, Reichel, Numer. Linear Algebra Appl. 20, 2013 (seen): a + 2 sqrt(bc) cos(k pi/(n+1)); the
    largest is the radius."""
    matrix = a * np.eye(n) + b * np.eye(n, k=-1) + c * np.eye(n, k=1)
    assert encloses(operator(matrix).radius(1e-10), a + 2 * math.sqrt(b * c) * math.cos(math.pi / (n + 1)), 1e-12)


def test_c13_leontief():
    """From memory: consumption matrix of Lay, Linear Algebra and Its Applications (Leontief): (5 + sqrt 7)/10."""
    radius = operator([[0.5, 0.4, 0.2], [0.2, 0.3, 0.1], [0.1, 0.1, 0.3]]).radius(1e-12)
    assert encloses(radius, (5 + math.sqrt(7)) / 10)
    # Below one: production for every demand.
    assert radius.upper < 1


def test_c15_a_geometric_mean_row_is_not_ours_but_its_radius_is_bracketed():
    """From memory: f(x) = ((x1+x2)/2, sqrt(x1 x2)) has radius 1, iterates from (1, sqrt 2) tend to 1.1981402347
    (Lemmens & Nussbaum, Nonlinear Perron-Frobenius Theory, 2012; Gauss's arithmetic-geometric mean). A geometric mean
    is monotone and homogeneous but not subadditive, so it is no row of the operator. It is the least of its supporting
    sum rows: sqrt(x1 x2) = min over t of (t x1 + x2/t)/2: each of them has radius >= 1, the one at t = 1 exactly 1."""
    for t in (0.25, 0.5, 1, 2, 8):
        radius = operator([[0.5, 0.5], [t / 2, 0.5 / t]]).radius(1e-12)
        assert radius.upper >= 1
        assert (radius.lower <= 1) == (t == 1)
    # The iteration itself, with rows of the operator that support f where it stands: the value of the publication.
    x = np.array([1.0, math.sqrt(2)])
    for _ in range(8):
        t = math.sqrt(x[1] / x[0])
        x = operator([[0.5, 0.5], [t / 2, 0.5 / t]])(x)
    assert x == pytest.approx([1.1981402347] * 2, abs=6e-11)


def test_d8_m_matrix():
    """Derived from the equivalences for M-matrices (Berman & Plemmons, Nonnegative Matrices in the Mathematical
    Sciences, 1979; Araki 1978): W = D (I - M) with positive leading minors 3, 11, 24.5: the radius of M is below 1."""
    W = np.array([[3, -1, -0.5], [-1, 4, -1], [-0.5, -2, 3]])
    minors = [np.linalg.det(W[:k, :k]) for k in (1, 2, 3)]
    assert minors == pytest.approx([3, 11, 24.5])
    M = np.eye(3) - W / np.diag(W)[:, None]
    radius = operator(M).radius(1e-12)
    assert radius.lower - 6e-11 <= 0.5902302109 <= radius.upper + 6e-11
    # The other way: with the largest off-diagonal entries that break a minor the radius passes one as well.
    assert operator(M * (1 / radius.upper) * 0.999999).radius().upper < 1
    broken = np.diag(np.diag(W)) + (W - np.diag(np.diag(W))) * (1.000001 / radius.lower)
    assert np.linalg.det(broken) < 0


MAX_PLUS = np.array([[2.0, 5.0], [3.0, 3.0]])


def test_c4_powers_fall_to_the_largest_loop():
    """radius(A^(p))^(1/p) decreases to the largest cycle mean mu, and mu <= rho <= n mu: Karlin & Ost 1985; Friedland
    1986; Elsner, Johnson, Dias da Silva 1988 (seen). Matrix: exp of the max-plus example in Heidergott, Olsder, van der
    Woude, Max Plus at Work, 2006 (from memory), whose eigenvalue is 4."""
    values = []
    for p, digits in ((1, 68.70327), (2, 56.70158), (4, 54.72554)):
        radius = operator(np.exp(p * MAX_PLUS)).radius(1e-11)
        values.append(radius.upper ** (1 / p))
        assert values[-1] == pytest.approx(digits, abs=6e-6)
    loop = operator(np.exp(MAX_PLUS), "max").radius(1e-11)
    assert encloses(loop, math.exp(4))
    assert values[0] > values[1] > values[2] > loop.upper
    assert loop.lower <= values[0] <= 2 * loop.upper
    # p = 2 is what rows that are roots of sums of squares do.
    assert encloses(operator(np.exp(MAX_PLUS), "root_sum_square").radius(1e-11), values[1], 1e-10)


@pytest.mark.parametrize(("rows", "p"), [("sum", 1), ("root_sum_square", 2), ("max", math.inf)])
@pytest.mark.parametrize("n", [3, 4, 9])
def test_c5_rings_and_paths(rows, p, n):
    """Derived: a ring with gain g to both neighbours has 2^{1/p} g for every size, a path g (2 cos(pi/(n+1)))^{1/p}."""
    g = 0.4
    ring = np.zeros((n, n))
    for i in range(n):
        ring[i, (i + 1) % n] = ring[i, i - 1] = g
    path = g * (np.eye(n, k=1) + np.eye(n, k=-1))
    assert encloses(operator(ring, rows).radius(1e-10), g * 2 ** (1 / p))
    assert encloses(operator(path, rows).radius(1e-10), g * (2 * math.cos(math.pi / (n + 1))) ** (1 / p))


GRAPHS = [
    ("path", nx.path_graph(10), 1 / (2 * math.cos(math.pi / 11))),
    ("ring", nx.cycle_graph(7), 1 / 2),
    ("star", nx.star_graph(6), 1 / math.sqrt(6)),
    ("complete", nx.complete_graph(5), 1 / 4),
    ("grid", nx.grid_2d_graph(10, 10), 1 / (4 * math.cos(math.pi / 11))),
    ("cube", nx.hypercube_graph(4), 1 / 4),
    ("Petersen", nx.petersen_graph(), 1 / 3),
]


@pytest.mark.parametrize(("name", "graph", "per_rate"), GRAPHS, ids=[g[0] for g in GRAPHS])
def test_c7_largest_coupling_on_named_graphs(name, graph, per_rate):
    """From memory: x_i' = -a x_i + k sum of neighbours is stable below k = a/rho(Adjacency); spectra in Brouwer &
    Haemers, Spectra of Graphs, 2012. All signs are positive, so the class limit 1/radius is the true limit."""
    a = 3
    peak = peak_to_peak_gain([[-a]], [[1]], [[1]], width=1e-12)
    graph = nx.convert_node_labels_to_integers(graph).to_directed()
    to, source = zip(*graph.edges, strict=True)
    limits = []
    for p in (peak.upper[0, 0], peak.lower[0, 0]):
        radius = GainOperator.from_links(len(graph), to, source, [p] * len(to)).radius(1e-11)
        limits += [1 / radius.upper, 1 / radius.lower]
    assert limits[0] <= a * per_rate * (1 + 1e-13)
    assert limits[3] >= a * per_rate * (1 - 1e-13)
    assert limits[3] - limits[0] < 1e-9


def test_c7_digits():
    """Same source, digits by our own run: path of 10 and 10 x 10 grid at a = 1."""
    assert GRAPHS[0][2] == pytest.approx(0.5211085581, abs=6e-11)
    assert GRAPHS[4][2] == pytest.approx(0.2605542791, abs=6e-11)


def test_c10_a_finite_section_says_nothing_about_the_margin():
    """Malyshev & Sadkane, JCAM 102, 1999 (seen): order 20, -1 on the diagonal, 10 below: every eigenvalue is -1, and
    1e-18 in the corner moves one to +0.12201845430196343559. As a network: units x' = -x + v in a one-way chain with
    links of strength 10. The section's operator has radius 0, the endless pattern has 10."""
    peak = peak_to_peak_gain([[-1]], [[1]], [[1]], width=1e-12)
    gain = 10 * peak.upper[0, 0]
    section = GainOperator.from_links(20, range(1, 20), range(19), [gain] * 19).radius()
    assert (section.lower, section.upper) == (0.0, 0.0)
    # The quotient of the pattern on one cell: the unit listens to its own kind.
    pattern = GainOperator.from_links(1, [0], [0], [gain]).radius()
    assert pattern.lower == pytest.approx(10, rel=1e-11)
    assert pattern_upper_bound([-1], [10]) == 10
    # All links are positive, so the eigenvalue is radius - 1: the corner closes a loop of gain 10^19 1e-18.
    ring = GainOperator.from_links(20, [*range(1, 20), 0], range(20), [10.0] * 19 + [1e-18]).radius(1e-12)
    assert ring.lower - 1 <= 0.12201845430196343559 + 1e-15
    assert ring.upper - 1 >= 0.12201845430196343559 - 1e-15
    assert ring.reached


def test_c11_leslie():
    """From memory: textbook Leslie matrix, growth 3/2 with the stable ages (1, 1/3, 1/18)."""
    op = operator([[0, 4, 3], [0.5, 0, 0], [0, 0.25, 0]])
    radius = op.radius(1e-12)
    assert encloses(radius, 1.5)
    assert radius.point == pytest.approx([1, 1 / 3, 1 / 18], rel=1e-10)


def test_c12_loggerhead_turtles():
    """Crouse, Crowder, Caswell, Ecology 68, 1987, seven stages (matrix seen; digits our own, cut not rounded)."""
    matrix = np.diag([0, 0.7370, 0.6610, 0.6907, 0, 0, 0.8089]) + np.diag(
        [0.6747, 0.0486, 0.0147, 0.0518, 0.8091, 0.8091], -1
    )
    matrix[0] = [0, 0, 0, 0, 127, 4, 80]
    radius = operator(matrix).radius(1e-12)
    assert radius.reached
    assert 0.9450309806 <= radius.lower <= radius.upper < 0.9450309807
    assert max(abs(np.linalg.eigvals(matrix))) == pytest.approx(radius.upper, rel=1e-10)


def test_c14_collatz_wielandt_brackets():
    """Collatz-Wielandt quotients of [[2,1,0],[1,3,1],[0,1,4]] along G^k(1) (derived; the theorem is Collatz 1942 and
    Wielandt 1950): they close on 3 + sqrt 3."""
    op = operator([[2, 1, 0], [1, 3, 1], [0, 1, 4]])
    s = np.ones(3)
    for low, high in ((3, 5), (3.6667, 5), (4.0909, 4.92), (4.3333, 4.8537)):
        assert op.lower_bound(s) == pytest.approx(low, abs=6e-5)
        assert op.upper_bound(s) == pytest.approx(high, abs=6e-5)
        s = op(s)
    assert encloses(op.radius(1e-12), 3 + math.sqrt(3))
