"""A second, numerical evaluation of what a certificate says, sharing no code with the program under test.

Everything here is floats, matrix exponentials and eigenvalues; relative errors are near 1e-5, far below the changes
that the tampering tests make.
"""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import numpy as np
import scipy.linalg

TOLERANCE = 2e-4


def array(rows: list[list[str]], shape: tuple[int, int]) -> np.ndarray:
    return np.array([[float(Fraction(v)) for v in row] for row in rows], dtype=float).reshape(shape)


class Model:
    """The closed units of a document in floats, and its links as they stand in the file."""

    def __init__(self, document: dict[str, Any]) -> None:
        self.kinds = document["model"]["kinds"]
        self.units: list[dict[str, Any]] = []
        self.links = document["model"]["links"]
        self.names = [kind["name"] for kind in self.kinds]
        for kind, gains in zip(self.kinds, document["gains"], strict=True):
            n, m, q, k, p, d = (
                len(kind[g]) for g in ("states", "inputs", "takes", "offers", "sensors", "disturbances")
            )
            X = {
                key: array(kind[key], shape)
                for key, shape in {
                    "A": (n, n),
                    "B": (n, m),
                    "D": (n, q),
                    "E": (n, d),
                    "C": (p, n),
                    "N": (p, q),
                    "H": (k, n),
                    "F": (k, q),
                    "Fw": (k, d),
                }.items()
            }
            K = array(gains["K"], (m, p))
            own = np.zeros((q, n))
            for link in self.links:
                if link["to"]["kind"] == kind["name"] and Fraction(link["own_strength"]):
                    take = [s["name"] for s in kind["takes"]].index(link["to"]["take"])
                    offer = [s["name"] for s in kind["offers"]].index(link["from"]["offer"])
                    own[take] += float(Fraction(link["own_strength"])) * X["H"][offer]
            Dc = X["D"] + X["B"] @ K @ X["N"]
            U = K @ X["C"] - K @ X["N"] @ own
            self.units.append(
                {
                    "A": X["A"] + X["B"] @ K @ X["C"] - Dc @ own,
                    "D": Dc,
                    "E": X["E"],
                    "x": np.vstack([X["H"], np.eye(n), U]),
                    "v": np.vstack([X["F"], np.zeros((n, q)), K @ X["N"]]),
                    "w": np.vstack([X["Fw"], np.zeros((n, d)), np.zeros((m, d))]),
                    "offers": k,
                    "states": n,
                    "peaks": np.array([float(Fraction(s["peak"])) for s in kind["disturbances"]]),
                    "limits": [s["band"] for s in kind["offers"]]
                    + [s["band"] for s in kind["states"]]
                    + [s["limit"] for s in kind["inputs"]],
                }
            )

    def arriving(self, sizes: dict[tuple[str, str], float], alpha: float) -> list[np.ndarray]:
        found = [np.zeros(len(kind["takes"])) for kind in self.kinds]
        for link in self.links:
            i = self.names.index(link["to"]["kind"])
            take = [s["name"] for s in self.kinds[i]["takes"]].index(link["to"]["take"])
            g = abs(float(Fraction(link["strength"]))) * np.exp(alpha * float(Fraction(link["delay"])))
            found[i][take] += g * sizes[link["from"]["kind"], link["from"]["offer"]]
        return found


def responses(unit: dict[str, Any], alpha: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """(integral |x e^(At) D| + |v|, the same for E and w, sup |x e^(At)|_1) by fine sampling of the exponential."""
    A = unit["A"] + alpha * np.eye(unit["states"])
    modes = np.linalg.eigvals(A)
    if modes.real.max() >= 0:
        raise ArithmeticError("a weighted unit is unstable")
    h = 1 / (150 * max(1e-9, float(np.abs(modes).max()), float(np.abs(A).max())))
    steps = int(min(400000, np.ceil(22 / -modes.real.max() / h)))
    powers = [np.eye(unit["states"])]
    block = scipy.linalg.expm(A * h)
    size = 1
    table = np.eye(unit["states"])[None]
    while size < steps + 1:
        table = np.concatenate([table, table @ np.linalg.matrix_power(block, size)])
        size *= 2
    del powers
    kernel = np.einsum("kn,tnm->tkm", unit["x"], table)
    weight = np.full(size, h)
    weight[0] = weight[-1] = h / 2
    inputs = np.abs(np.einsum("tkn,nm->tkm", kernel, np.hstack([unit["D"], unit["E"]])))
    total = np.einsum("t,tkm->km", weight, inputs)
    q = unit["D"].shape[1]
    return (
        total[:, :q] + np.abs(unit["v"]),
        total[:, q:] + np.abs(unit["w"]),
        np.abs(kernel).sum(axis=2).max(axis=0),
    )


def peak_numbers(document: dict[str, Any], alpha: float) -> dict[str, Any]:
    """Radius, line peaks per declared disturbance, per unit disturbance and per initial size, at one rate."""
    model = Model(document)
    outlets = [(i, k) for i, unit in enumerate(model.units) for k in range(unit["offers"])]
    names = [(model.names[i], model.kinds[i]["offers"][k]["name"]) for i, k in outlets]
    parts = [responses(unit, alpha) for unit in model.units]
    M = np.zeros((len(names), len(names)))
    for j, name in enumerate(names):
        arriving = model.arriving({other: float(other == name) for other in names}, alpha)
        for row, (i, k) in enumerate(outlets):
            M[row, j] = parts[i][0][k] @ arriving[i]
    radius = float(np.abs(np.linalg.eigvals(M)).max()) if len(M) else 0.0
    result: dict[str, Any] = {"radius": radius, "M": M, "model": model}
    if radius >= 1:
        return result
    starts = []
    for unit, part in zip(model.units, parts, strict=True):
        through = np.abs(np.hstack([unit["v"], unit["w"]])).sum(axis=1) > 0
        through[unit["offers"] :] = False
        starts.append(np.where(through, np.maximum(part[2], 1), part[2]))
    for key, own in (
        ("base", [part[1] @ unit["peaks"] for unit, part in zip(model.units, parts, strict=True)]),
        ("unit", [part[1].sum(axis=1) for part in parts]),
        ("start", starts),
    ):
        z = np.linalg.solve(np.eye(len(names)) - M, np.array([own[i][k] for i, k in outlets])) if len(names) else []
        arriving = model.arriving(dict(zip(names, z, strict=True)), alpha)
        result[key] = [mine + part[0] @ v for mine, part, v in zip(own, parts, arriving, strict=True)]
    return result


def storage_numbers(document: dict[str, Any]) -> dict[str, Any]:
    """The same for the storage route, with the document's P, a and multipliers (eigenvalue test included)."""
    model = Model(document)
    evidence, V, zeta = [], [], {}
    for unit, entry, kind in zip(model.units, document["evidence"], model.kinds, strict=True):
        n = unit["states"]
        P = array(entry["P"], (n, n))
        a = float(Fraction(entry["a"]))
        tau, tau_w = (np.array([float(Fraction(v)) for v in entry[key]]) for key in ("tau", "tau_w"))
        T = np.diag(np.concatenate([tau, tau_w]))
        PD = P @ np.hstack([unit["D"], unit["E"]])
        S = np.block([[unit["A"].T @ P + P @ unit["A"] + 2 * a * P, PD], [PD.T, -T]])
        scale = 1 / np.sqrt(np.abs(np.diag(S)).clip(1e-300))
        if np.linalg.eigvalsh(S * scale[:, None] * scale[None, :]).max() > 1e-7 or np.linalg.eigvalsh(P).min() <= 0:
            raise ArithmeticError("the inequality does not hold")
        evidence.append((P, a, tau, tau_w))
        V.append(np.linalg.inv(P))
        for k, offer in enumerate(kind["offers"]):
            h = unit["x"][k]
            zeta[kind["name"], offer["name"]] = float(np.sqrt(h @ V[-1] @ h))

    def rows(r: np.ndarray, waves: list[np.ndarray]) -> np.ndarray:
        sizes = {key: z * r[model.names.index(key[0])] for key, z in zeta.items()}
        arriving = model.arriving(sizes, 0.0)
        return np.array(
            [
                np.sqrt((tau @ v**2 + tau_w @ w**2) / (2 * a))
                for (_, a, tau, tau_w), v, w in zip(evidence, arriving, waves, strict=True)
            ]
        )

    calm = [0 * unit["peaks"] for unit in model.units]
    result: dict[str, Any] = {"model": model, "rows": lambda r: rows(r, calm), "evidence": evidence, "V": V}
    for key, waves in (
        ("base", [unit["peaks"] for unit in model.units]),
        ("unit", [unit["peaks"] * 0 + 1 for unit in model.units]),
    ):
        r = np.zeros(len(model.units))
        for _ in range(4000):
            r = rows(r, waves)
        result[key] = _lines(model, V, zeta, r)
    s = np.array([float(Fraction(entry["s"])) for entry in document["point"]])
    result["ratio"] = rows(s, calm) / s
    size = max(float(np.sqrt(np.abs(P).sum())) / v for (P, *_), v in zip(evidence, s, strict=True))
    result["start"] = _lines(model, V, zeta, size * s)
    return result


def _lines(model: Model, V: list[np.ndarray], zeta: dict[tuple[str, str], float], r: np.ndarray) -> list[np.ndarray]:
    arriving = model.arriving({key: z * r[model.names.index(key[0])] for key, z in zeta.items()}, 0.0)
    return [
        np.sqrt(np.einsum("kn,nm,km->k", unit["x"], inverse, unit["x"])) * size + np.abs(unit["v"]) @ v
        for unit, inverse, size, v in zip(model.units, V, r, arriving, strict=True)
    ]


def is_true(document: dict[str, Any]) -> bool:
    """Whether every number that the document claims holds, as far as floats can tell."""
    try:
        return _holds(document)
    except (ArithmeticError, ValueError, np.linalg.LinAlgError, KeyError, TypeError):
        return False


def _holds(document: dict[str, Any]) -> bool:
    def value(text: str) -> float:
        return float("inf") if text == "inf" else float(Fraction(text))

    up, down = 1 + TOLERANCE, 1 - TOLERANCE
    alpha, target = value(document["constants"]["alpha"]), value(document["target"])
    lower, upper = value(document["radius"]["lower"]), value(document["radius"]["upper"])
    if document["route"] == "peak":
        found, fast = peak_numbers(document, 0.0), peak_numbers(document, alpha)
        if found["radius"] >= 1 or fast["radius"] >= 1:
            return False
        good = lower <= found["radius"] * up + 1e-9 and upper >= found["radius"] * down
        s, low = (np.array([value(entry[key]) for entry in document["point"]]) for key in ("s", "low"))
        good &= bool(np.all(s > 0) and np.all(found["M"] @ s <= upper * up * s + 1e-12))
        good &= bool(np.all(low >= 0) and np.all(found["M"] @ low >= lower * down * low - 1e-9))
        rates = fast["start"]
    else:
        found = storage_numbers(document)
        ratio = found["ratio"]
        good = lower <= ratio.max() * up and upper >= ratio.max() * down
        for name, (_, a, _, _), q in zip(found["model"].names, found["evidence"], ratio, strict=True):
            oldest = max((value(x["delay"]) for x in found["model"].links if x["to"]["kind"] == name), default=0.0)
            good &= alpha <= a * (1 - q**2 * np.exp(2 * alpha * oldest)) * up
        rates = found["start"]
    units = found["model"].units
    good &= alpha > 0 and 0 <= lower <= upper <= target < 1
    states = [slice(unit["offers"], unit["offers"] + unit["states"]) for unit in units]
    good &= value(document["constants"]["C"]) >= down * max(r[k].max() for r, k in zip(rates, states, strict=True))
    good &= value(document["constants"]["G"]) >= down * max(
        r[k].max() for r, k in zip(found["unit"], states, strict=True)
    )
    base, size, start = (np.concatenate(found[key]) for key in ("base", "unit", "start"))
    limits = np.array([np.inf if v is None else value(v) for unit in units for v in unit["limits"]])
    good &= bool(np.all([value(p["value"]) >= down * b for p, b in zip(document["peaks"], base, strict=True)]))
    good &= [p["limit"] for p in document["peaks"]] == [v for unit in units for v in unit["limits"]]
    held = np.isfinite(limits)
    for key, own, per in (("X0", base, start), ("w", 0 * base, size), ("factor", 0 * base, base)):
        number = value(document["validity"][key])
        if np.isinf(number):
            good &= not np.any(per[held] > 0)
        else:
            good &= number >= 0 and bool(np.all((own + per * number)[held] <= limits[held] * up))
    return bool(good)
