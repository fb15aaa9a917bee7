"""Largest tolerable coupling of networks whose limit is known from the spectrum of their graph or from perturbation."""

from __future__ import annotations

import numpy as np
import pytest

from synth.gain.window import window_radius
from synth.margin.exact import rightmost
from synth.margin.members_exact import members_loop
from synth.margin.ranges import stable_ranges
from synth.margin.symbol import loop_family
from tests.build import scalar_kind
from tests.gain.windows import Floats, graph, members
from tests.margin.networks import link, network_of, no_gains


def path(n: int) -> Floats:
    return np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)


def ring(n: int) -> Floats:
    A = path(n)
    A[0, -1] = A[-1, 0] = 1
    return A


def star(n: int) -> Floats:
    A = np.zeros((n + 1, n + 1))
    A[0, 1:] = A[1:, 0] = 1
    return A


def grid(n: int) -> Floats:
    return np.kron(path(n), np.eye(n)) + np.kron(np.eye(n), path(n))


def cube(d: int) -> Floats:
    return np.array([[float(bin(i ^ j).count("1") == 1) for j in range(2**d)] for i in range(2**d)])


def petersen() -> Floats:
    A = np.zeros((10, 10))
    for i in range(5):
        for a, b in ((i, (i + 1) % 5), (i, i + 5), (i + 5, (i + 2) % 5 + 5)):
            A[a, b] = A[b, a] = 1
    return A


# k_max = a/rho(adjacency) for x_i' = -a x_i + k sum of neighbours (C7, from memory; spectra in Brouwer and Haemers,
# Spectra of Graphs, 2012). Here a = 1 and today's k = 1/10.
GRAPHS = {
    "path of 10": (path(10), 1 / (2 * np.cos(np.pi / 11))),
    "ring of 9": (ring(9), 1 / 2),
    "star of 4": (star(4), 1 / 2),
    "complete 5": (np.ones((5, 5)) - np.eye(5), 1 / 4),
    "grid of 4 by 4": (grid(4), 1 / (4 * np.cos(np.pi / 5))),
    "cube of 3": (cube(3), 1 / 3),
    "Petersen": (petersen(), 1 / 3),
}


@pytest.mark.parametrize("name", GRAPHS)
def test_graphs_break_at_the_inverse_of_their_spectral_radius(name: str) -> None:
    adjacency, limit = GRAPHS[name]
    network = graph(scalar_kind(), adjacency, "0.1")
    found = stable_ranges(network, no_gains(network), low=0.5, most=8.0)
    assert len(found.ranges) == 1 and found.ranges[0].upper_certified
    assert found.ranges[0].upper <= 10 * limit <= found.first_failure
    assert found.first_failure - found.ranges[0].upper <= 1e-3 * found.first_failure


def test_printed_digits_of_the_path_and_of_the_grid() -> None:
    assert GRAPHS["path of 10"][1] == pytest.approx(0.5211085581, abs=1e-10)
    network = graph(scalar_kind(), grid(10), "0.1")
    assert 1 / (4 * np.cos(np.pi / 11)) == pytest.approx(0.2605542791, abs=1e-10)
    below, above = (members_loop(graph(scalar_kind(), grid(10), k), no_gains(network)) for k in ("0.2605", "0.2606"))
    assert below.stable_certified and below.rightmost < 0 < above.rightmost and not above.stable_certified


def test_windows_of_members_reach_the_limit_of_the_petersen_graph() -> None:
    """Units whose links are all positive lose nothing: the peak route is exact, and so is every window of it."""
    for k, holds in (("0.333", True), ("0.334", False)):
        network = graph(scalar_kind(), petersen(), k)
        for R in (0, 1):
            found = window_radius(network, no_gains(network), R, width=1e-4)
            assert found.proven == holds and (holds or found.lower >= 1)


def test_eigenvalues_of_a_string_say_nothing_about_its_margin() -> None:
    """Order 20, -1 on the diagonal, 10 below: all eigenvalues are -1, and 1e-18 in the corner gives +0.1220184543
    (C10; Malyshev and Sadkane, Journal of Computational and Applied Mathematics 102, 1999; (l + 1)^20 = 10^19 e)."""
    kind = scalar_kind()
    edges = [(i + 1, i) for i in range(19)]
    string = members(kind, edges, ["10"] * 19)
    found = members_loop(string, no_gains(string))
    assert found.rightmost == pytest.approx(-1, abs=1e-9)
    assert found.static_gain > 1e18  # what the eigenvalues hide
    closed = members(kind, [*edges, (0, 19)], [*["10"] * 19, "1e-18"])
    shaken = members_loop(closed, no_gains(closed))
    assert shaken.rightmost == pytest.approx(0.12201845430196343559, abs=1e-7)
    assert not shaken.stable_certified and shaken.static_gain == np.inf
    endless = network_of(kind, [link(kind, -1, 10)])
    root = rightmost(loop_family(endless, no_gains(endless)).at(1.0))
    assert root is not None and root.s.real == pytest.approx(9, abs=1e-6)  # the section's -1 is no hint of it
    assert stable_ranges(endless, no_gains(endless), most=2.0).first_failure == 1.0
    for R in (0, 3, 8):
        assert not window_radius(endless, no_gains(endless), R).proven
