"""Runs of the equations as they were written: nonlinear terms and uncertain parameters included, nothing linearised.

The proof covers these terms as links of a unit to itself. Here they act as themselves, so that a mistake in that
translation would show. Stepping: the classical fourth-order Runge-Kutta method on a fixed grid (error O(h^4)); a late
value is read from the stored past, kept per step as the parabola through its two ends and its middle (error O(h^3),
jumps between steps stay jumps; one that arrives in the middle of a later step costs O(h)). A relative link subtracts
the unit's own fresh value at every stage.

Law: where nothing is nonlinear or uncertain the runs agree with synth.simulate.stepper.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from math import ceil
from typing import Any

import numpy as np

from synth.base.errors import InputError
from synth.network.gains import Gains
from synth.network.model import Kind
from synth.simulate.model import Array, Section, Wire
from synth.simulate.stepper import Block, Listener, Supply

Parameters = Mapping[str, Mapping[str, Array]]  # kind -> parameter -> value [cell, run], SI units
Drift = Callable[[int], Parameters]  # the parameters in force during a step
PASSES = 60  # of the iteration that settles offers with feed-through
CHUNK = 64
NOWHERE = 1e13  # stands for a value outside the domain of a formula; such a run is stopped by whoever watches it


@dataclass(frozen=True)
class _Place:
    """One kind in the stacked cell, with the rows its equations give (the others are linear)."""

    kind: Kind
    K: Array
    x: slice
    u: slice
    v: slice
    w: slice
    z: slice
    rows: dict[str, list[int]]  # group -> positions in the kind of the signals the dynamics give
    own: tuple[tuple[int, int, float], ...]  # (take, offer, own strength) of the kind's relative links
    tables: dict[str, Array]


class Written:
    """The section with its equations as written, ready to be stepped."""

    def __init__(self, section: Section, gains: Gains, wires: Sequence[Wire]) -> None:
        """``wires`` with a delay of zero act at once; all others read the past."""
        self.section = section
        self.fresh = [wire for wire in wires if wire.delay == 0]
        self.late = [wire for wire in wires if wire.delay != 0]
        self.places = [_place(section, kind, gains) for kind in section.network.kinds]
        self.direct = any(
            np.any(p.tables["F"]) or np.any(p.tables["Fu"]) or (p.kind.dynamics and _hears(p.kind)) for p in self.places
        )

    def rate(
        self, x: Array, late: Array, w: Array, parameters: Parameters, limits: Array | None
    ) -> tuple[Array, Array, Array]:
        """(x', z, y) at one instant: arrays [number, cell, run]; ``late`` is what the late links deliver."""
        section = self.section
        shape = x.shape[1:]
        z = np.zeros((section.block.sizes[4], *shape))
        y = np.zeros((section.block.sizes[5], *shape))
        v = late
        for _ in range(PASSES):
            before = z
            v = late + self._delivered(z)
            y, z = self._answers(x, v, w, parameters, limits, y)
            done = np.abs(z - before).max(initial=0.0) <= 1e-13 * (1.0 + np.abs(z).max(initial=0.0))
            if done or not np.all(np.isfinite(z)):
                break
        else:
            raise InputError(
                "offers with feed-through do not settle at once in the equations as written; give one of the links "
                "between them a delay, or leave the scenario 'written' out."
            )
        v = late + self._delivered(z)
        rate = np.empty_like(x)
        command = y if limits is None else np.clip(y, -limits[:, None, None], limits[:, None, None])
        for p in self.places:
            t, k = p.tables, p.kind
            here = x[p.x], command[p.u], v[p.v], w[p.w]
            rate[p.x] = _mul(t["A"], here[0]) + _mul(t["B"], here[1]) + _mul(t["D"], here[2]) + _mul(t["E"], here[3])
            if k.dynamics is not None:
                hx, hu, hv, hw = (_picked(values, p.rows[g]) for g, values in zip(_INPUTS, here, strict=True))
                rate[p.x][p.rows["states"]] = k.dynamics.rate(hx, hu, hv, hw, parameters.get(k.name))
        return np.nan_to_num(rate, nan=NOWHERE, posinf=NOWHERE, neginf=-NOWHERE), z, y

    def _answers(
        self, x: Array, v: Array, w: Array, parameters: Parameters, limits: Array | None, y: Array
    ) -> tuple[Array, Array]:
        """Commands and offers from states, inlets and disturbances (``y`` as known so far feeds offers with Fu)."""
        new_y, z = np.empty_like(y), np.empty((self.section.block.sizes[4], *x.shape[1:]))
        for p in self.places:
            t, k = p.tables, p.kind
            read = _mul(t["C"], x[p.x]) + _mul(t["N"], v[p.v])
            if k.dynamics is not None:
                mine = _picked(x[p.x], p.rows["states"]), _picked(v[p.v], p.rows["takes"])
                read[p.rows["sensors"]] = k.dynamics.sensors_at(*mine, parameters.get(k.name))
            new_y[p.u] = _mul(p.K, read)
            acting = new_y[p.u] if limits is None else np.clip(new_y[p.u], -_tall(limits[p.u]), _tall(limits[p.u]))
            z[p.z] = _mul(t["H"], x[p.x]) + _mul(t["F"], v[p.v]) + _mul(t["Fw"], w[p.w])
            if k.dynamics is not None:
                mine3 = (*mine, _picked(w[p.w], p.rows["disturbances"]))
                z[p.z][p.rows["offers"]] = k.dynamics.offers_at(*mine3, parameters.get(k.name))
            z[p.z] += _mul(t["Fu"], acting)
        return new_y, z

    def _delivered(self, z: Array) -> Array:
        """What links without delay and own parts of relative links put on the inlets."""
        v = np.zeros((self.section.block.sizes[1], *z.shape[1:]))
        for wire in self.fresh:
            _add(v, z, wire, self.section.cells)
        for p in self.places:
            for take, offer, strength in p.own:
                v[p.v.start + take] -= strength * z[p.z.start + offer]
        return v


_INPUTS = ("states", "inputs", "takes", "disturbances")


def run_written(
    written: Written,
    x: Array,
    step: Fraction,
    steps: int,
    disturbance: Supply,
    drift: Drift,
    listener: Listener,
    limits: Array | None,
) -> Array:
    """Take ``steps`` Runge-Kutta steps from x[state, cell, run]; the past before the start is held. Returns the last x.

    ``disturbance`` is constant over a step; ``drift`` gives the parameters in force during a step; ``limits`` clips the
    commands (None: no actuator saturates). The listener is fed Blocks and may stop runs, as in stepper.march.
    """
    h, section = float(step), written.section
    depth = max((ceil(wire.delay / step) for wire in written.late), default=1)
    cells, runs = x.shape[1:]
    nothing = np.zeros((section.block.sizes[1], cells, runs))
    still = np.zeros((section.block.sizes[2], cells, runs))
    _, z, _ = written.rate(x, nothing, still, drift(0), limits)
    past = np.repeat(np.stack([z] * 3)[None], depth, axis=0)  # [step, start middle end, offer, cell, run]
    stopped = np.zeros(runs, dtype=bool)
    kept: list[tuple[Array, ...]] = []
    for k in range(steps):
        w, parameters = disturbance(k, 1)[0], drift(k)
        if stopped.any():
            w = np.where(stopped, 0.0, w)
        v0, v1, v2 = (_read_past(written, past, step, share, nothing) for share in (0.0, 0.5, 1.0))
        a, z0, y0 = written.rate(x, v0, w, parameters, limits)
        b, _, _ = written.rate(x + 0.5 * h * a, v1, w, parameters, limits)
        c, middle, _ = written.rate(x + 0.5 * h * b, v1, w, parameters, limits)
        d, _, _ = written.rate(x + h * c, v2, w, parameters, limits)
        x = x + h / 6 * (a + 2 * b + 2 * c + d)
        _, z1, y1 = written.rate(x, v2, w, parameters, limits)
        past = np.concatenate([past[1:], np.stack([z0, middle, z1])[None]])
        kept.append((x, z0, z1, y0, y1, w))
        if len(kept) == CHUNK or k == steps - 1:
            asked = listener(_block(kept, k, h))
            kept = []
            if asked is not None and asked.any():
                stopped |= asked
                x[..., asked], past[..., asked] = 0.0, 0.0
                if stopped.all():
                    break
    return x


def _block(kept: list[tuple[Array, ...]], last: int, h: float) -> Block:
    x, z0, z1, y0, y1, w = (np.stack([one[i] for one in kept]) for i in range(6))
    first = last - len(kept) + 1
    return Block(first, np.asarray(first + 1 + np.arange(len(kept)), dtype=float) * h, x, z0, z1, y0, y1, w)


def _read_past(written: Written, past: Array, step: Fraction, share: float, nothing: Array) -> Array:
    """What the late links deliver at ``share`` (0 to 1) of the coming step."""
    v = nothing.copy()
    for wire in written.late:
        back = ceil(wire.delay / step)
        at = share + float(back - wire.delay / step)  # place within the piece that lies ``back`` steps before
        if at > 1:
            back, at = back - 1, at - 1
        weights = (2 * (at - 0.5) * (at - 1), 4 * at * (1 - at), 2 * at * (at - 0.5))
        offer = sum(q * past[len(past) - back, i, wire.offer] for i, q in enumerate(weights))
        _add(v, np.asarray(offer)[None], Wire(wire.take, 0, wire.at, wire.strength, wire.delay), written.section.cells)
    return v


def _add(v: Array, z: Array, wire: Wire, cells: int) -> None:
    near, far = max(0, -wire.at), cells - max(0, wire.at)
    if near < far:
        v[wire.take, near:far] += wire.strength * z[wire.offer, near + wire.at : far + wire.at]


def _place(section: Section, kind: Kind, gains: Gains) -> _Place:
    shape, name, dynamics = section.shape, kind.name, kind.dynamics
    tables = {key: getattr(kind, key).floats() for key in ("A", "B", "D", "E", "C", "N", "H", "F", "Fw")}
    tables["Fu"] = np.zeros((len(kind.offers), len(kind.inputs))) if kind.Fu is None else kind.Fu.floats()
    rows: dict[str, list[int]] = {}
    if dynamics is not None:
        for group in (*_INPUTS, "offers", "sensors"):
            rows[group] = [kind.index(group, signal) for signal, _ in getattr(dynamics, group)]
    own = tuple(
        (kind.index("takes", link.take), kind.index("offers", link.offer), float(link.own_strength))
        for link in section.network.links
        if link.kind == name and link.relative
    )
    x, u, v, w, z = (
        slice(*getattr(shape, group)[name]) for group in ("states", "inputs", "takes", "disturbances", "offers")
    )
    return _Place(kind, gains[name].K.floats(), x, u, v, w, z, rows, own, tables)


def _hears(kind: Kind) -> bool:
    """Whether an offer written as an equation may depend on what is taken."""
    return bool(np.any(kind.F.floats()))


def _picked(values: Array, rows: list[int]) -> Array:
    return values[rows] if rows else values[:0]


def _tall(limits: Array) -> Array:
    return limits[:, None, None]


def _mul(matrix: Array, values: Array) -> Array:
    """matrix @ values over the first axis of [number, cell, run]."""
    return np.tensordot(matrix, values, axes=(1, 0)) if matrix.size else np.zeros((matrix.shape[0], *values.shape[1:]))


def parameter_runs(section: Section, seed: int, dwell: int, names: Sequence[str]) -> tuple[Any, ...]:
    """The parameters of runs: one of ``names`` per run ('middle', 'low', 'high', 'mixed', 'changing').

    'mixed': every unit has its own values, each at one end of its range; 'changing': drawn anew every ``dwell`` steps.
    Returns (drift, whether any parameter is uncertain).
    """
    kinds = [kind for kind in section.network.kinds if kind.dynamics is not None and kind.dynamics.ranges]
    known: dict[int, Parameters] = {}

    def at(epoch: int) -> Parameters:
        if epoch in known:
            return known[epoch]
        rng = np.random.default_rng([seed, 17])
        found: dict[str, dict[str, Array]] = {}
        new = np.random.default_rng([seed, 18, epoch])
        for kind in kinds:
            assert kind.dynamics is not None
            found[kind.name] = {}
            for name, bounds in kind.dynamics.ranges.items():
                low, middle, high = (float(b) for b in bounds)
                columns = {"low": low, "high": high, "middle": middle}
                ends = rng.choice([low, high], section.cells), new.choice([low, high], section.cells)
                values = [ends[0] if r == "mixed" else ends[1] if r == "changing" else columns[r] for r in names]
                found[kind.name][name] = np.stack([np.broadcast_to(v, section.cells) for v in values], axis=-1)
        known.clear()
        known[epoch] = found
        return found

    return (lambda k: at(k // dwell)), bool(kinds)
