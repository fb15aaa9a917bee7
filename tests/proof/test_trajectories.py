"""What a certificate promises holds on trajectories; and nothing is ever proven that the exact limits contradict."""

from __future__ import annotations

import time

import numpy as np
import pytest

from synth.base.exact import ExactMatrix
from synth.network.gains import Gains, gain_set
from synth.network.model import Link, Network
from synth.proof import prove
from tests.build import M, convoy, convoy_gains, scalar_kind
from tests.proof.networks import chain, tanks
from tests.proof.play import play
from tests.proof.truth import Model

CASES = {"convoy": lambda: (convoy(), convoy_gains()), "chain": lambda: chain("1", "0.4"), "tanks": tanks}


def waves_of(model: Model, steps: int, units: int, rng: np.random.Generator, declared: bool) -> list[np.ndarray]:
    """Constant disturbances at full size with random signs per unit: the declared peaks, or one."""
    found = []
    for unit in model.units:
        size = unit["peaks"] if declared else np.ones_like(unit["peaks"])
        found.append(np.broadcast_to(rng.choice([-1, 1], size=(1, units, len(size))) * size, (steps, units, len(size))))
    return found


@pytest.mark.parametrize("route", ["peak", "storage"])
@pytest.mark.parametrize("name", sorted(CASES))
def test_constants_and_peaks_hold(name, route):
    began = time.perf_counter()
    certificate = prove(*CASES[name](), route=route)
    print(f"{name}, {route}: proven in {time.perf_counter() - began:.2f} s")
    assert certificate.proven, certificate.reasons
    model, constants, h = Model(certificate.document), certificate.constants, 0.04
    steps, units = 600, 7
    clock = np.arange(steps) * h
    rng = np.random.default_rng(3)
    calm = [np.zeros((steps, units, len(unit["peaks"]))) for unit in model.units]
    reached, seen = 0.0, 0.0
    for mode in ("fixed", "random", "signs"):
        free = play(certificate.document, h, steps, 1.0, calm, rng, mode)["size"]
        envelope = constants.C * np.exp(-constants.alpha * clock)
        assert np.all(free <= envelope * (1 + 1e-9)), (mode, float((free / envelope).max()))
        reached = max(reached, float((free / envelope).max()))
        same = [np.abs(w) for w in waves_of(model, steps, units, rng, declared=False)]
        for waves in (waves_of(model, steps, units, rng, declared=False), same):
            both = play(certificate.document, h, steps, 0.5, waves, rng, mode)["size"]
            assert np.all(both <= 0.5 * envelope + constants.G * (1 + 1e-9)), mode
            forced = play(certificate.document, h, steps, 0.0, waves, rng, mode)
            assert forced["size"].max() <= constants.G * (1 + 1e-9)
            seen = max(seen, forced["size"].max() / constants.G)
        declared = play(
            certificate.document, h, steps, 0.0, waves_of(model, steps, units, rng, declared=True), rng, mode
        )
        peaks = np.array([peak.value for peak in certificate.peaks])
        assert np.all(declared["top"] <= peaks * (1 + 1e-9)), (mode, declared["top"] / peaks)
        if np.isfinite(certificate.validity.X0):
            limits = np.array([np.inf if peak.limit is None else peak.limit for peak in certificate.peaks])
            edge = play(
                certificate.document,
                h,
                steps,
                certificate.validity.X0,
                waves_of(model, steps, units, rng, declared=True),
                rng,
                mode,
            )
            assert np.all(edge["top"] < limits)
    # The bounds mean something only if trajectories come near them.
    assert seen > (0.4 if route == "peak" else 0.1), seen
    assert reached > 0.03, reached


def random_network(rng: np.random.Generator) -> tuple[Network, Gains]:
    """One or two kinds of one to three states with random stable loops; strengths put the radius near one."""
    kinds, sets = [], []
    for name in ("first", "second")[: int(rng.integers(1, 3))]:
        n = int(rng.integers(1, 4))
        A = np.round(rng.normal(size=(n, n)), 2)
        A -= np.eye(n) * round(float(np.linalg.eigvals(A).real.max()) + float(rng.uniform(0.3, 1)), 2)
        base = scalar_kind(name=name)
        signal = base.states[0]
        states = tuple(type(signal)(f"x{k}", "m") for k in range(n))
        columns = [M(np.round(rng.normal(size=(n, 1)), 2).tolist()) for _ in range(3)]
        kind = type(base)(
            name,
            states,
            base.inputs,
            base.disturbances,
            base.takes,
            base.offers,
            states,
            M(A.tolist()),
            *columns,
            ExactMatrix.identity(n),
            ExactMatrix.zeros(n, 1),
            M(np.round(rng.normal(size=(1, n)), 2).tolist()),
            ExactMatrix.zeros(1, 1),
            ExactMatrix.zeros(1, 1),
        )
        kinds.append(kind)
        sets.append(gain_set(kind, M([[0] * n])))
    links = []
    for kind in kinds:
        for other in kinds:
            for at in (-1, 1):
                if rng.random() < 0.7:
                    g = M([[round(float(rng.normal()), 2)]])[0, 0]
                    links.append(
                        Link("tie", other.name, "level", (at,), kind.name, "inflow", g, delay=M([["0.1"]])[0, 0])
                    )
    return Network("random", tuple(kinds), tuple(links)), Gains(tuple(sets))


def rightmost(document: dict, theta: float) -> float:
    """Largest real part of the closed pattern at wave number theta, links at full strength without delay."""
    model = Model(document)
    sizes = [unit["states"] for unit in model.units]
    place = np.concatenate([[0], np.cumsum(sizes)])
    X = scipy_block([unit["A"] for unit in model.units]).astype(complex)
    for link in model.links:
        i, j = model.names.index(link["to"]["kind"]), model.names.index(link["from"]["kind"])
        top, _, bottom = link["strength"].partition("/")
        g = float(top) / float(bottom or 1)
        turn = np.exp(1j * theta * link["at"][0])
        X[place[i] : place[i + 1], place[j] : place[j + 1]] += g * turn * model.units[i]["D"] @ model.units[j]["x"][:1]
    return float(np.linalg.eigvals(X).real.max())


def scipy_block(parts: list[np.ndarray]) -> np.ndarray:
    import scipy.linalg

    return scipy.linalg.block_diag(*parts)


def near_boundary(count: int, seed: int) -> tuple[int, int]:
    """(proven, not proven) among random networks scaled to a radius between .7 and 1.3; checks every proven one."""
    from fractions import Fraction

    rng = np.random.default_rng(seed)
    proven = refused = 0
    for k in range(count):
        network, gains = random_network(rng)
        first = prove(network, gains, route="peak")
        if not 1e-6 < first.radius.upper < np.inf:
            continue
        network = network.scaled(Fraction(round(rng.uniform(0.7, 1.3) / first.radius.upper, 4)))
        certificate = prove(network, gains, route="auto", target="0.999")
        if not certificate.proven:
            refused += 1
            continue
        proven += 1
        for theta in np.linspace(0, 2 * np.pi, 41):
            assert rightmost(certificate.document, theta) < 0, (k, theta)
        model = Model(certificate.document)
        calm = [np.zeros((300, 7, 1)) for _ in model.units]
        for mode in ("fixed", "random", "signs"):
            size = play(certificate.document, 0.05, 300, 1.0, calm, rng, mode)["size"]
            bound = certificate.constants.C * np.exp(-certificate.constants.alpha * 0.05 * np.arange(300))
            assert np.all(size <= bound * (1 + 1e-9)), (k, mode)
    return proven, refused


def test_nothing_false_is_proven():
    proven, refused = near_boundary(10, 1)
    assert proven >= 3 and refused >= 2, (proven, refused)


@pytest.mark.long
def test_nothing_false_is_proven_at_length():
    proven, refused = near_boundary(60, 2)
    assert proven >= 15 and refused >= 15, (proven, refused)
