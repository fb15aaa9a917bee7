"""A ring of units played forward exactly: links hold sampled old values, one of the behaviours covered.

Over each step of length h the state moves by the matrix exponential with taken values and disturbances held. A value
taken at the start of a step is (age + h) old at its end, so ages up to delay - h are admissible without approximation.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.linalg

from tests.proof.truth import Model

Choice = Callable[[int, int], np.ndarray]


def play(
    document: dict[str, Any],
    h: float,
    steps: int,
    start: float,
    waves: list[np.ndarray],
    rng: np.random.Generator,
    mode: str,
    units: int = 7,
) -> dict[str, np.ndarray]:
    """Largest |x| over units at every step, and the largest value of every line; no link may be younger than 2 h.

    ``waves``: one array (steps, units, disturbances) per kind; ``mode``: "fixed" (oldest value, full strength),
    "random" (random age, strength and sign at every step) or "signs" (one random sign per link and unit).
    """
    model = Model(document)
    states = [rng.choice([-1.0, 1.0], size=(units, unit["states"])) * start for unit in model.units]
    exact = []
    for unit in model.units:
        n, inputs = unit["states"], np.hstack([unit["D"], unit["E"]])
        block = np.zeros((n + inputs.shape[1],) * 2)
        block[:n, :n], block[:n, n:] = unit["A"], inputs
        grown = scipy.linalg.expm(block * h)
        exact.append((grown[:n, :n], grown[:n, n:]))
    kinds = {name: i for i, name in enumerate(model.names)}
    offered = [[x @ unit["x"][: unit["offers"]].T for x, unit in zip(states, model.units, strict=True)]]
    fixed = [rng.choice([-1.0, 1.0], size=units) for _ in model.links]
    size, top = [], [np.zeros(len(unit["x"])) for unit in model.units]
    for t in range(steps):
        taken = [np.zeros((units, unit["D"].shape[1])) for unit in model.units]
        for link, sign in zip(model.links, fixed, strict=True):
            i, j = kinds[link["to"]["kind"]], kinds[link["from"]["kind"]]
            take = [s["name"] for s in model.kinds[i]["takes"]].index(link["to"]["take"])
            offer = [s["name"] for s in model.kinds[j]["offers"]].index(link["from"]["offer"])
            oldest = int(float(eval_fraction(link["delay"])) / h + 1e-9) - 1
            assert oldest >= 1, "a step must be at most half of every delay"
            ages = rng.integers(0, oldest + 1, size=units) if mode == "random" else np.full(units, oldest)
            factor = {"fixed": np.ones(units), "random": rng.uniform(-1, 1, size=units), "signs": sign}[mode]
            source = (np.arange(units) + link["at"][0]) % units
            old = np.array([offered[max(0, t - age)][j][k, offer] for age, k in zip(ages, source, strict=True)])
            taken[i][:, take] += float(eval_fraction(link["strength"])) * factor * old
        for i, unit in enumerate(model.units):
            lines = states[i] @ unit["x"].T + taken[i] @ unit["v"].T + waves[i][t] @ unit["w"].T
            top[i] = np.maximum(top[i], np.abs(lines).max(axis=0))
        size.append(max(float(np.abs(x).max()) for x in states))
        states = [
            x @ phi.T + np.hstack([v, w[t]]) @ gamma.T
            for x, (phi, gamma), v, w in zip(states, exact, taken, waves, strict=True)
        ]
        offered.append([x @ unit["x"][: unit["offers"]].T for x, unit in zip(states, model.units, strict=True)])
    return {"size": np.array(size), "top": np.concatenate(top)}


def eval_fraction(text: str) -> float:
    """A number written as p/q or as a decimal."""
    top, _, bottom = text.partition("/")
    return float(top) / float(bottom or 1)
