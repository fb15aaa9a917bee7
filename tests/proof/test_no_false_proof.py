"""Nothing is proven that a member of the class contradicts: random small networks of every description near the limit.

Whatever is proven is played with admissible choices of strengths, signs, weakening and (under rules) wirings: frozen
ones must have eigenvalues left of the claimed rate, and ones that switch all the time must stay below C e^(-alpha t).
"""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
import scipy.linalg

from synth.base.errors import SynthError
from synth.gain import network_radius
from synth.network.model import Network
from synth.proof import prove
from tests.gain.literal import some_edges, some_members, some_pattern, some_rules
from tests.proof.test_every_description import nothing
from tests.proof.truth import Model, parts_of

COPIES = 4  # units per kind where any number is meant
SWITCHES = 40


def some(chance: random.Random, description: str) -> Network:
    """A random network whose delays are all zero, so that frozen members of its class are matrices."""
    made: dict[str, Callable[[], Network]] = {
        "pattern": lambda: some_pattern(chance),
        "members": lambda: some_members(chance, chance.randint(2, 6)),
        "rules": lambda: some_rules(chance, chance.random() < 0.5),
        "half line": lambda: some_edges(chance, ("first",)),
        "line": lambda: some_edges(chance, ("first", "last")),
    }
    network = made[description]()
    links = tuple(replace(link, delay=Fraction(0)) for link in network.links)
    edges = tuple(
        replace(edge, links=tuple(replace(x, link=replace(x.link, delay=Fraction(0))) for x in edge.links))
        for edge in network.edges
    )
    return replace(network, links=links, edges=edges)


def near_the_limit(network: Network, wanted: float) -> Network | None:
    """The network with strengths scaled so that its radius is about ``wanted``; None if no strength does it."""
    low, high = 0.0, 4.0
    for _ in range(10):
        factor = Fraction((low + high) / 2).limit_denominator(1000)
        try:
            radius = network_radius(network.scaled(factor), nothing(network), width=1e-2, peak_width=1e-3).upper
        except SynthError:
            return None
        low, high = (float(factor), high) if radius < wanted else (low, float(factor))
    return network.scaled(Fraction(low).limit_denominator(1000)) if low > 0 else None


class Plant:
    """All units of one piece of a document as one linear system; ``member`` draws one of its class."""

    def __init__(self, document: dict, part: str) -> None:
        self.model = Model(document, part)
        copies = COPIES if document["model"]["description"] in ("rules", "pattern") or part == "bulk" else 1
        self.units = [(i, c) for i in range(len(self.model.units)) for c in range(copies)]
        self.copies = copies
        sizes = [self.model.units[i]["states"] for i, _ in self.units]
        self.first = np.cumsum([0, *sizes])
        self.A = scipy.linalg.block_diag(*[self.model.units[i]["A"] for i, _ in self.units])
        self.terms = [self.model.terms(i) for i in range(len(self.model.units))]

    def member(self, chance: random.Random) -> np.ndarray:
        """Every term takes a convex share of its alternatives, with any sign, from any unit that stands there."""
        A = self.A.copy()
        for n, (i, _) in enumerate(self.units):
            unit = self.model.units[i]
            for take, options in self.terms[i]:
                if not options:
                    continue
                shares = np.zeros(len(options))
                shares[chance.randrange(len(options))] = chance.choice((1, 1, chance.random()))
                for (outlet, g, _), share in zip(options, shares, strict=True):
                    j, k = self.model.outlets[outlet]
                    same = len(options) > 1 and j == i and self.copies > 1 and chance.random() < 0.5
                    source = n if same else j * self.copies + chance.randrange(self.copies)
                    row = self.model.units[j]["x"][k] * g * share * chance.choice((1, 1, -1))
                    rows, columns = slice(self.first[n], self.first[n + 1]), slice(
                        self.first[source], self.first[source + 1]
                    )  # fmt: skip
                    A[rows, columns] += np.outer(unit["D"][:, take], row)
        return A


def contradicted(certificate, chance: random.Random) -> str:
    """What speaks against a proven certificate; empty if nothing does."""
    alpha, C = certificate.constants.alpha, certificate.constants.C
    for part in parts_of(certificate.document):
        plant = Plant(certificate.document, part)
        for _ in range(4):
            rate = float(np.linalg.eigvals(plant.member(chance)).real.max())
            if rate > -alpha * (1 - 1e-9):
                return f"a frozen member has the rate {rate}, the claim is {-alpha}"
        step, x, t = 0.4, np.array([chance.choice((-1.0, 1.0)) for _ in range(plant.first[-1])]), 0.0
        for _ in range(SWITCHES):
            x, t = scipy.linalg.expm(plant.member(chance) * step) @ x, t + step
            if float(np.abs(x).max()) > C * np.exp(-alpha * t) * (1 + 1e-9):
                return f"switching leads above the envelope at {t} s"
    return ""


def campaign(description: str, count: int, seed: int) -> tuple[int, int]:
    """(proven, proven within 5 % of the limit) of ``count`` random networks; fails on the first contradiction."""
    chance = random.Random(seed)
    proven = close = 0
    for _ in range(count):
        wanted = chance.uniform(0.9, 1.04)
        network = near_the_limit(some(chance, description), wanted)
        if network is None:
            continue
        certificate = prove(network, nothing(network), route=chance.choice(("peak", "storage")), target="0.9999")
        if certificate.proven:
            proven += 1
            close += certificate.radius.upper > 0.95
            assert contradicted(certificate, chance) == ""
    print(f"{description}: {count} networks, {proven} proven, {close} of them within 5 % of the limit, none false")
    return proven, close


DESCRIPTIONS = ("pattern", "members", "rules", "half line", "line")


@pytest.mark.parametrize("description", DESCRIPTIONS)
def test_a_few_networks_near_the_limit(description: str) -> None:
    count = {"line": 1, "half line": 1, "pattern": 2, "members": 3, "rules": 2}[description]
    assert campaign(description, count, 3)[0] >= (description in ("rules", "line"))


@pytest.mark.long
@pytest.mark.parametrize("description", DESCRIPTIONS)
def test_a_thousand_networks_near_the_limit(description: str) -> None:
    proven, close = campaign(description, 1000, 7)
    assert proven >= 300 and close >= 100
