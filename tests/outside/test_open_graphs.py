"""Radii of open networks that come inside registry packages: power, water, roads, states, a club.

x_i' = -a x_i + k sum of neighbours has the class limit k = a / rho(Adjacency) (Brouwer & Haemers, Spectra of Graphs,
2012, for the spectra), so rho(Adjacency) is the radius of a sum-row operator with a link of gain 1 per neighbour. The
largest eigenvalue of the Laplacian L = D - A is no radius of such an operator: L has negative entries. Where it can
honestly be had from one, it is: c I - L is non-negative for c >= largest degree, and gives the *smallest* eigenvalue;
the signless D + A is non-negative and similar to L for bipartite graphs only, otherwise its radius lies above. So the
non-bipartite values below are checked as what can be proven: lambda_max(L) <= radius(D + A), with equality exactly for
bipartite graphs (Brouwer & Haemers, prop. 1.3.10), and the value itself by a sparse eigenvalue solver as a check of the
graph, not of the package.

Values: our own runs on pandapower 3.3.3 (BSD), wntr 1.5.0 (revised BSD), libpysal 4.14.1 (BSD) and networkx, each graph
taken without weights. Run with the extra ``graphs``; a package that is missing is skipped by name.
"""

from __future__ import annotations

import contextlib
import importlib
import math
import warnings
from pathlib import Path

import networkx as nx
import numpy as np
import pytest
import scipy.sparse.linalg

from synth.gain import GainOperator


def power(name):
    pytest.importorskip("pandapower")
    networks = importlib.import_module("pandapower.networks")
    topology = importlib.import_module("pandapower.topology")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        grid = getattr(networks, name)()
        return nx.Graph(topology.create_nxgraph(grid, multi=False))


def water(name):
    pytest.importorskip("wntr")
    wntr = importlib.import_module("wntr")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        path = Path(wntr.__file__).parent / "library" / "networks" / f"{name}.inp"
        return nx.Graph(wntr.network.WaterNetworkModel(str(path)).to_graph().to_undirected())


def states():
    pytest.importorskip("libpysal")
    libpysal = importlib.import_module("libpysal")
    with warnings.catch_warnings(), contextlib.ExitStack() as stack:
        warnings.simplefilter("ignore")
        file = stack.enter_context(contextlib.closing(libpysal.io.open(libpysal.examples.get_path("states48.gal"))))
        neighbours = file.read().neighbors
    return nx.Graph((a, b) for a, near in neighbours.items() for b in near)


def simple(graph):
    graph = nx.convert_node_labels_to_integers(graph)
    graph.remove_edges_from(list(nx.selfloop_edges(graph)))
    return graph


def adjacency(graph):
    to, source = np.array(list(graph.to_directed().edges)).T
    return GainOperator.from_links(len(graph), to, source, np.ones(to.size))


def signless(graph):
    """D + A: every unit listens to its neighbours and, once per neighbour, to itself."""
    to, source = np.array(list(graph.to_directed().edges)).T
    return GainOperator.from_links(len(graph), np.append(to, to), np.append(source, to), np.ones(2 * to.size))


def laplacian_top(graph):
    matrix = nx.laplacian_matrix(graph, weight=None).astype(float)
    if matrix.shape[0] < 50:
        return float(np.linalg.eigvalsh(matrix.toarray())[-1])
    start = np.random.default_rng(0).uniform(0.5, 1, matrix.shape[0])
    return float(scipy.sparse.linalg.eigsh(matrix, 1, which="LA", v0=start, return_eigenvectors=False)[0])


LARGE = ("case9241", lambda: power("case9241pegase"), (9241, 14207), 28.738124, 42.090034, 6e-7)
CASES = [
    ("case9", lambda: power("case9"), (9, 9), math.sqrt(5), 3 + math.sqrt(3), 1e-12),
    ("case39", lambda: power("case39"), (39, 46), 2.780256, 6.406128, 6e-7),
    ("case118", lambda: power("case118"), (118, 179), 4.105303, 10.391198, 6e-7),
    pytest.param(*LARGE, marks=pytest.mark.long),
    ("Net3", lambda: water("Net3"), (97, 119), 3.071601, 6.094333, 6e-7),
    ("ky4", lambda: water("ky4"), (964, 1137), 3.119078, 6.695364, 6e-7),
    ("Net6", lambda: water("Net6"), (3356, 3830), 3.099507, 6.888160, 6e-7),
    ("us48", states, (48, 107), 5.407487, 9.936721, 6e-7),
]
NAMES = ["case9", "case39", "case118", "case9241", "Net3", "ky4", "Net6", "us48"]


@pytest.mark.parametrize(("name", "load", "count", "rho", "top", "digits"), CASES, ids=NAMES)
def test_radius_of_the_adjacency_and_what_the_laplacian_allows(name, load, count, rho, top, digits):
    graph = simple(load())
    assert (len(graph), graph.number_of_edges()) == count
    radius = adjacency(graph).radius(1e-10)
    assert radius.reached
    assert radius.lower - digits <= rho <= radius.upper + digits
    above = signless(graph).radius(1e-10)
    found = laplacian_top(graph)
    assert found == pytest.approx(top, abs=max(digits, 1e-9))
    bipartite = nx.is_bipartite(graph)
    if bipartite and nx.is_connected(graph):
        assert above.lower - digits <= top <= above.upper + digits
    else:
        assert above.upper >= top - digits
        assert not nx.is_connected(graph) or above.lower > top + 1e-9
    print(f"{name} was run: radius in [{radius.lower:.9f}, {radius.upper:.9f}], bipartite: {bipartite}")


def test_karate_club():
    """Zachary 1977, inside networkx: 34 members, 78 ties, unweighted."""
    graph = simple(nx.karate_club_graph())
    assert (len(graph), graph.number_of_edges()) == (34, 78)
    radius = adjacency(graph).radius(1e-12)
    assert radius.lower - 6e-7 <= 6.725698 <= radius.upper + 6e-7
    assert radius.reached


@pytest.mark.parametrize("cube", [3, 4])
def test_bipartite_laplacians_are_radii(cube):
    """lambda_max(L) of the d-cube is 2d (Brouwer & Haemers, section 1.4.6), bipartite: exactly the radius of D + A; a
    path has 2 + 2 cos(pi/n) (section 1.4.4)."""
    found = signless(simple(nx.hypercube_graph(cube))).radius(1e-12)
    assert found.lower <= 2 * cube <= found.upper
    n = 9
    path = signless(nx.path_graph(n)).radius(1e-12)
    value = 2 + 2 * math.cos(math.pi / n)
    assert path.lower <= value * (1 + 1e-15)
    assert value * (1 - 1e-15) <= path.upper


def test_complement_form_gives_the_smallest_eigenvalue():
    """c I - L is non-negative for c >= largest degree; its radius is c minus the smallest eigenvalue of L, zero: it
    says nothing about the largest one."""
    graph = simple(nx.karate_club_graph())
    to, source = np.array(list(graph.to_directed().edges)).T
    degree = np.bincount(to, minlength=34)
    i = np.arange(34)
    c = 17
    op = GainOperator.from_links(34, np.append(to, i), np.append(source, i), np.append(np.ones(to.size), c - degree))
    radius = op.radius(1e-12)
    assert radius.lower <= c <= radius.upper
