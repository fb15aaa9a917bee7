"""Units and links one by one, run in time: sparse matrices of all units, links that may change while running.

What a pattern's stepper (stepper.py) cannot do: every unit with its own links (members, edges, rules), links that
weaken, and wirings that change. Nothing is folded: the own part of a relative link is a wire from the unit to itself.
Stepping is the classical fourth-order Runge-Kutta method (error O(h^4)); a late value is read from the stored past,
kept per step as the parabola through its ends and its middle (error O(h^3); jumps between steps stay jumps).

Arrays are [number, unit, run]; numbers of different forms of unit lie one after the other, and those a unit does not
have stay zero. Matrices act on the first two axes together, number-major.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from math import ceil
from typing import Any

import numpy as np

from synth.base.errors import InputError
from synth.simulate.model import Array, System
from synth.simulate.stepper import Block, Listener, Ports, Supply

PASSES = 60
CHUNK = 64
NOWHERE = 1e100  # a run that grew beyond numbers is held here; whoever watches it stops it
_DENSE = 40_000


@dataclass(frozen=True, eq=False)
class Thread:
    """Links of one take, offer and delay (s): ``web`` [receiving unit, sending unit] holds the strengths, sparse."""

    take: int
    offer: int
    web: Any
    delay: Fraction

    def turned(self) -> Thread:
        """The same link in the time-reversed network."""
        return Thread(self.offer, self.take, self.web.T.tocsr(), self.delay)


Wires = Sequence[Thread]
Schedule = Callable[[int], "tuple[int, Wires]"]  # step -> (number of the wiring in force, its threads)
Rewired = Callable[[int, Array, Array], None]  # (number of the new wiring, x, past) -> changes both in place


def deliver(wires: Wires, z: Array, takes: int) -> Array:
    """What the threads put on the inlets [take, unit, run] from offers z[offer, unit, run]."""
    v = np.zeros((takes, *z.shape[1:]))
    for thread in wires:
        v[thread.take] += thread.web @ z[thread.offer]
    return v


class Weave:
    """All units of a section with their controllers closed and nothing folded; wires may change from step to step."""

    def __init__(self, system: System, wires: Wires) -> None:
        """``system``: sparse matrices of all units (whole), its ``B`` taking command corrections."""
        self.system = system
        self.direct = bool(system.F.nnz)
        self.shape = system.sizes
        self.tables = {
            name: _table(getattr(system, name)) for name in ("A", "D", "E", "B", "H", "F", "Fw", "Yx", "Yv", "Yw")
        }
        self.rewire(wires)

    def rewire(self, wires: Wires) -> None:
        """Put another wiring in force; threads without delay act at once, all others read the past."""
        small = [Thread(t.take, t.offer, _table(t.web), t.delay) for t in wires if t.web.nnz]
        self.fresh = [t for t in small if t.delay == 0]
        self.late = [t for t in small if t.delay != 0]

    def rate(self, x: Array, late: Array, w: Array, limits: Array | None) -> tuple[Array, Array, Array]:
        """(x', z, y) at one instant; ``late`` is what late links (or an adversary) put on the inlets."""
        shape, t = x.shape[1:], self.tables

        def mul(name: str, values: Array) -> Any:
            table = t[name]
            return 0.0 if table is None else (table @ values.reshape(-1, values.shape[2])).reshape(-1, *shape)

        base = np.zeros((self.shape[4], *shape)) + mul("H", x) + mul("Fw", w)
        z = base
        v = late + deliver(self.fresh, z, self.shape[1])
        if self.direct:
            for _ in range(PASSES):
                before, z = z, base + mul("F", v)
                v = late + deliver(self.fresh, z, self.shape[1])
                if np.abs(z - before).max(initial=0.0) <= 1e-13 * (1.0 + np.abs(z).max(initial=0.0)):
                    break
                if not np.all(np.isfinite(z)):
                    break
            else:
                raise InputError(
                    "offers with feed-through do not settle at once; give one of the links between them a delay."
                )
        y = np.zeros((self.shape[5], *shape)) + mul("Yx", x) + mul("Yv", v) + mul("Yw", w)
        rate = np.zeros_like(x) + mul("A", x) + mul("D", v) + mul("E", w)
        if limits is not None:
            rate = rate + mul("B", np.clip(y, -limits, limits) - y)
        return rate, z, y


def _table(matrix: Any) -> Any:
    """None where it is empty, dense where that is faster."""
    if not matrix.nnz:
        return None
    return matrix.toarray() if matrix.shape[0] * matrix.shape[1] <= _DENSE else matrix


def run_woven(
    weave: Weave,
    x: Array,
    step: Fraction,
    steps: int,
    disturbance: Supply,
    listener: Listener,
    limits: Array | None = None,
    schedule: Schedule | None = None,
    changed: Rewired | None = None,
    ports: Ports | None = None,
    oldest: Fraction = Fraction(0),
) -> Array:
    """Take ``steps`` steps from x[state, unit, run]; the past before the start is held. Returns the last x.

    ``disturbance`` is constant over a step. ``schedule`` says which wiring is in force in a step, ``changed`` is told
    when a new one begins; ``oldest`` bounds the delays of all wirings. ``ports`` gives the inlets of late links instead
    (step, z just before it). The listener is fed Blocks and may stop runs. ``limits`` [input, 1 or unit, 1].
    """
    h = float(step)
    takes, nw = weave.shape[1], weave.shape[2]
    nothing = np.zeros((takes, *x.shape[1:]))
    longest = max([oldest, *(t.delay for t in weave.late)])
    depth = max(1, ceil(longest / step))
    _, z, _ = weave.rate(x, nothing, np.zeros((nw, *x.shape[1:])), limits)
    past = np.repeat(np.stack([z] * 3)[None], depth, axis=0)  # [step, start middle end, offer, unit, run], a ring
    stopped, number = np.zeros(x.shape[2], dtype=bool), -1
    kept: list[tuple[Array, ...]] = []
    for k in range(steps):
        if schedule is not None:
            now, wires = schedule(k)
            if now != number:
                weave.rewire(wires)
                if changed is not None and number >= 0:
                    x = x.copy()  # the last block keeps what was there before
                    changed(now, x, past)
                number = now
        w = disturbance(k, 1)[0]
        if stopped.any():
            w = np.where(stopped, 0.0, w)
        if ports is not None:
            v0 = v1 = v2 = ports(k, past[(k - 1) % depth, 2])
        else:
            v0, v1, v2 = (_read(weave, past, k, step, share, nothing) for share in (0.0, 0.5, 1.0))
        a, z0, y0 = weave.rate(x, v0, w, limits)
        b, _, _ = weave.rate(x + 0.5 * h * a, v1, w, limits)
        c, middle, _ = weave.rate(x + 0.5 * h * b, v1, w, limits)
        d, _, _ = weave.rate(x + h * c, v2, w, limits)
        x = x + h / 6 * (a + 2 * b + 2 * c + d)
        if k % 16 == 0 and not np.all(np.isfinite(x)):
            x = np.nan_to_num(x, nan=NOWHERE, posinf=NOWHERE, neginf=-NOWHERE)
        _, z1, y1 = weave.rate(x, v2, w, limits)
        past[k % depth] = np.stack([z0, middle, z1])
        kept.append((x, z0, z1, y0, y1, w))
        if len(kept) == CHUNK or k == steps - 1:
            asked = listener(_block(kept, k, h))
            kept = []
            if asked is not None and asked.any():
                stopped |= asked
                x = np.where(asked, 0.0, x)
                past[..., asked] = 0.0
                if stopped.all():
                    break
    return x


def _block(kept: list[tuple[Array, ...]], last: int, h: float) -> Block:
    x, z0, z1, y0, y1, w = (np.stack([one[i] for one in kept]) for i in range(6))
    first = last - len(kept) + 1
    return Block(first, np.asarray(first + 1 + np.arange(len(kept)), dtype=float) * h, x, z0, z1, y0, y1, w)


def _read(weave: Weave, past: Array, k: int, step: Fraction, share: float, nothing: Array) -> Array:
    """What the late threads deliver at ``share`` (0 to 1) of step ``k``."""
    if not weave.late:
        return nothing
    v, depth = nothing.copy(), len(past)
    for thread in weave.late:
        back = ceil(thread.delay / step)
        at = share + float(back - thread.delay / step)  # place within the piece that lies ``back`` steps before
        if at > 1:
            back, at = back - 1, at - 1
        weights = (2 * (at - 0.5) * (at - 1), 4 * at * (1 - at), 2 * at * (at - 0.5))
        piece = past[(k - back) % depth]
        offer = sum(q * piece[i, thread.offer] for i, q in enumerate(weights))
        v[thread.take] += thread.web @ offer
    return v
