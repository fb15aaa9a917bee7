"""Small networks for the margin tests, built in code (all data invented unless a test names its source)."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from synth.base.exact import ExactMatrix, Number
from synth.network.gains import Gains, gain_set
from synth.network.model import Kind, Link, Network, Signal
from tests.build import scalar_kind

M = ExactMatrix.of


def kind_of(A: list[list[Number]], D: list[list[Number]], H: list[list[Number]], name: str = "unit") -> Kind:
    """x' = A x + D v + E w with E = first column of D (or ones), one actuator on the last state, all states sensed."""
    n = len(A)
    base = scalar_kind(name=name)
    takes, offers = len(D[0]), len(H)
    return replace(
        base,
        states=tuple(Signal(f"x{i}", "m") for i in range(n)),
        takes=tuple(Signal(f"v{i}", "m") for i in range(takes)),
        offers=tuple(Signal(f"z{i}", "m") for i in range(offers)),
        sensors=tuple(Signal(f"x{i}", "m") for i in range(n)),
        A=M(A),
        B=M([[int(i == n - 1)] for i in range(n)]),
        D=M(D),
        E=M([[row[0]] for row in D]),
        C=ExactMatrix.identity(n),
        N=ExactMatrix.zeros(n, takes),
        H=M(H),
        F=ExactMatrix.zeros(offers, takes),
        Fw=ExactMatrix.zeros(offers, 1),
    )


def link(
    kind: Kind,
    at: int,
    strength: Number,
    own: Number = 0,
    delay: Number = 0,
    name: str = "couple",
    offer: int = 0,
    take: int = 0,
    source: Kind | None = None,
) -> Link:
    """A link of ``kind`` with itself (or from ``source``), by position of the offer and the take."""
    origin = source or kind
    return Link(
        name,
        origin.name,
        origin.offers[offer].name,
        (at,),
        kind.name,
        kind.takes[take].name,
        Fraction(strength),
        Fraction(own),
        Fraction(delay),
    )


def network_of(kinds: Kind | tuple[Kind, ...], links: list[Link]) -> Network:
    """A pattern of the kinds with these links."""
    return Network("invented", kinds if isinstance(kinds, tuple) else (kinds,), tuple(links))


def no_gains(network: Network) -> Gains:
    """Zero gains for every kind: the units as they stand."""
    return Gains(
        tuple(gain_set(kind, ExactMatrix.zeros(len(kind.inputs), len(kind.sensors))) for kind in network.kinds)
    )


def chain(a: Number = 1, k: Number = "0.1", delay: Number = 0) -> Network:
    """x' = -a x + k (left + right), endless."""
    kind = scalar_kind(a)
    return network_of(kind, [link(kind, -1, k, delay=delay), link(kind, 1, k, delay=delay)])


def oscillator() -> Kind:
    """x'' + 0.1 x' + x = v, z = x."""
    return kind_of([[0, 1], [-1, "-0.1"]], [[0], [1]], [[1, 0]], "oscillator")


def oscillators(k: Number = "0.01", own: Number = 0) -> Network:
    """x'' + 0.1 x' + x = k (left + right) - (own parts), endless."""
    kind = oscillator()
    return network_of(kind, [link(kind, -1, k, own), link(kind, 1, k, own)])


def interrupted(strength: Number = 0) -> Network:
    """Stable for factors from 5/7 to 2 and from 3 on, unstable between 2 and 3 (Routh: (1+k)^2 > 7k - 5).

    s^3 + (1+k) s^2 + (1+k) s + (7k - 5); the parts with k are own parts of relative links whose neighbour's part has
    the given strength, or self-links where ``strength`` is zero.
    """
    kind = kind_of([[0, 1, 0], [0, 0, 1], [5, -1, -1]], [[0], [0], [1]], [[1, 0, 0], [0, 1, 0], [0, 0, 1]], "cubic")
    if Fraction(strength) == 0:
        return network_of(kind, [link(kind, 0, -c, offer=i) for i, c in enumerate((7, 1, 1))])
    return network_of(kind, [link(kind, -1, strength, own=c, offer=i) for i, c in enumerate((7, 1, 1))])
