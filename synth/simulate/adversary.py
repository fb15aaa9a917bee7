"""Adversaries that know the running loop and try to break what is proven.

Wired: the network exactly as wired; every disturbance of every unit is the sign of the time-reversed kernel to one
signal of one unit,
which is the worst disturbance there is (theory (1)), up to the grid.

Class: every link may be any causal operator with |v(t)| <= |g| sup_{s<=t} |z(s)| (delay, loss, hold, either sign). Time
is cut into
epochs as long as the units' kernels. In each epoch every link delivers plus or minus |g| times the peak its source has
reached before
the epoch, with the sign of the time-reversed kernel of the receiving unit, and the disturbances do likewise. The peaks
then follow
p <- p_w + M p, so they climb to (I - M)^{-1} p_w: the proven bound, from below (theory (2) and (3)).

Late: undisturbed, from a corner of the initial box; every link delivers the value its source had at some time within
the declared
delay, whichever pushes the attacked signal most. Only this class is covered by the rate (theory (4)); links without
delay stay fresh.

All adversaries use piecewise constant inputs, under which stepping is exact, so what they reach is reached by the model
itself.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from synth.simulate.effects import Scenario, Wave
from synth.simulate.kernels import Line, held_kernels, lines_of, stack_rows, targets
from synth.simulate.model import Array, Section, Wire, fold_fresh, transposed
from synth.simulate.stepper import Block, Control, Stepper, march

GROUPS = ("states", "offers", "inputs")
NEAR = 128  # cells on either side whose disturbances join the wired attack; those farther away stay silent
Watcher = Callable[[Block], "np.ndarray | None"]


def wired_kernel(section: Section, lines: Sequence[Line], cell: int, step: Fraction, steps: int) -> Array:
    """K[j, disturbance, cell, line]: what a disturbance held for the step that ends j steps earlier adds to the line in
    ``cell``.

    Read off the time-reversed network after a pulse of one step; exact without delays, O(h^4) with them.
    """
    system, wires = transposed(section, stack_rows(list(lines)))
    folded, late = fold_fresh(system, wires)
    stepper = Stepper(folded, late, step)
    found = np.zeros((steps, section.block.sizes[2], section.cells, len(lines)))

    def supply(first: int, count: int) -> Array:
        w = np.zeros((count, len(lines), section.cells, len(lines)))
        if first == 0:
            w[0, np.arange(len(lines)), cell, np.arange(len(lines))] = 1.0
        return w

    def keep(block: Block) -> np.ndarray | None:
        found[block.first : block.first + len(block.times)] = block.y1
        return np.asarray(np.abs(block.x).max(axis=(0, 1, 2)) > 1e60)

    march(stepper, np.zeros((section.block.sizes[0], section.cells, len(lines))), steps, supply, keep)
    return found


def wired_scenarios(section: Section, amplitude: Array, step: Fraction, steps: int, scale: float) -> list[Scenario]:
    """One run per signal of the deepest cell: the disturbance of every unit is the worst for that signal at the end of
    the run.
    """
    cell = section.deepest
    low, high = max(0, cell - NEAR), min(section.cells, cell + NEAR + 1)
    found = []
    for group in GROUPS:
        lines = lines_of(section, group)
        if not lines:
            continue
        kernel = wired_kernel(section, lines, cell, step, steps)
        signs = np.zeros(kernel.shape, dtype=np.int8)
        signs[:, :, low:high] = np.sign(kernel[::-1, :, low:high])
        for r, line in enumerate(lines):
            found.append(
                Scenario(
                    f"adversary against {line.label}",
                    f"worst disturbance of every unit for this signal in cell {cell}, links as wired",
                    _signed(signs[..., r], amplitude),
                    scale=scale,
                )
            )
    return found


def _signed(signs: np.ndarray, amplitude: Array) -> Wave:
    def wave(first: int, count: int) -> Array:
        return np.asarray(signs[first : first + count] * amplitude[:, None], dtype=float)

    return wave


@dataclass(frozen=True)
class _Pattern:
    """Signs by steps before the end of an epoch: ``v`` [step, take], ``w`` [step, disturbance]."""

    v: Array
    w: Array


def _pattern(section: Section, lines: Sequence[Line], h: float, steps: int) -> _Pattern:
    """Every kind attacks its own line; a sign of zero (no effect) delivers nothing."""
    _, Kv, Kw = held_kernels(section.block, stack_rows(list(lines)), h, steps)
    v, w = np.zeros((steps, Kv.shape[2])), np.zeros((steps, Kw.shape[2]))
    for r, line in enumerate(lines):
        for table, kernel, ranges in ((v, Kv, section.shape.takes), (w, Kw, section.shape.disturbances)):
            low, high = ranges[line.kind]
            table[:, low:high] = np.sign(kernel[:, r, low:high])
    return _Pattern(v, w)


def intake(section: Section, peak: Array) -> Array:
    """Sum of |g| peak over the links into each inlet, [take, cell] from [offer, cell]; no neighbour adds nothing."""
    found = np.zeros((section.block.sizes[1], section.cells))
    for wire in section.wires:
        near, far = max(0, -wire.at), section.cells - max(0, wire.at)
        if near < far:
            found[wire.take, near:far] += abs(wire.strength) * peak[wire.offer, near + wire.at : far + wire.at]
    return found


@dataclass(frozen=True)
class ClassAttack:
    """What the class adversary did: names of the final attacks, epochs, seconds, and whether its peaks had settled."""

    names: tuple[str, ...]
    epochs: int
    seconds: float
    settled: bool


def attack_class(
    section: Section,
    amplitude: Array,
    step: Fraction,
    epoch_steps: int,
    most_steps: int,
    build: Watcher,
    final: Watcher,
    control: Control | None = None,
) -> ClassAttack:
    """Climb epoch by epoch, then attack every signal once from what has been reached.

    ``build`` sees the one run of the climb, ``final`` the last epoch with one run per target (targets() of all
    signals); either may
    return a mask of runs to stop. The climb ends when an epoch raises no offer of the deepest cell by more than 1e-4 of
    itself, when
    ``most_steps`` are used up, or when stopped.
    """
    h, L = float(step), epoch_steps
    stepper = Stepper(section.block, (), step, given=True)
    n, cells = section.block.sizes[0], section.cells
    climbs = [_pattern(section, lines, h, L) for _, lines in targets(section, ("offers",))]
    peak = np.zeros((section.block.sizes[4], cells))
    x, epochs, settled, dead = np.zeros((n, cells, 1)), 0, not climbs or not section.wires, False
    before = peak

    def watch(block: Block) -> np.ndarray | None:
        nonlocal peak, dead
        for z in (block.z0, block.z1):
            peak = np.maximum(peak, np.abs(z).max(axis=(0, 3)))
        asked = build(block)
        dead = asked is not None and bool(asked.any())
        return asked

    def run(patterns: Sequence[_Pattern], start: Array, listener: Watcher) -> Array:
        v = np.stack([p.v[::-1] for p in patterns], axis=-1)  # [step, take, run]
        w = np.stack([p.w[::-1] for p in patterns], axis=-1)
        delivered = intake(section, peak)[:, :, None]
        wide = np.ones((1, 1, cells, 1)) * amplitude[None, :, None, None]
        return march(
            stepper, start, L, lambda first, count: w[first : first + count, :, None, :] * wide, listener, control,
            lambda k, _: v[k][:, None, :] * delivered,
        )  # fmt: skip

    deep = section.deepest
    while not settled and not dead and (epochs + 2) * L <= most_steps:
        x = run([climbs[epochs % len(climbs)]], x, watch)
        epochs += 1
        if epochs % len(climbs) == 0:
            settled = bool(np.all(peak[:, deep] <= before[:, deep] * (1 + 1e-4)))
            before = peak
    chosen = targets(section, GROUPS)
    if not dead and chosen:
        patterns = [_pattern(section, lines, h, L) for _, lines in chosen]
        run(patterns, np.repeat(x, len(patterns), axis=2), final)
    return ClassAttack(tuple(name for name, _ in chosen), epochs, (epochs + 1) * L * h, settled)


def late_starts(section: Section, X0: float, h: float, steps: int) -> tuple[list[str], Array, Array]:
    """Names, corners x0[state, cell, run] and link signs [step, take, run] of the attacks on the envelope: per state,
    at three times.
    """
    names, corners, signs = [], [], []
    for label, lines in targets(section, ("states",)):
        Kx, Kv, _ = held_kernels(section.block, stack_rows(lines), h, steps)
        best = np.argmax(np.nan_to_num(np.abs(Kx).sum(axis=2), nan=-1.0), axis=0)
        for when in (best, np.full(len(lines), steps // 3), np.full(len(lines), steps)):
            corner, sign = np.zeros((section.block.sizes[0], section.cells)), np.ones((steps, section.block.sizes[1]))
            for r, line in enumerate(lines):
                low, high = section.shape.states[line.kind]
                corner[low:high] = np.where(Kx[when[r], r, low:high] < 0, -X0, X0)[:, None]
                low, high = section.shape.takes[line.kind]
                sign[: when[r], low:high] = np.sign(Kv[: when[r], r, low:high][::-1])
            names.append(f"late links against {label} at {when.max() * h:.3g} s")
            corners.append(corner)
            signs.append(sign)
    return names, np.stack(corners, axis=-1), np.stack(signs, axis=-1)


def attack_late(
    section: Section,
    x0: Array,
    signs: Array,
    X0: float,
    step: Fraction,
    listener: Watcher,
    control: Control | None = None,
) -> None:
    """Run all late-link attacks. A value is taken at a grid point and held over a step, so it never gets older than the
    delay.

    The past before the start is free within the initial box, so the links may find plus and minus |H|_1 X0 there.
    """
    system, late = fold_fresh(section.block, section.wires)
    stepper = Stepper(system, (), step, given=True)
    delayed = [(wire, int(wire.delay // step)) for wire in late if wire.delay >= step]
    longest = max((m for _, m in delayed), default=1)
    cells, runs = section.cells, x0.shape[2]
    reach = np.abs(section.block.H).sum(axis=1)[:, None, None] * X0
    past = np.empty((longest, section.block.sizes[4], cells, runs))
    past[0::2], past[1::2] = reach, -reach

    def ports(k: int, z: Array) -> Array:
        past[k % longest] = z
        v = np.zeros((section.block.sizes[1], cells, runs))
        bounds: dict[int, tuple[Array, Array]] = {}
        for wire, m in delayed:
            if m not in bounds:
                recent = past if m == longest else past[(k - np.arange(m)) % longest]
                bounds[m] = (recent.max(axis=0), recent.min(axis=0))
            _deliver(wire, bounds[m], signs[k, wire.take], v, cells)
        return v

    still = np.zeros((1, section.block.sizes[2], cells, runs))
    march(
        stepper,
        x0,
        len(signs),
        lambda first, count: np.broadcast_to(still, (count, *still.shape[1:])),
        listener,
        control,
        ports,
    )


def _deliver(wire: Wire, bounds: tuple[Array, Array], sign: Array, v: Array, cells: int) -> None:
    """Add the value within the window that pushes along ``sign`` [run] most."""
    near, far = max(0, -wire.at), cells - max(0, wire.at)
    if near >= far:
        return
    up, down = (wire.strength * b[wire.offer, near + wire.at : far + wire.at] for b in bounds)
    high, low = np.maximum(up, down), np.minimum(up, down)
    v[wire.take, near:far] += np.where(sign >= 0, high, low)
