"""Exact stepping on a fixed grid: matrix exponentials for the units, stored past for the links with delay.

Over one step of length h, with w and the command correction d constant and every delayed inlet a cubic polynomial of
time,

    x(t+h) = e^{Ah} x(t) + sum_q J_q c_q + Gamma_E w + Gamma_B d,     J_q = integral_0^h e^{A(h-s)} D (s/h)^q ds

is exact (J_q = q! phi_{q+1}(hA) hD, read off one block exponential). Links without delay are part of A
(model.fold_fresh), so
without delayed links there is no discretisation error at all. The past of an offered signal is kept per step as the
cubic Hermite
polynomial through its values and derivatives at both ends; its error, O(h^4), is the only one. A delay that is no
multiple of the
step reads the pieces of two stored steps. Law: the answer to a sum of inputs is the sum of the answers, and a later
start gives the
same answer later (while no actuator is at its limit).

Not exact: at an actuator limit the correction d = (limited command) - (command at the start of the step) is held over
the step, an
error O(h) while the limit is active and zero otherwise. Samples lie on the grid: a maximum between two samples is
missed by at most
(h omega)^2/8 of its height for motion of angular frequency omega.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.simulate.maps import (
    as_sparse,
    exponential,
    eye,
    inlet_maps,
    input_map,
    like_system,
    settle,
    side_by_side,
    zeros,
)
from synth.simulate.model import Array, System, Wire

CHUNK = 128  # steps handed to a listener at once, fewer where that is more than CHUNK_NUMBERS numbers
CHUNK_NUMBERS = 4_000_000


@dataclass(frozen=True)
class Block:
    """Consecutive steps k .. k+K-1 of all runs; arrays are [step, number, cell, run].

    ``x`` at the end of each step; ``z0``, ``z1`` and ``y0``, ``y1`` offers and outputs just after its start and just
    before its
    end; ``w`` the disturbance during it. ``times`` in s are the ends of the steps. Views: valid only until the listener
    returns.
    """

    first: int
    times: Array
    x: Array
    z0: Array
    z1: Array
    y0: Array
    y1: Array
    w: Array


Listener = Callable[[Block], "NDArray[np.bool_] | None"]
Supply = Callable[[int, int], Array]  # (first step, number of steps) -> w[step, disturbance, cell, run]
Ports = Callable[[int, Array], Array]  # (step, z[offer, cell, run] just before it) -> v[take, cell, run] held over it


class Stepper:
    """One-step maps of a system and its delayed wires for a fixed step; built once, used by any number of marches."""

    def __init__(self, system: System, wires: Sequence[Wire], step: Fraction, given: bool = False) -> None:
        """Prepare the maps for steps of ``step`` seconds.

        ``given``: the inlets are not wired but given from outside, constant per step (``wires`` is then ignored).
        Raises InputError if a wire's delay is shorter than the step: its past would lie inside the step being taken.
        """
        self.system, self.step, self.given = system, step, given
        self.h = float(step)
        self.wires = () if given else tuple(wires)
        short = [w for w in self.wires if w.delay < step]
        if short:
            raise InputError(
                f"a link delay of {float(short[0].delay)} s is shorter than the step of {self.h} s; take a finer step."
            )
        self.groups = _groups(self.wires, step)
        self.memory = max((steps for _, members in self.groups for _, steps in members), default=0)
        self._build()

    def _build(self) -> None:
        """Stack all outputs of a step as one matrix times [x; inlet coefficients; w; d]; rows x1, z coefficients 0-3,
        z1, y0, y1.
        """
        s, h = self.system, self.h
        scale = s.cells if s.whole else 1
        n, nv, nw, nd, nz, ny = (size * scale for size in s.sizes)
        fractions = [0.0] if self.given else [float(f) for f, _ in self.groups]
        pieces = [1 if self.given else (4 if f == 0 else 8) for f in fractions]
        self.coefficients = sum(pieces)
        width = n + nv * self.coefficients + nw + nd
        free, gamma_w, gamma_d = like_system(exponential(s.A * h), s), input_map(s, s.E, h), input_map(s, s.B, h)
        columns: list[Any] = [free]
        start: list[Any] = [zeros(nv, n)]
        end, slope0, slope1 = list(start), list(start), list(start)
        for f, count in zip(fractions, pieces, strict=True):
            weights, at0, at1, d0, d1 = inlet_maps(s, h, f, count, nv)
            columns += weights
            start, end = start + at0, end + at1
            slope0, slope1 = slope0 + d0, slope1 + d1
        tail = [zeros(nv, nw + nd)]
        v0, v1, dv0, dv1 = (side_by_side(parts + tail) for parts in (start, end, slope0, slope1))
        x0 = side_by_side([eye(n), zeros(n, width - n)])
        x1 = side_by_side([*columns, gamma_w, gamma_d])
        w = side_by_side([zeros(nw, width - nw - nd), eye(nw), zeros(nw, nd)])
        d = side_by_side([zeros(nd, width - nd), eye(nd)])
        A, D, E, B, H, F, Fw = (as_sparse(m) for m in (s.A, s.D, s.E, s.B, s.H, s.F, s.Fw))
        Yx, Yv, Yw = (as_sparse(m) for m in (s.Yx, s.Yv, s.Yw))
        z0, z1 = H @ x0 + F @ v0 + Fw @ w, H @ x1 + F @ v1 + Fw @ w
        y0, y1 = Yx @ x0 + Yv @ v0 + Yw @ w, Yx @ x1 + Yv @ v1 + Yw @ w
        s0 = (H @ (A @ x0 + D @ v0 + E @ w + B @ d) + F @ dv0) * h
        s1 = (H @ (A @ x1 + D @ v1 + E @ w + B @ d) + F @ dv1) * h
        curve = [s0, 3 * (z1 - z0) - 2 * s0 - s1, 2 * (z0 - z1) + s0 + s1] if self.memory else []
        self.map = settle([x1, z0, *curve, z1, y0, y1], width)
        self.command = settle([y0], width)
        self.width = width // scale
        n, _, nw, nd, nz, ny = s.sizes
        q = 1 + len(curve)
        edges = np.cumsum([0, n, q * nz, nz, ny, ny])
        self.spans = [slice(int(a), int(b)) for a, b in pairwise(edges)]
        self.rows, self.curves = int(edges[-1]), q

    def flat(self, array: Array) -> Array:
        """[number, cell, run] as the two axes the matrices act on."""
        return (
            array.reshape(array.shape[0] * array.shape[1], -1)
            if self.system.whole
            else array.reshape(array.shape[0], -1)
        )


@dataclass
class Control:
    """What stands between the computed command and the plant: a limit per actuator (inf: none) and a hold over whole
    steps.

    ``hold`` = 0: the command acts continuously and only the part beyond the limit is taken off. ``hold`` = m: the
    system given to
    the stepper is the open loop, and its whole command is the limited value computed every m-th step.
    """

    limits: Array
    hold: int = 0

    def correction(self, command: Array, step: int, before: Array) -> Array:
        """The correction d[input, cell, run] for this step from the command at its start."""
        bound = self.limits[:, None, None]
        limited = np.clip(command, -bound, bound)
        if self.hold:
            return limited if step % self.hold == 0 else before
        return limited - command


def march(
    stepper: Stepper,
    x: Array,
    steps: int,
    disturbance: Supply,
    listener: Listener,
    control: Control | None = None,
    ports: Ports | None = None,
) -> Array:
    """Take ``steps`` steps from x[state, cell, run] and return the last x; the past before the start is z = H x(0)
    held.

    The listener is called every CHUNK steps or fewer with a Block and may return a mask of runs to stop: these are set
    to zero with their
    past and stay there; when all have stopped the march ends. Deterministic.
    """
    system = stepper.system
    n, nv, nw, nd, _, _ = system.sizes
    cells, runs = system.cells, x.shape[2]
    memory = stepper.memory + 1
    chunk = int(min(CHUNK, max(4, CHUNK_NUMBERS // (stepper.rows * cells * runs))))
    store = np.zeros((memory + chunk, stepper.rows, cells, runs))
    _fill_past(stepper, store[:memory], x)
    stack = np.zeros((stepper.width, cells, runs))
    stack[:n] = x
    flat_stack = stepper.flat(stack)
    inlets = stack[n : n + nv * stepper.coefficients].reshape(stepper.coefficients, nv, cells, runs)
    w_view, d_view = stack[stepper.width - nd - nw : stepper.width - nd], stack[stepper.width - nd :]
    stopped = np.zeros(runs, dtype=bool)
    for first in range(0, steps, chunk):
        count = min(chunk, steps - first)
        supplied = disturbance(first, count)
        if stopped.any():
            supplied = np.where(stopped, 0.0, supplied)
        for k in range(count):
            here = memory + k
            if ports is not None:
                inlets[0] = ports(first + k, store[here - 1, stepper.spans[2]])
            elif stepper.wires:
                _gather(stepper, store, here, inlets)
            w_view[...] = supplied[k]
            if control is not None:
                before = d_view.copy()
                d_view[...] = 0.0
                command = np.asarray(stepper.command @ flat_stack).reshape(-1, cells, runs)
                d_view[...] = control.correction(command, first + k, before)
            _advance(stepper, flat_stack, store[here])
            stack[:n] = store[here, :n]
        asked = listener(_block(stepper, store[memory : memory + count], first, supplied))
        if asked is not None and asked.any():
            stopped |= asked
            store[..., asked] = 0.0
            stack[..., asked] = 0.0
            if stopped.all():
                break
        store[:memory] = store[count : count + memory].copy()
    return np.asarray(stack[:n].copy())


def _advance(stepper: Stepper, flat_stack: Array, out: Array) -> None:
    """One step: all rows at once."""
    flat = stepper.flat(out)
    if isinstance(stepper.map, np.ndarray):
        np.matmul(stepper.map, flat_stack, out=flat)
    else:
        flat[...] = stepper.map @ flat_stack


def _fill_past(stepper: Stepper, past: Array, x: Array) -> None:
    """Before the start every offered signal stands still at H x(0)."""
    n, nz = stepper.system.sizes[0], stepper.system.sizes[4]
    held = np.asarray(stepper.system.H @ stepper.flat(np.ascontiguousarray(x))).reshape(nz, *x.shape[1:])
    past[:, n : n + nz] = held
    past[:, stepper.spans[2]] = held


def _gather(stepper: Stepper, store: Array, here: int, inlets: Array) -> None:
    """Write the polynomial coefficients of every inlet for the step in slot ``here`` from the stored past."""
    n, nz = stepper.system.sizes[0], stepper.system.sizes[4]
    cells = stepper.system.cells
    inlets[...] = 0.0
    column = 0
    for fraction, members in stepper.groups:
        for wire, back in members:
            near, far = max(0, -wire.at), cells - max(0, wire.at)
            if near >= far:
                continue
            pieces = ((0, back),) if fraction == 0 else ((0, back), (4, back - 1))
            for offset, age in pieces:
                curve = store[here - age, n + wire.offer : n + 4 * nz : nz, near + wire.at : far + wire.at]
                inlets[column + offset : column + offset + 4, wire.take, near:far] += wire.strength * curve
        column += 4 if fraction == 0 else 8


def _block(stepper: Stepper, rows: Array, first: int, w: Array) -> Block:
    """Views of the stored rows as a Block."""
    x, curves, z1, y0, y1 = (rows[:, span] for span in stepper.spans)
    times = np.asarray((first + 1 + np.arange(rows.shape[0])) * stepper.h, dtype=float)
    return Block(first, times, x, curves[:, : stepper.system.sizes[4]], z1, y0, y1, w)


def _groups(wires: Sequence[Wire], step: Fraction) -> list[tuple[Fraction, list[tuple[Wire, int]]]]:
    """Wires by the fraction f of a step by which their delay (m - f) h falls short of m steps, with m for each."""
    found: OrderedDict[Fraction, list[tuple[Wire, int]]] = OrderedDict()
    for wire in wires:
        back = -((-wire.delay) // step)
        found.setdefault(back - wire.delay / step, []).append((wire, int(back)))
    return list(found.items())
