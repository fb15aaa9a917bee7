"""Certificates of the code as flashed: what they state is true, changes are refused, simulation stays inside."""

from __future__ import annotations

import contextlib
import copy
import json
import random
import subprocess
import sys
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
import scipy.linalg

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain.sampled.peaks import _enclosed, sampled_peaks, sampled_unit
from synth.gain.sampled.sup import Inlet, Outlet
from synth.handoff.bundle import checker_text
from synth.network.gains import Gains, gain_set
from synth.network.model import Actuator, Link, Network, Signal
from synth.proof import check, check_firmware, verify
from synth.proof.check_flashed import Flashed, Line
from synth.proof.check_flashed import Inlet as CheckedInlet
from synth.proof.check_sampled import Ball, Sampled, ball, exponential, times
from synth.proof.firmware import Rounding, prove_firmware
from tests.build import M, scalar_kind
from tests.gain.test_sampled import fractions, random_loop
from tests.proof.firmware_truth import is_true, wrong
from tests.proof.networks import chain, tanks
from tests.proof.test_tamper import attacks, changed

FILES = ("check.py", "check_flashed.py", "check_sampled.py", "check_firmware.py")


def buoys(K="-1.5"):
    """A unit with a limit, a band, a relative link, a sensor that hears what it takes, and a disturbance."""
    kind = replace(
        scalar_kind("1", "buoy", "0.5"),
        inputs=(Actuator("push", "m/s", Fraction(2)),),
        offers=(Signal("level", "m", Fraction(3)),),
        N=M([["0.2"]]),
    )
    link = Link("tie", "buoy", "level", (-1,), "buoy", "inflow", Fraction("0.4"), Fraction("0.4"), Fraction("0.1"))
    return Network("Invented buoys", (kind,), (link,)), Gains((gain_set(kind, M([[K]])),))


def buoy_rounding():
    return Rounding({"buoy.x": "0.01"}, {"buoy.push": "0.02"}, {"buoy.push": "0.001"})


@pytest.fixture(scope="module")
def proven():
    found = prove_firmware(*buoys(), "0.4", "0.1", buoy_rounding())
    assert found.proven, found.reasons
    return found


def forged(document, path, value):
    """The changed document with hashes and sentences made anew, except where the change itself is one of these."""
    copied = changed(document, path, value)
    if path[0] not in ("network_hash", "provenance"):
        copied["network_hash"] = copied["provenance"]["network_hash"] = check.digest(copied["model"])
    if path[0] not in ("claim", "covers", "excludes"):
        with contextlib.suppress(check.Rejected, ArithmeticError, LookupError, TypeError, ValueError):
            copied["claim"], copied["covers"], copied["excludes"] = check_firmware.sentences(copied)
    if path[0] != "hash":
        del copied["hash"]
        copied["hash"] = check.digest(copied)
    return copied


def attack(document, chosen):
    refused, accepted = 0, []
    for path, value in chosen:
        forgery = forged(document, path, value)
        if check_firmware.check_document(forgery):
            refused += 1
        else:
            assert is_true(forgery), f"accepted, but not true: {path} -> {value!r}: {wrong(forgery)}"
            accepted.append((*path, value))
    print(f"firmware: {refused} refused, {len(accepted)} accepted and true: {accepted}")
    return refused


def test_what_is_stated_is_true(proven):
    assert is_true(proven.document)
    for key, factor in (("C", "0.3"), ("G", "0.99"), ("R", "0.99")):
        better = changed(
            proven.document, ("constants", key), str(Fraction(proven.document["constants"][key]) * Fraction(factor))
        )
        assert not is_true(better)
    for claim in ("sampled every 0.4 s", "commands in force 0.1 s after"):
        assert claim in proven.claim
    assert any("rounded to multiples of 0.02 m/s" in line for line in proven.covers)
    assert any("jitter" in line for line in proven.excludes)


def test_changed_leaves(proven):
    document = proven.document
    everything = attacks(document)
    for path, value in everything:
        assert check_firmware.check_document(changed(document, path, value)), f"a changed {path} must not pass the hash"
    claims = [a for a in everything if a[0][0] in ("radius", "constants", "peaks", "validity", "target", "firmware")]
    sample = random.Random(5).sample(everything, 12) + random.Random(6).sample(claims, 10)
    assert attack(document, sample) > 0.8 * len(sample)


@pytest.mark.long
def test_every_leaf(proven):
    everything = attacks(proven.document)
    assert attack(proven.document, everything) > 0.85 * len(everything)


def test_missing_and_extra_fields_are_refused(proven):
    document = proven.document
    for path in (
        ("firmware",),
        ("firmware", "delay"),
        ("firmware", "kinds", 0, "form"),
        ("evidence", 0, "gamma"),
        ("peaks", 0),
    ):
        copied = copy.deepcopy(document)
        place = copied
        for key in path[:-1]:
            place = place[key]
        del place[path[-1]]
        del copied["hash"]
        copied["hash"] = check.digest(copied)
        assert check_firmware.check_document(copied), f"accepted without {path}"
    for path in ((), ("firmware",), ("firmware", "kinds", 0), ("peaks", 0), ("constants",)):
        copied = copy.deepcopy(document)
        place = copied
        for key in path:
            place = place[key]
        place["more"] = "1"
        del copied["hash"]
        copied["hash"] = check.digest(copied)
        assert check_firmware.check_document(copied), f"accepted with an extra field in {path}"
    assert check.check_document(document), "the checker of the continuous routes must not accept this one"


def test_the_checker_stands_alone(proven, tmp_path):
    """Four files and a Python standard library: verified; a changed byte is not."""
    for name in FILES:
        (tmp_path / name).write_text(checker_text(name), encoding="utf-8")
    saved = proven.save(tmp_path / "certificate.json")

    def run():
        command = [sys.executable, "-S", "check_firmware.py", saved.name]
        return subprocess.run(command, cwd=tmp_path, capture_output=True, text=True)

    done = run()
    assert done.returncode == 0, done.stdout + done.stderr
    assert done.stdout.startswith("verified")
    assert "buoy: push x -1.5" in done.stdout
    text = saved.read_text(encoding="utf-8")
    saved.write_text(text.replace('"period": "2/5"', '"period": "1/5"'), encoding="utf-8")
    done = run()
    assert done.returncode == 1 and "hash" in done.stdout
    document = json.loads(text)
    document["gains"][0]["K"] = [["-4"]]  # a gain that the sampled loop does not bear
    del document["hash"]
    document["claim"], document["covers"], document["excludes"] = check_firmware.sentences(document)
    document["hash"] = check.digest(document)
    saved.write_text(json.dumps(document), encoding="utf-8")
    done = run()
    assert done.returncode == 1 and "contract" in done.stdout


def test_verify_takes_the_route_from_the_file(proven, tmp_path):
    saved = proven.save(tmp_path / "certificate.json")
    network, _ = buoys()
    assert verify(saved, network).verified
    other = replace(network, links=(replace(network.links[0], delay=Fraction("0.2")),))
    assert not verify(saved, other).verified


def test_exponential_and_products_enclose():
    A = [[0.3, -2.0, 0.1], [1.5, -1.0, 0.0], [0.0, 2.0, -4.0]]
    found = exponential([[Fraction(v) for v in row] for row in A], Fraction(3, 2))
    assert found.err < 1 << 40
    truth = scipy.linalg.expm(1.5 * np.array(A))
    assert np.array([[v / 2**160 for v in row] for row in found.mid]) == pytest.approx(truth, rel=1e-12)
    X = ball([[Fraction(1, 3), Fraction(-2, 7)]])
    Y = Ball([[v[0]] for v in ball([[Fraction(5, 11)], [Fraction(1, 13)]]).mid], 5)
    product = times(X, Y)
    exact = Fraction(1, 3) * Fraction(5, 11) - Fraction(2, 7) * Fraction(1, 13)
    assert abs(product.mid[0][0] - exact * 2**160) <= product.err


@pytest.mark.long
def test_two_kinds_with_two_states():
    found = prove_firmware(*tanks(), "0.5", "0.3", Rounding({"basin.flow": "0.01"}, {"tank.push": "0.01"}))
    assert found.proven, found.reasons
    assert is_true(found.document)


def test_two_programs_and_two_routes_agree():
    """At a short period without rounding the sampled certificate nears the continuous one, from above."""
    network, gains = chain(strength="0.3")
    gains = Gains((gain_set(network.kinds[0], M([["-1"]])),))
    limit = 0.6 / 2
    radii = [prove_firmware(network, gains, T).radius.upper for T in ("0.5", "0.3")]
    assert all(limit <= r for r in radii)
    unit = sampled_unit(network.kinds[0], network.links, M([["-1"]]), "0.3")
    p = sampled_peaks(unit).gains["offers"]["takes"].upper[0, 0]
    assert radii[1] == pytest.approx(0.6 * p, rel=2e-4)


def test_single_precision_is_a_link_from_the_readings():
    network, gains = buoys()
    single, exact = (prove_firmware(network, gains, "0.5", "0.5", Rounding(form=form)) for form in ("single", "exact"))
    assert single.proven and exact.proven, single.reasons + exact.reasons
    assert [p["of"] for p in single.document["point"]] == ["buoy.level", "buoy.x as read"]
    assert exact.radius.upper <= single.radius.upper * (1 + 1e-9) <= exact.radius.upper * (1 + 1e-5)
    assert 0 < float(single.document["constants"]["R"]) < 1e-40  # products below the smallest normal number, no more


def test_stays_inside_with_clocks_of_their_own():
    """A ring with rounding as it runs, every unit on its own clock, pushed as hard as declared: never beyond the claim,
    and far enough to show that the claim is not idle."""
    network, _ = chain(strength="0.3", delay="0", peak="1")
    k, q = -0.8, 0.05
    gains = Gains((gain_set(network.kinds[0], M([[k]])),))
    found = prove_firmware(network, gains, "0.2", "0.1", Rounding({"tank.x": "0.05"}, {"tank.push": "0.05"}))
    assert found.proven, found.reasons
    bound = next(p.value for p in found.peaks if p.role == "state")
    actuator = next(p.value for p in found.peaks if p.role == "actuator")
    rng, N, dt, per = np.random.default_rng(3), 8, 0.01, 20
    A = -np.eye(N) + 0.3 * (np.roll(np.eye(N), 1, axis=0) + np.roll(np.eye(N), -1, axis=0))
    step = scipy.linalg.expm(A * dt)
    push = np.linalg.solve(A, step - np.eye(N))
    worst = worst_u = 0.0
    for style in ("constant", "flips", "noise"):
        x, held, waiting = np.zeros(N), np.zeros(N), np.zeros(N)
        clock = rng.integers(0, per, N)
        for n in range(3000):
            at = (n - clock) % per
            nearest = lambda v: np.round(v / q) * q  # noqa: E731
            waiting = np.where(at == 0, nearest(k * nearest(x)), waiting)
            held = np.where(at == per // 2, waiting, held)
            w = {"constant": np.ones(N), "flips": np.sign(x) + (x == 0), "noise": rng.uniform(-1, 1, N)}[style]
            x = step @ x + push @ (held + w)
            worst, worst_u = max(worst, np.abs(x).max()), max(worst_u, np.abs(held).max())
    assert 0.85 * bound < worst <= bound
    assert 0.8 * actuator < worst_u <= actuator


def test_not_proven_says_why():
    network, gains = buoys()
    slow = prove_firmware(network, buoys("-4")[1], 2)
    assert not slow.proven and "multiplied by" in slow.reasons[0]
    tight = prove_firmware(network, gains, "0.4", target="0.01")
    assert not tight.proven and "above the target" in tight.reasons[0]
    limited = prove_firmware(network, gains, "0.4", rounding=Rounding(commands={"buoy.push": 5}))
    assert not limited.proven and "limit" in limited.reasons[0]


def test_wrong_input_is_refused():
    network, gains = buoys()
    for arguments, words in (
        ({"period": None}, "no sample period"),
        ({"period": "0.1", "delay": "0.2"}, "computation delay"),
        ({"period": "0.1", "jitter": "0.01"}, "jitter"),
        ({"period": "0.1", "rounding": Rounding({"buoy.y": 1})}, "buoy.y"),
        ({"period": "0.1", "rounding": Rounding({"buoy.x": -1})}, "negative"),
        ({"period": "0.1", "rounding": Rounding(form="half")}, "form"),
        ({"period": "0.1", "rounding": Rounding(stored={"buoy.x": 0}, form="single")}, "floating point"),
        ({"period": "0.1", "rounding": Rounding(stored={"buoy.x": 0})}, "disturbance"),
        ({"period": "0.1", "target": 1}, "target"),
    ):
        with pytest.raises(InputError, match=words):
            prove_firmware(network, gains, **arguments)


def compare_programs(seed, alpha):
    """The checker's bounds of one random loop against the enclosures in ball arithmetic; returns its largest excess."""
    rng = np.random.default_rng(seed)
    n, m = int(rng.integers(1, 4)), int(rng.integers(1, 3))
    share = Fraction(int(rng.integers(0, 5)), 4)
    loop, _ = random_loop(rng, n, m, share, stored=n > 1 and seed % 2 == 1)
    D, gu, gx, row = (fractions(np.round(rng.normal(size=k), 2)) for k in (n, m, n, n + m))
    if loop.Z is not None:
        D = (*D[:-1], Fraction(0))
    none, still = (Fraction(0),) * m, (Fraction(0),) * n
    known = [Inlet(D, none, still), Inlet(still, gu, still), Inlet(still, none, gx), Inlet(D, gu, gx)]
    low, high = _enclosed(loop, alpha, known, [Outlet(row)], (1.0,) * (n + m), 1e-5)
    Z = ExactMatrix.zeros(n, n) if loop.Z is None else loop.Z
    flat = [[list(r) for r in X.rows] for X in (loop.A, loop.B, loop.R, Z)]
    one = Flashed("random", *flat, loop.period, loop.delay, [], [], [], [])
    Phi = loop.transition()
    gamma = (1 + 2 * float(np.abs(np.linalg.eigvals(Phi)).max())) / 3
    P = scipy.linalg.solve_discrete_lyapunov(Phi.T / gamma, np.eye(n + m))
    P = [[Fraction(float((P[i, j] + P[j, i]) / 2)) for j in range(n + m)] for i in range(n + m)]
    checked = Sampled(one, P, Fraction(gamma), alpha)
    inlets = [(str(k), CheckedInlet(list(x.D), list(x.gu), list(x.gx))) for k, x in enumerate(known)]
    less, more = checked.line(Line("state", "z", list(row), [], []), inlets, check_firmware.TIGHT)
    for k in range(4):
        assert float(less[k]) <= high[0, k] * (1 + 1e-12)
        assert float(more[k]) >= low[0, k] * (1 - 1e-12)
        assert float(more[k]) <= high[0, k] * 1.001 + 1e-12
    assert float(more[4]) >= low[0, 4] * (1 - 1e-12)  # it starts anywhere in a period, so it may be well above


@pytest.mark.parametrize("seed", [1, 2])
def test_checker_and_ball_arithmetic_agree(seed):
    compare_programs(seed, Fraction(0))
    compare_programs(seed, Fraction(1, 10))


@pytest.mark.long
@pytest.mark.parametrize("seed", range(100, 200))
def test_checker_and_ball_arithmetic_agree_widely(seed):
    compare_programs(seed, Fraction(seed % 3, 10))
