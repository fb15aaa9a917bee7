"""A second, numerical evaluation of what a certificate says, sharing no code with the program under test.

Everything here is floats, matrix exponentials and eigenvalues; relative errors are near 1e-5, far below the changes
that the tampering tests make. Units and arrivals are written out one by one for every description; a line with edges
by its bulk, a long piece at every edge, and short lines, each of which hears less than what the certificate is about.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

import numpy as np
import scipy.linalg

TOLERANCE = 2e-4
DEEP = 9  # cells of a long piece at an edge


def array(rows: list[list[str]], shape: tuple[int, int]) -> np.ndarray:
    return np.array([[float(Fraction(v)) for v in row] for row in rows], dtype=float).reshape(shape)


@dataclass
class Place:
    """A unit: its kind's number, what enters it as (link, source place or None), and the name of its point."""

    kind: int
    arrivals: list[tuple[dict[str, Any], int | None]] = field(default_factory=list)
    of: str = ""


def places_of(document: dict[str, Any], part: str = "") -> list[Place]:
    """The units of a document; of edges the ``part`` that is asked for: bulk, first, last or a number of cells."""
    model = document["model"]
    names = [kind["name"] for kind in model["kinds"]]
    if model["description"] == "members":
        listed = model["members"]
        found = [Place(k, of=name) for k, name in zip(listed["kind_of"], listed["units"], strict=True)]
        for n, to, source in listed["links"]:
            found[to].arrivals.append((model["links"][n], source if source >= 0 else None))
        return found
    if model["description"] != "edge pattern" or part == "bulk":
        cell = [name for name in names if name in model.get("cell", names)]
        found = [Place(names.index(name), of=name) for name in cell]
        for link in model["links"]:
            if link["to"]["kind"] in cell:
                source = cell.index(link["from"]["kind"])
                found[cell.index(link["to"]["kind"])].arrivals.append((link, source))
        return found
    return line_of(model, part)


def line_of(model: dict[str, Any], part: str) -> list[Place]:
    """A long piece at one edge, or a line with both."""
    names = [kind["name"] for kind in model["kinds"]]
    cell = [name for name in names if name in model["cell"]]
    axis = model["edges"][0].get("axis", 0)
    cells = DEEP if part in ("first", "last") else int(part)
    where = {"first": range(cells), "last": range(0, -cells, -1)}.get(part, range(cells))
    standing = {(c, slot): slot for c in where for slot in cell}
    shift = {"last": 0 if part == "last" else cells - 1, "first": 0}
    edges = [edge for edge in model["edges"] if part == edge["side"] or part.isdigit()]
    for edge in edges:
        for unit in edge["units"]:
            standing[unit["at"] + shift[edge["side"]], unit["instead_of"]] = unit["kind"]
    spots = list(standing)
    title = {"first": "first edge:", "last": "last edge:"}.get(part, f"line of {part}:")
    found = [Place(names.index(standing[spot]), of=f"{title} {spot[1]} {abs(spot[0])}") for spot in spots]
    signals = {kind["name"]: {g: [s["name"] for s in kind[g]] for g in ("takes", "offers")} for kind in model["kinds"]}
    main: dict[str, Any] = {}
    for link in model["links"]:
        if "sort" in link:
            for place in found:
                if names[place.kind] == link["to"]["kind"]:
                    place.arrivals.append((link, found.index(place)))
            continue
        main = main if "own_part" in link else link
        parts = [x for x in model["links"] if x["name"] == main["name"] and "own_part" in x and x["to"] == main["to"]]
        for i, (c, slot) in enumerate(spots):
            there = (c + main["at"][axis], main["from"]["kind"])
            inside = there in standing or (part == "first" and there[0] >= 0) or (part == "last" and there[0] <= 0)
            if slot != link["to"]["kind"] or not inside:
                continue
            receiver, sender = signals[standing[c, slot]], signals[standing.get(there, there[1])]
            relative = Fraction(main["own_strength"]) != 0 or parts
            fits = main["to"]["take"] in receiver["takes"] and main["from"]["offer"] in sender["offers"]
            if fits and (not relative or main["from"]["offer"] in receiver["offers"]):
                source = spots.index(there) if there in standing else None
                found[i].arrivals.append((link, i if "own_part" in link else source))
    for edge in edges:
        for link in edge["links"]:
            to = (link["to_place"] + shift[edge["side"]], link["slot"])
            there = (to[0] + link["at"][axis], link["source_slot"])
            i = spots.index(to)
            found[i].arrivals.append((link, i if "own_part" in link else spots.index(there)))
    return found


class Model:
    """The closed units of a document in floats, one per place, and its links as they stand in the file."""

    def __init__(self, document: dict[str, Any], part: str = "bulk") -> None:
        self.kinds = document["model"]["kinds"]
        self.links = document["model"]["links"]
        self.names = [kind["name"] for kind in self.kinds]
        self.places = places_of(document, part)
        self.units: list[dict[str, Any]] = []
        self.own: list[tuple[tuple[str, str, Fraction], ...]] = []
        self.tables: dict[float, tuple[np.ndarray, np.ndarray, np.ndarray]] = {}
        for place in self.places:
            kind = self.kinds[place.kind]
            own: dict[tuple[int, int], Fraction] = {}
            for link, _ in place.arrivals:
                if Fraction(link["own_strength"]):
                    take = [s["name"] for s in kind["takes"]].index(link["to"]["take"])
                    offer = [s["name"] for s in kind["offers"]].index(link["from"]["offer"])
                    own[take, offer] = own.get((take, offer), Fraction(0)) + Fraction(link["own_strength"])
            self.units.append(closed(kind, document["gains"][place.kind], own))
            named = [(kind["takes"][t]["name"], kind["offers"][k]["name"], g) for (t, k), g in sorted(own.items()) if g]
            self.own.append(tuple(named))
        self.outlets = [(i, k) for i, unit in enumerate(self.units) for k in range(unit["offers"])]
        self.first = np.cumsum([0] + [unit["offers"] for unit in self.units])

    def terms(self, i: int) -> list[tuple[int, list[tuple[int, float, float]]]]:
        """(take, alternatives) of place i: an alternative is (outlet, strength, delay), and the largest counts."""
        place, kind = self.places[i], self.kinds[self.places[i].kind]
        takes, mine = ([s["name"] for s in kind[g]] for g in ("takes", "offers"))
        found: list[tuple[int, list[tuple[int, float, float]]]] = []
        choices: dict[str, list[tuple[int, float, float]]] = {}
        for link, source in place.arrivals:
            options = []
            if source is not None:
                offers = [s["name"] for s in self.kinds[self.places[source].kind]["offers"]]
                outlet = int(self.first[source]) + offers.index(link["from"]["offer"])
                options.append((outlet, abs(float(Fraction(link["strength"]))), float(Fraction(link["delay"]))))
            if "weakens" in link:
                outlet = int(self.first[i]) + mine.index(link["from"]["offer"])
                options.append((outlet, abs(float(Fraction(link["own_strength"]))), 0.0))
            if "choice" not in link:
                found.append((takes.index(link["to"]["take"]), options))
            elif link["choice"] in choices:
                choices[link["choice"]] += options
            else:
                choices[link["choice"]] = options
                found.append((takes.index(link["to"]["take"]), options))
        return found

    def table(self, alpha: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """(place in all takes, outlets, weights) of every term, its alternatives side by side."""
        if alpha not in self.tables:
            self.ends = np.cumsum([0] + [unit["D"].shape[1] for unit in self.units])
            terms = [(self.ends[i] + t, o) for i in range(len(self.units)) for t, o in self.terms(i) if o]
            wide = max((len(options) for _, options in terms), default=1)
            outlets, weights = np.zeros((len(terms), wide), dtype=int), np.zeros((len(terms), wide))
            for n, (_, options) in enumerate(terms):
                for m, (j, g, d) in enumerate(options):
                    outlets[n, m], weights[n, m] = j, g * np.exp(alpha * d)
            self.tables[alpha] = np.array([t for t, _ in terms], dtype=int), outlets, weights
        return self.tables[alpha]

    def arriving(self, sizes: np.ndarray, alpha: float) -> list[np.ndarray]:
        """What arrives at every take of every place, given the size of every outlet."""
        at, outlets, weights = self.table(alpha)
        total = np.zeros(self.ends[-1])
        if len(at):
            np.add.at(total, at, (weights * sizes[outlets]).max(axis=1))
        return [total[a:b] for a, b in zip(self.ends[:-1], self.ends[1:], strict=True)]

    def by_kind(self, parts: list[np.ndarray]) -> dict[int, np.ndarray]:
        """The largest of every line over the places of a kind."""
        found: dict[int, np.ndarray] = {}
        for place, values in zip(self.places, parts, strict=True):
            found[place.kind] = np.maximum(found[place.kind], values) if place.kind in found else np.asarray(values)
        return found


def closed(kind: dict[str, Any], gains: dict[str, Any], own: dict[tuple[int, int], Fraction]) -> dict[str, Any]:
    """One unit with its loop closed and its own parts folded in."""
    n, m, q, k, p, d = (len(kind[g]) for g in ("states", "inputs", "takes", "offers", "sensors", "disturbances"))
    shapes = {"A": (n, n), "B": (n, m), "D": (n, q), "E": (n, d), "C": (p, n), "N": (p, q), "H": (k, n)}
    shapes |= {"F": (k, q), "Fw": (k, d)}
    X = {key: array(kind[key], shape) for key, shape in shapes.items()}
    K = array(gains["K"], (m, p))
    back = np.zeros((q, n))
    for (take, offer), g in own.items():
        back[take] += float(g) * X["H"][offer]
    Dc = X["D"] + X["B"] @ K @ X["N"]
    U = K @ X["C"] - K @ X["N"] @ back
    return {
        "A": X["A"] + X["B"] @ K @ X["C"] - Dc @ back,
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


def responses(unit: dict[str, Any], alpha: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """(integral |x e^(At) D| + |v|, the same for E and w, sup |x e^(At)|_1) by fine sampling of the exponential."""
    A = unit["A"] + alpha * np.eye(unit["states"])
    modes = np.linalg.eigvals(A)
    if modes.real.max() >= 0:
        raise ArithmeticError("a weighted unit is unstable")
    h = 1 / (150 * max(1e-9, float(np.abs(modes).max()), float(np.abs(A).max())))
    steps = int(min(400000, np.ceil(22 / -modes.real.max() / h)))
    block = scipy.linalg.expm(A * h)
    size = 1
    table = np.eye(unit["states"])[None]
    while size < steps + 1:
        table = np.concatenate([table, table @ np.linalg.matrix_power(block, size)])
        size *= 2
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


def all_responses(model: Model, alpha: float) -> list[tuple[np.ndarray, np.ndarray, np.ndarray]]:
    known: dict[Any, Any] = {}
    for place, own, unit in zip(model.places, model.own, model.units, strict=True):
        if (place.kind, own) not in known:
            known[place.kind, own] = responses(unit, alpha)
    return [known[place.kind, own] for place, own in zip(model.places, model.own, strict=True)]


Operator = Callable[[np.ndarray], np.ndarray]


def radius_of(rows: Operator, size: int) -> float:
    """Growth of s -> s + G(s), which converges for every monotone homogeneous operator; less one."""
    s, growth = np.ones(size), np.zeros(0)
    for _ in range(3000 if size else 0):
        new = s + rows(s)
        growth = np.append(growth[-200:], float(new.max() / s.max()))
        s = new / new.max()
        if len(growth) > 30 and np.ptp(growth[-30:]) < 1e-9:
            break
    return float(np.exp(np.mean(np.log(growth[-30:])))) - 1 if size else 0.0


def fixed_point(rows: Operator, own: np.ndarray) -> np.ndarray:
    """The least z with z = G(z) + own, from below."""
    z = np.array(own, dtype=float)
    for _ in range(20000):
        new = rows(z) + own
        if np.all(new - z <= 1e-9 * new):
            break
        z = new
    return z


def peak_numbers(document: dict[str, Any], alpha: float, part: str = "bulk") -> dict[str, Any]:
    """Radius, line peaks per declared disturbance, per unit disturbance and per initial size, at one rate."""
    model = Model(document, part)
    parts = all_responses(model, alpha)

    def arriving(sizes: np.ndarray) -> list[np.ndarray]:
        return model.arriving(sizes, alpha)

    def rows(sizes: np.ndarray) -> np.ndarray:
        v = arriving(sizes)
        offers = [p[0][: unit["offers"]] @ x for p, unit, x in zip(parts, model.units, v, strict=True)]
        return np.concatenate([np.zeros(0), *offers])

    radius = radius_of(rows, len(model.outlets))
    result: dict[str, Any] = {"radius": radius, "rows": rows, "model": model}
    if radius >= 1:
        return result
    starts = []
    for unit, one in zip(model.units, parts, strict=True):
        through = np.abs(np.hstack([unit["v"], unit["w"]])).sum(axis=1) > 0
        through[unit["offers"] :] = False
        starts.append(np.where(through, np.maximum(one[2], 1), one[2]))
    for key, own in (
        ("base", [one[1] @ unit["peaks"] for unit, one in zip(model.units, parts, strict=True)]),
        ("unit", [one[1].sum(axis=1) for one in parts]),
        ("start", starts),
    ):
        z = fixed_point(rows, np.array([own[i][k] for i, k in model.outlets]))
        lines = [mine + one[0] @ v for mine, one, v in zip(own, parts, arriving(z), strict=True)]
        result[key] = model.by_kind(lines)
    return result


def storage_numbers(document: dict[str, Any], part: str = "bulk") -> dict[str, Any]:
    """The same for the storage route, with the document's P, a and multipliers (eigenvalue test included)."""
    model = Model(document, part)
    entries = {
        (e["kind"], tuple((x["take"], x["offer"], Fraction(x["strength"])) for x in e["own"])): e
        for e in document["evidence"]
    }
    evidence, V, zeta = [], [], []
    for unit, place, own in zip(model.units, model.places, model.own, strict=True):
        entry, n = entries[model.names[place.kind], own], unit["states"]
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
        zeta += [float(np.sqrt(h @ V[-1] @ h)) for h in unit["x"][: unit["offers"]]]
    station = np.array([i for i, _ in model.outlets], dtype=int)
    sizes = np.array(zeta)

    def rows(r: np.ndarray, waves: list[np.ndarray]) -> np.ndarray:
        arriving = model.arriving(sizes * r[station], 0.0)
        squares = [
            (tau @ v**2 + tau_w @ w**2) / (2 * a)
            for (_, a, tau, tau_w), v, w in zip(evidence, arriving, waves, strict=True)
        ]
        return np.sqrt(np.array(squares))

    def lines(r: np.ndarray) -> dict[int, np.ndarray]:
        arriving = model.arriving(sizes * r[station], 0.0)
        return model.by_kind([
            np.sqrt(np.einsum("kn,nm,km->k", unit["x"], inverse, unit["x"])) * size + np.abs(unit["v"]) @ v
            for unit, inverse, size, v in zip(model.units, V, r, arriving, strict=True)
        ])  # fmt: skip

    calm = [0 * unit["peaks"] for unit in model.units]
    radius = radius_of(lambda r: rows(r, calm), len(model.units))
    result: dict[str, Any] = {"model": model, "rows": lambda r: rows(r, calm), "evidence": evidence, "radius": radius}
    for key, waves in (
        ("base", [unit["peaks"] for unit in model.units]),
        ("unit", [unit["peaks"] * 0 + 1 for unit in model.units]),
    ):
        r = np.zeros(len(model.units))
        for _ in range(4000):
            new = rows(r, waves)
            if np.all(np.abs(new - r) <= 1e-10 * new):
                break
            r = new
        result[key] = lines(r)
    known = {entry["of"]: float(Fraction(entry["fast"])) for entry in document["point"]}
    s = np.array([known.get(place.of, known.get(model.names[place.kind], np.nan)) for place in model.places])
    s = np.where(np.isnan(s), min(known.values()), s)
    result["ratio"] = rows(s, calm) / s
    size = max(float(np.sqrt(np.abs(P).sum())) / v for (P, *_), v in zip(evidence, s, strict=True))
    result["start"] = lines(size * s)
    return result


def parts_of(document: dict[str, Any]) -> list[str]:
    """The pieces in which a document is evaluated."""
    if document["model"]["description"] != "edge pattern":
        return [""]
    sides = [edge["side"] for edge in document["model"]["edges"]]
    least = document["windows"].get("least")
    return ["bulk", *sides] + ([] if least is None else [str(least), str(least + 1), str(least + 5)])


def is_true(document: dict[str, Any]) -> bool:
    """Whether every number that the document claims holds, as far as floats can tell."""
    try:
        return _holds(document)
    except (ArithmeticError, ValueError, np.linalg.LinAlgError, KeyError, TypeError, StopIteration):
        return False


def merged(found: list[dict[str, Any]], key: str) -> list[np.ndarray]:
    """The largest of every line of every kind over all pieces, kind by kind."""
    kinds = found[0]["model"].kinds
    return [np.max([one[key][k] for one in found if k in one[key]], axis=0) for k in range(len(kinds))]


def _holds(document: dict[str, Any]) -> bool:
    def value(text: str) -> float:
        return float("inf") if text == "inf" else float(Fraction(text))

    up, down = 1 + TOLERANCE, 1 - TOLERANCE
    alpha, target = value(document["constants"]["alpha"]), value(document["target"])
    lower, upper = value(document["radius"]["lower"]), value(document["radius"]["upper"])
    parts = parts_of(document)
    if document["route"] == "peak":
        found = [peak_numbers(document, 0.0, part) for part in parts]
        fast = [peak_numbers(document, alpha, part) for part in parts]
        if max(one["radius"] for one in found + fast) >= 1:
            return False
        rates = merged(fast, "start")
        good = True
    else:
        found = [storage_numbers(document, part) for part in parts]
        good = True
        for one, part in zip(found, parts, strict=True):
            if part in ("first", "last"):
                continue  # what lies behind the piece is not in it, so its last rows say nothing about the rate
            for i, ((_, a, _, _), q) in enumerate(zip(one["evidence"], one["ratio"], strict=True)):
                delays = [d for _, options in one["model"].terms(i) for _, _, d in options]
                oldest = max(delays, default=0.0)
                good &= part.isdigit() or alpha <= a * (1 - q**2 * np.exp(2 * alpha * oldest)) * up
        rates = merged([one for one, part in zip(found, parts, strict=True) if not part.isdigit()], "start")
    radius = max(one["radius"] for one in found)
    slack = up if len(parts) == 1 else 1.02  # a long piece at an edge hears a little less than the half line
    good &= lower <= radius * slack + 1e-9 and upper >= radius * down
    if parts == [""] and document["route"] == "peak":
        s, low = (np.array([value(entry[key]) for entry in document["point"]]) for key in ("s", "low"))
        rows = found[0]["rows"]
        good &= bool(np.all(s > 0) and np.all(rows(s) <= upper * up * s + 1e-12))
        good &= bool(np.all(low >= 0) and np.all(rows(low) >= lower * down * low - 1e-9))
    kinds = document["model"]["kinds"]
    good &= alpha > 0 and 0 <= lower <= upper <= target < 1
    states = [slice(len(kind["offers"]), len(kind["offers"]) + len(kind["states"])) for kind in kinds]
    good &= value(document["constants"]["C"]) >= down * max(r[k].max() for r, k in zip(rates, states, strict=True))
    worst = merged(found, "unit")
    good &= value(document["constants"]["G"]) >= down * max(r[k].max() for r, k in zip(worst, states, strict=True))
    base, size = np.concatenate(merged(found, "base")), np.concatenate(worst)
    start = np.concatenate(merged([one for one, p in zip(found, parts, strict=True) if not p.isdigit()], "start"))
    bounds = [[s["band"] for g in ("offers", "states") for s in kind[g]] + [s["limit"] for s in kind["inputs"]]
              for kind in kinds]  # fmt: skip
    limits = np.array([np.inf if v is None else value(v) for row in bounds for v in row])
    good &= bool(np.all([value(p["value"]) >= down * b for p, b in zip(document["peaks"], base, strict=True)]))
    good &= [p["limit"] for p in document["peaks"]] == [v for row in bounds for v in row]
    held = np.isfinite(limits)
    for key, own, per in (("X0", base, start), ("w", 0 * base, size), ("factor", 0 * base, base)):
        number = value(document["validity"][key])
        if np.isinf(number):
            good &= not np.any(per[held] > 0)
        else:
            good &= number >= 0 and bool(np.all((own + per * number)[held] <= limits[held] * up))
    return bool(good)
