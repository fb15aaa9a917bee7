"""Constants of theory 3c unit by unit in plain floats: a slow stand-in for a certificate of any description.

Peak gains by step-held kernels on a fine grid, the largest sizes by repeated substitution over arrivals.
"""

from __future__ import annotations

import numpy as np

from synth.gain.closed import close_plan
from synth.gain.plan import Wiring, plan_of_units
from synth.network.gains import Gains
from tests.simulate.claims import Constants, StandIn, StandInPeak, Validity, integral_of_absolute


def unit_stand_in(
    wiring: Wiring, gains: Gains, alpha: float, slack: float = 1e-4, cells: int = 4000, by_kind: bool = False
) -> StandIn:
    """C, alpha, G and a peak per unit and signal; ``by_kind``: the largest of each kind instead (rules, patterns)."""
    plan = plan_of_units(wiring)
    closed = close_plan(plan, gains)
    groups = ("states", "offers", "inputs")
    tables = [[_tables(unit, a, cells) for unit in closed] for a in (0.0, alpha)]

    def sizes(a: int, own):
        """Peaks per unit and group, from what each signal has of its own."""
        spec = plan.unit_spec.tolist()
        z = [np.zeros(len(closed[s].kind.offers)) for s in spec]
        for _ in range(3000):
            before, v = z, _intake(wiring, z, alpha if a else 0.0)
            z = [own(s)["offers"] + tables[a][s]["offers"][0] @ v[i] for i, s in enumerate(spec)]
            if all(np.all(x <= y * (1 + 1e-13)) for x, y in zip(z, before, strict=True)):
                break
        else:
            raise AssertionError("the radius is not below one")
        v = _intake(wiring, z, alpha if a else 0.0)
        return [{g: own(s)[g] + tables[a][s][g][0] @ v[i] for g in groups} for i, s in enumerate(spec)]

    def declared(s):
        w = np.array([float(d.peak) for d in closed[s].kind.disturbances])
        return {g: tables[0][s][g][1] @ w for g in groups}

    base = sizes(0, declared)
    unit = sizes(0, lambda s: {g: tables[0][s][g][1].sum(axis=1) for g in groups})
    free = sizes(1, lambda s: {g: tables[1][s][g][2] for g in groups})
    roles = {"states": "state", "offers": "offer", "inputs": "actuator"}
    stated: dict[tuple[str, str, str], tuple[float, str]] = {}
    for i, name in enumerate(wiring.names):
        kind = wiring.kinds[wiring.kind[i]]
        for group, role in roles.items():
            for k, signal in enumerate(getattr(kind, group)):
                key = (kind.name if by_kind else name, role, signal.name)
                value = float(base[i][group][k]) * (1 + slack)
                stated[key] = (max(value, stated.get(key, (0.0, ""))[0]), signal.unit)
    peaks = tuple(StandInPeak(*key, value, unit_of) for key, (value, unit_of) in stated.items())
    C = max(x["states"].max() for x in free) * (1 + slack)
    G = max(x["states"].max() for x in unit) * (1 + slack)
    return StandIn(True, Constants(C, alpha, G), peaks, Validity(None, None, None))


def _tables(unit, a, cells):
    A = unit.A.floats() + a * np.eye(unit.A.shape[0])
    DE = np.hstack([unit.D.floats(), unit.E.floats()])
    takes = unit.D.shape[1]
    found = {}
    for group, R, F, Fw in (
        ("states", np.eye(len(A)), np.zeros((len(A), takes)), None),
        ("offers", unit.H.floats(), unit.F.floats(), unit.Fw.floats()),
        ("inputs", unit.U.floats(), unit.UV.floats(), None),
    ):
        total, free = integral_of_absolute(A, DE, R, cells=cells)
        direct = np.hstack([F, np.zeros((len(R), unit.E.shape[1])) if Fw is None else Fw])
        total = total + np.abs(direct)
        found[group] = total[:, :takes], total[:, takes:], free
    return found


def _intake(wiring, z, alpha):
    """Literal: over the arrivals; a link that may weaken brings the larger of the neighbour's and the own part."""
    kinds = {kind.name: kind for kind in wiring.kinds}
    v = [np.zeros(len(wiring.kinds[k].takes)) for k in wiring.kind]
    together: dict[tuple[int, int, str], float] = {}
    for i, j, n in zip(wiring.to, wiring.source, wiring.link, strict=True):
        link = wiring.links[n]
        take = kinds[link.kind].index("takes", link.take)
        near = 0.0
        if j >= 0:
            near = abs(float(link.strength)) * np.exp(alpha * float(link.delay))
            near *= z[j][kinds[link.source_kind].index("offers", link.offer)]
        if link.weakens:
            near = max(near, abs(float(link.own_strength)) * z[i][kinds[link.kind].index("offers", link.offer)])
        if link.choice:
            key = (int(i), take, link.choice)
            together[key] = max(near, together.get(key, 0.0))
        else:
            v[i][take] += near
    for (i, take, _), value in together.items():
        v[i][take] += value
    return v
