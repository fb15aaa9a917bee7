"""The window route: the theory's numbers, the slow truth, what is a proof and what is not."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction
from itertools import pairwise

import numpy as np
import pytest
import scipy.linalg

from synth.base.errors import InputError, UnstableLoop
from synth.base.exact import ExactMatrix
from synth.gain import network_radius
from synth.gain.window import (
    Closure,
    Knowledge,
    grown_radius,
    link_swing,
    swing_matrix,
    window_constants,
    window_factor,
    window_peaks,
    window_radius,
)
from synth.gain.window.build import build_window
from synth.gain.window.covering import Drift
from synth.gain.window.doubles import doubles_of
from synth.gain.window.integrals import absolute_integrals
from synth.gain.window.nominal import window_swing
from synth.gain.window.norm import guessed_norm, rightmost_real, verified_norm
from synth.gain.window.places import places_of
from synth.gain.window.trajectory import DEGREE
from synth.margin.exact import rightmost
from synth.margin.nearly_exact import window_margin
from synth.margin.ranges import stable_ranges
from synth.margin.symbol import loop_family
from synth.network.layout import Edge
from synth.network.model import Network
from synth.proof import prove
from tests.build import convoy, convoy_gains, scalar_kind
from tests.gain.windows import (
    edge_mode,
    graph,
    ladder,
    lattice,
    literal_window,
    members,
    random_line,
    skew,
    slow_integrals,
    slow_radius,
)
from tests.margin.networks import chain, interrupted, kind_of, link, network_of, no_gains, oscillator, oscillators


def radius(network: Network, R: int, **settings: object):  # type: ignore[no-untyped-def]
    return window_radius(network, no_gains(network), R, **settings)


def springs(k: str) -> Network:
    """x'' + .1 x' + x = k (left - 2x + right), own part kept at the windows' edge."""
    return oscillators(k, k)


# Where the proof first fails, to the digits printed in theory (20): below them it holds, above them it does not.
FIRST_FAILURES = [
    (oscillators, 0, ".03915", ".03925"),
    (oscillators, 4, ".2065", ".2075"),
    (oscillators, 8, ".3255", ".3265"),
    (springs, 0, ".04075", ".04085"),
    (springs, 4, ".2565", ".2575"),
    (springs, 8, ".4725", ".4735"),
    (skew, 0, ".495", ".505"),
    (skew, 4, "2.515", "2.525"),
    (skew, 8, "4.065", "4.075"),
    (ladder, 0, ".1565", ".1575"),
    (ladder, 4, ".8305", ".8315"),
]


@pytest.mark.parametrize(("made", "R", "below", "above"), FIRST_FAILURES)
def test_first_failure_of_the_proof_to_the_printed_digits(
    made: Callable[[str], Network], R: int, below: str, above: str
) -> None:
    good, bad = radius(made(below), R), radius(made(above), R)
    assert good.proven and good.guaranteed
    assert bad.guaranteed and bad.lower >= 1 and not bad.proven


def test_ladder_radius_is_not_monotone_and_six_is_proven() -> None:
    """Theory (20): with R = 4 the radius is 1.62 at k = 1.5 and 1.45 at 6; with R = 8 every k tried is proven."""
    assert radius(ladder("1.5"), 4).lower == pytest.approx(1.62, abs=5e-3)
    assert radius(ladder(6), 4).upper == pytest.approx(1.45, abs=5e-3)
    assert radius(ladder(6), 8).proven
    found = window_factor(ladder(1), no_gains(ladder(1)), R=6, most=6.0)
    assert found.proven == 6.0 and found.capped and found.monotone and not found.radius_monotone


@pytest.mark.parametrize("R", [0, 1, 3])
@pytest.mark.parametrize("seed", range(4))
def test_small_windows_against_the_dense_exponential(seed: int, R: int) -> None:
    """Two engines, and the radius by Simpson's rule on windows that are written down cell by cell."""
    network = random_line(np.random.default_rng(seed))
    found = radius(network, R, method="sparse", closure=Closure())
    A, _, _ = literal_window(network, R)
    assert found.stable == (np.linalg.eigvals(A).real.max() < 0)
    if not found.stable:
        return
    assert found.guaranteed
    truth = slow_radius(network, R)
    assert found.lower * (1 - 1e-3) <= truth <= found.upper * (1 + 1e-3)
    assert found.upper - found.lower <= 1e-5 * found.upper
    if found.states <= 15:
        other = radius(network, R, method="exact", closure=Closure())
        assert max(found.lower, other.lower) <= min(found.upper, other.upper)
        assert other.upper - other.lower <= 1e-5 * other.upper


def test_every_kernel_of_a_plane_window_against_the_dense_exponential() -> None:
    network = lattice("0.15", "0.1")
    places = places_of(network, no_gains(network))
    window = build_window(places, places.centres[0], 2)
    A = np.zeros((window.size, window.size))
    for i, row in enumerate(window.A):
        for j, value in row.items():
            A[i, j] = float(value)
    assert window.size == 26
    cells = [place[1:] for place in window.places]
    adjacency = np.array([[abs(a[0] - b[0]) + abs(a[1] - b[1]) == 1 for b in cells] for a in cells], dtype=float)
    unit, column, row = np.array([[0, 1], [-1.4, -0.1]]), np.array([[0], [1]]), np.array([[1, 0]])
    assert np.allclose(A, np.kron(np.eye(13), unit) + 0.15 * np.kron(adjacency, column @ row), atol=1e-14)
    columns = np.zeros((window.size, len(window.inlets)))
    for e, entries in enumerate(window.columns):
        for i, value in entries.items():
            columns[i, e] = float(value)
    rows = np.zeros((1, window.size))
    rows[0, 0] = 1.0
    found = window_peaks(window, width=1e-6, method="sparse")
    truth = slow_integrals(A, rows, columns)
    assert found.guaranteed
    assert np.all(found.lower <= truth * (1 + 1e-3)) and np.all(truth <= found.upper * (1 + 1e-3))
    assert len(window.entering) == 4 * 3 + 8 * 2 - 8  # corners hear three from outside, the other edge units two


def test_estimates_are_not_proofs() -> None:
    network = oscillators("0.1")
    guess, sure = radius(network, 4, method="estimate"), radius(network, 4)
    assert not guess.guaranteed and not guess.proven and (guess.lower, guess.upper) == (0.0, np.inf)
    assert guess.above is None and "not guaranteed" in repr(guess)
    assert guess.estimate == pytest.approx(sure.upper, rel=1e-4)
    assert sure.proven and sure.upper < 1


def test_norm_is_verified_or_not_given() -> None:
    network = oscillators("0.45")
    places = places_of(network, no_gains(network))
    system = doubles_of(build_window(places, places.centres[0], 4))
    assert system is not None
    norm = verified_norm(system, rightmost_real(system))
    assert norm is not None and norm.guaranteed and norm.P is not None
    A = system.A.toarray()
    assert np.linalg.eigvalsh(A.T @ norm.P + norm.P @ A + 2 * norm.rate * norm.P).max() < 0
    assert 1 / norm.dual**2 <= np.linalg.eigvalsh(norm.P).min()
    assert np.all(norm.columns**2 >= np.einsum("ij,ik,kj->j", system.D.toarray(), norm.P, system.D.toarray()))
    unstable = doubles_of(build_window(places_of(oscillators("0.6"), no_gains(network)), places.centres[0], 4))
    assert unstable is not None
    # What the eigenvalues say is a guide; a wrong guide must not lead to a norm.
    assert verified_norm(unstable, -0.01) is None
    assert not guessed_norm(system, -0.1).guaranteed


def test_integrals_of_polynomials_against_fine_sums() -> None:
    rng = np.random.default_rng(5)
    coefficients = rng.normal(size=(40, DEGREE + 1)) / (1 + np.arange(DEGREE + 1)) ** 2
    coefficients[0] = 0.0
    coefficients[1] = np.eye(DEGREE + 1)[1] - 0.5 * np.eye(DEGREE + 1)[0]  # u - 1/2: integral of the modulus 1/4
    low, high = absolute_integrals(coefficients, 1.0, np.zeros(40), 10, np.zeros(40))
    u = (np.arange(200_000) + 0.5) / 200_000
    truth = np.array([np.abs(np.polynomial.polynomial.polyval(u, c)).mean() for c in coefficients])
    assert np.all(low <= truth + 1e-9) and np.all(truth <= high + 1e-9)
    assert np.all(high - low <= 1e-5 * np.maximum(truth, 1e-9) + 1e-13)
    assert low[1] <= 0.25 <= high[1]
    wide = absolute_integrals(coefficients, 1.0, np.full(40, 0.01), 10, np.zeros(40))
    assert np.all(wide[0] <= np.maximum(truth - 0.01, 0) + 1e-9) and np.all(wide[1] >= truth + 0.01 - 1e-9)


def test_constants_of_one_cell_are_those_of_the_peak_route() -> None:
    """With nothing known, windows of one cell give the certificate's C and G (another code, theory 3c)."""
    network, gains = convoy("0.5", "0.1"), convoy_gains()
    certificate = prove(network, gains, route="peak")
    assert certificate.constants is not None
    alpha = str(certificate.constants.alpha)
    found = window_constants(network, gains, 0, alpha)
    assert found is not None
    assert pytest.approx(certificate.constants.C, rel=1e-4) == found.C
    assert pytest.approx(certificate.constants.G, rel=1e-4) == found.G
    assert window_constants(oscillators("0.6"), no_gains(oscillators()), 2, 0) is None
    assert window_constants(skew("0.8"), no_gains(skew(1)), 4, 2) is None  # no such rate


def test_constants_lie_above_the_nominal_network_and_near_it() -> None:
    network, count = skew("0.8"), 40
    found = [window_constants(network, no_gains(network), R, "0.2") for R in (4, 8)]
    around = np.roll(np.eye(count), 1, axis=0)
    A = -np.eye(count) + 0.8 * (around - around.T)
    G = slow_integrals(A, np.eye(count)[:1], np.eye(count)).sum()
    E, row, C = scipy.linalg.expm((A + 0.2 * np.eye(count)) * 0.02), np.eye(count)[0], 1.0
    for _ in range(400):
        row = row @ E
        C = max(C, float(np.abs(row).sum()))
    assert found[0] is not None and found[1] is not None
    assert G <= found[1].G <= found[0].G and found[1].G < 1.01 * G
    assert C <= found[1].C <= found[0].C and found[1].C < 1.05 * C


def test_a_mode_at_the_cut_is_repaired() -> None:
    network = edge_mode()
    assert rightmost(loop_family(network, no_gains(network)).at(1.0)).s.real < 0  # type: ignore[union-attr]
    cut = radius(network, 4, closure=Closure("cut"))
    assert not cut.stable and not cut.proven and "real part" in cut.note
    with pytest.raises(UnstableLoop):
        network_radius(network, no_gains(network))  # a alone grows: the peak route has nothing to say
    ring, found = radius(network, 4, closure=Closure("ring")), radius(network, 4)
    mirror = radius(network, 4, closure=Closure("mirror", Fraction(-1)))
    assert ring.proven and mirror.proven and found.closure.way == "ring" and found.upper == ring.upper
    # The ring by hand: the window is a circulant, and every missing link counts twice.
    A, rows, entries = literal_window(network, 4)
    here, there = [c for c, _, _ in entries], []
    for column, strength, source in entries:
        other = np.zeros(len(A))
        other[-1 if source == 1 else 0] = 1.0
        sign = 1 if source == 1 else -1
        A += sign * strength * np.outer(column, other)
        there.append((strength, source))
    p = slow_integrals(A, rows, np.array(here).T)
    M = np.zeros((2, 2))
    for e, (strength, source) in enumerate(there):
        M[:, source] += 2 * p[:, e] * strength
    assert ring.estimate == pytest.approx(float(np.abs(np.linalg.eigvals(M)).max()), rel=1e-3)


def test_what_is_not_known_stays_a_link() -> None:
    network = oscillators("0.02", "0.01")
    peak = network_radius(network, no_gains(network))
    loose = radius(network, 4, knowledge=Knowledge(loose=("couple",)))
    assert loose.lower <= peak.upper and peak.lower <= loose.upper  # nothing known: the peak route
    late = oscillators("0.02", "0.01")
    late = replace(late, links=tuple(replace(one, delay=Fraction(1, 2)) for one in late.links))
    assert radius(late, 4).upper == pytest.approx(peak.upper, rel=1e-5)
    known = radius(network, 4)
    assert known.upper < 0.1 * peak.lower
    assert "always fresh" in known.covers and "any behaviour" in loose.covers
    off = [radius(network, 4, knowledge=Knowledge(uncertain={"couple": d})) for d in (0, ".001", ".01", ".02")]
    assert all(a.upper < b.lower for a, b in pairwise(off))
    # Wholly uncertain about zero and R large: the same class, but around the coupled window.
    assert off[-1].upper > 0.9 * peak.lower


def test_rate_of_decay_weighs_late_links() -> None:
    network = oscillators("0.02")
    late = replace(network, links=tuple(replace(one, delay=Fraction(2)) for one in network.links))
    alpha = Fraction(1, 100)
    fresh, aged = (radius(n, 0, alpha=alpha, knowledge=Knowledge(("couple",))) for n in (network, late))
    assert aged.upper == pytest.approx(fresh.upper * np.exp(0.02), rel=1e-5)
    assert radius(network, 4, alpha=alpha).upper > radius(network, 4).upper


def test_links_that_weaken_are_alternatives() -> None:
    network = chain(k="0.3")
    weak = tuple(replace(one, weakens=True, own_strength=one.strength) for one in network.links)
    found = radius(replace(network, links=weak), 3)
    # x' = -1.6 x + ... with rows .3 max(s, s) twice.
    assert found.lower <= 0.6 / 1.6 <= found.upper
    assert found.above is not None and found.above.choice is not None


def test_offers_that_pass_on_are_followed_and_loops_refused() -> None:
    kind = kind_of([[-1]], [[1]], [[1]], "relay")
    passing = replace(kind, F=ExactMatrix.of([["0.5"]]))
    network = network_of(passing, [link(passing, -1, "0.2")])  # one way: z_i = x_i + .5 * .2 z_{i-1}
    found = radius(network, 2)
    # h(t) of one step is .2 (.5 delta + e^{-t}): the third power for three steps, all of one sign: (.2 * 1.5)^3.
    assert found.lower <= 0.3**3 <= found.upper
    closed = network_of(passing, [link(passing, -1, "0.2"), link(passing, 1, "0.2")])
    with pytest.raises(InputError, match="closed path of links"):
        radius(closed, 2)


def test_factor_scans_and_reports_later_ranges() -> None:
    network = interrupted("0.001")
    found = window_factor(network, no_gains(network), R=1, most=6.0)
    assert found.first_failure == pytest.approx(2.0, rel=1e-3)
    assert not found.monotone and 3.0 <= found.later[0][0] < 3.1
    assert found.proven == 6.0 and found.at is not None and found.at.proven
    between = network.scaled(Fraction(5, 2))
    assert not radius(between, 1).proven


def test_factor_with_own_parts_kept_or_grown() -> None:
    network = springs("0.05")
    grown = window_factor(network, no_gains(network), R=2, most=8.0)
    kept = window_factor(network, no_gains(network), R=2, own_parts=False, most=8.0)
    assert kept.proven < grown.proven and (grown.own_parts, kept.own_parts) == (True, False)
    for found, own in ((grown, True), (kept, False)):
        at = Fraction(repr(found.proven))
        assert radius(network.scaled(at, None, own), 2).proven
        assert not radius(network.scaled(at * Fraction(1005, 1000), None, own), 2).proven
        assert found.peak_route < found.proven < found.first_failure


def test_every_factor_of_a_covered_range_is_proven() -> None:
    network = chain(k="0.2", a=1)
    skewed = skew("0.2")
    found = window_factor(skewed, no_gains(skewed), R=2, most=3.0, cover=True)
    assert found.covered is not None and 2 < found.covered <= found.proven
    for factor in np.linspace(1, found.covered, 4).tolist():
        assert radius(skewed.scaled(Fraction(factor)), 2).proven
    drift = Drift(network, no_gains(network), None, True, Knowledge(), Closure())
    around = drift.around(Fraction(1), 2)
    assert around is not None
    # Own numbers: at distance d the first error is at most what any factor inside shows.
    for d in (Fraction(1, 10), Fraction(1, 2)):
        worst = max(radius(network.scaled(1 + s * d), 2).lower for s in (-1, 0, 1))
        assert around(d) >= worst


def test_windows_grow_until_the_target_is_met() -> None:
    network = oscillators("0.3")
    found = grown_radius(network, no_gains(network), target=0.9, seconds=30)
    assert found.ended == "target" and found.best.proven and found.best.upper < 0.9
    assert [R for R, _, _ in found.tried] == [0, 1, 2, 3, 4, 6, 8]
    assert found.best.R == 8
    unstable = oscillators("0.6")
    assert not grown_radius(unstable, no_gains(unstable), seconds=5).best.proven
    still = chain(k="0.6")  # beyond its limit, and no window helps
    ended = grown_radius(still, no_gains(still), seconds=5)
    assert ended.ended in ("settled", "unstable", "budget") and not ended.best.proven


SWINGS = [(".1", 0.0174), (".3", 0.0100), (".45", 0.0059)]


@pytest.mark.parametrize(("k", "printed"), SWINGS)
def test_link_tolerances_around_the_nominal_chain(k: str, printed: float) -> None:
    """Theory (21): delta < 1/(2 sum over units of the integral of |h|)."""
    network = oscillators(k)
    found = link_swing(network, no_gains(network))
    assert found.common == pytest.approx(printed, abs=5e-5) and not found.guaranteed
    assert found.each["couple"] == found.common and found.change < 1e-4
    assert found.matrix.shape == (2, 2) and found.common == pytest.approx(1 / (2 * found.matrix[0, 0]))


def test_proven_tolerance_lies_below_the_nominal_one_and_near_it() -> None:
    network = skew("0.8")
    estimate = link_swing(network, no_gains(network)).common
    proven = window_swing(network, no_gains(network), 8, width=1e-2)
    assert 0.9 * estimate < proven <= estimate * (1 + 1e-3)
    assert window_swing(skew(40), no_gains(network), 1) == 0.0


def test_nominal_matrix_against_a_long_ring_of_units() -> None:
    network = ladder("0.4")
    matrix, links, cells, _ = swing_matrix(network, no_gains(network))
    count = 48
    unit, shift = np.array([[-0.2, -1.0], [1.0, -0.2]]), np.roll(np.eye(count), 1, axis=0)
    A = np.kron(np.eye(count), unit) + 0.4 * np.kron(shift, [[0, 1], [0, 0]]) - 0.4 * np.kron(shift.T, [[0, 0], [1, 0]])
    rows = np.zeros((2, 2 * count))
    rows[0, 1] = rows[1, 0] = 1.0  # the first link reads I, the second V
    truth = slow_integrals(A, rows, np.eye(2 * count), steps=20)
    assert cells >= count and [one.take for one in links] == ["v0", "v1"]
    for reader in range(2):
        for inlet in range(2):
            assert matrix[reader, inlet] == pytest.approx(truth[reader, inlet::2].sum(), rel=2e-3)


def test_nothing_is_proven_beyond_the_exact_limit() -> None:
    """Twenty random lines on both sides of their limit: a root in the right half plane excludes every proof."""
    rng = np.random.default_rng(11)
    proven = unstable = 0
    for _ in range(20):
        network = random_line(rng)
        family = loop_family(network, no_gains(network))
        for factor in (Fraction(1, 2), Fraction(2)):
            root = rightmost(family.at(float(factor)))
            assert root is not None
            for R in (0, 2):
                found = radius(network.scaled(factor), R, width=1e-3)
                assert not (found.proven and root.s.real >= 0)
                proven += found.proven
            unstable += root.s.real >= 0
    assert proven >= 15 and unstable >= 8


def test_window_margin_stays_inside_the_exact_range() -> None:
    network = skew("0.5")
    found = window_margin(network, no_gains(network), R=3, most=8.0, width=5e-3, certify=False)
    assert found.exact.first_failure == np.inf and found.share is None
    assert 1.9 < found.window.proven < 8 and found.class_limit == pytest.approx(1.0, rel=1e-2)
    assert "shows no failure up to 8" in found.sentence() and "times today's strength" in found.sentence()
    late = chain(k="0.2")
    both = window_margin(late, no_gains(late), R=3, most=4.0)
    assert both.share is not None and 0.98 < both.share <= 1.0
    assert both.exact.ranges[0].upper_certified


def test_members_have_a_window_each() -> None:
    kind = oscillator()
    star = np.zeros((7, 7))
    star[0, 1:] = star[1:, 0] = 1
    network = graph(kind, star, "0.05")
    peak = network_radius(network, no_gains(network))
    none = radius(network, 0)
    assert none.lower <= peak.upper and peak.lower <= none.upper
    assert radius(network, 2).upper == 0.0  # every window is the whole
    near = radius(network, 1)
    assert near.guaranteed and near.covers.startswith("these 7 units") and near.states == 14
    # From a leaf the other leaves are two links away: what enters its window is their sum at the hub.
    A = np.zeros((4, 4))
    A[:2, :2] = A[2:, 2:] = [[0, 1], [-1, -0.1]]
    A[1, 2] = A[3, 0] = 0.05
    p = slow_integrals(A, np.eye(4)[:1], np.eye(4)[:, 3:])[0, 0]
    assert near.estimate == pytest.approx(5 * 0.05 * p, rel=1e-3)


def test_a_finite_string_is_not_the_endless_one() -> None:
    """A one-way string of five units is proven as what it is; the endless pattern of the same links is not."""
    kind = scalar_kind()
    string = members(kind, [(i + 1, i) for i in range(4)], ["2"] * 4)
    found = radius(string, 1)
    assert found.proven and "these 5 units" in found.covers
    endless = network_of(kind, [link(kind, -1, 2)])
    for R in (0, 2, 5):
        assert radius(endless, R).lower >= 1


def test_edges_and_rules_are_refused() -> None:
    network = replace(chain(k="0.2"), description="edge pattern", edges=(Edge("first", ()),))
    with pytest.raises(InputError, match="window route"):
        radius(network, 1)
    with pytest.raises(InputError, match="rules"):
        radius(replace(chain(k="0.2"), description="rules"), 1)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda n, g: window_radius(n, g, -1), "whole number"),
        (lambda n, g: window_radius(n, g, 1, alpha=-1), "alpha"),
        (lambda n, g: window_radius(n, g, 1, method="fast"), "method"),
        (lambda n, g: window_radius(n, g, 1, width=2), "width"),
        (lambda n, g: window_radius(n, g, 1, knowledge=Knowledge(("copule",))), "did you mean 'couple'"),
        (lambda n, g: window_radius(n, g, 1, knowledge=Knowledge((), {"couple": -1})), "0 or more"),
        (lambda n, g: Closure("glue"), "'cut', 'mirror' or 'ring'"),
        (lambda n, g: window_factor(n, g, 1, most=1.0), "above 1"),
        (lambda n, g: window_factor(n, g, 1, width=1.0), "between 1e-6"),
        (lambda n, g: window_factor(n, g, 1, ("x",)), "no link class"),
        (lambda n, g: grown_radius(n, g, target=2.0), "target"),
        (lambda n, g: stable_ranges(n, g, low=2.0), "scan"),
    ],
)
def test_wrong_numbers_are_refused_in_words(call: Callable[..., object], words: str) -> None:
    network = chain(k="0.2")
    with pytest.raises(InputError, match=words):
        call(network, no_gains(network))


def test_unstable_nominal_network_has_no_tolerances() -> None:
    with pytest.raises(UnstableLoop, match="not stable"):
        link_swing(oscillators("0.6"), no_gains(oscillators("0.6")))
    with pytest.raises(InputError, match="exactly known"):
        link_swing(chain(k="0.2", delay=1), no_gains(chain()))


@pytest.mark.long
@pytest.mark.parametrize(
    ("made", "R", "k"), [(oscillators, 24, ".499"), (oscillators, 40, ".4995"), (springs, 64, "4.8"), (skew, 24, "9.2")]
)
def test_large_windows_prove_nearly_all(made: Callable[[str], Network], R: int, k: str) -> None:
    found = radius(made(k), R)
    assert found.proven and found.method == "sparse"


@pytest.mark.long
def test_plane_with_six_hundred_states() -> None:
    network = lattice("0.24")
    found = [radius(network, R) for R in (8, 12)]
    assert [f.states for f in found] == [290, 626]
    assert all(f.guaranteed and f.upper - f.lower <= 2e-6 * f.upper for f in found)
    strong = window_factor(lattice("0.02"), no_gains(network), R=12, most=12.4, seconds=600)
    assert strong.at is not None and strong.at.proven
    assert strong.proven > window_factor(lattice("0.02"), no_gains(network), R=2, most=12.4).proven
