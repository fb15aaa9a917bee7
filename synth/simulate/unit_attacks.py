"""Adversaries on sections unit by unit: over the class of links, over weakening, over lateness, and as wired.

Class: as in adversary.py, every arrival delivers plus or minus the largest that its class allows (|g| times the peak
its source has reached; where it may weaken, the larger of that and the unit's own). Weakening: every link that may
weaken is on or off at every instant, whichever pushes the attacked signal: literally a strength between none and all.
Late: every late link delivers the value its source had at some time within the declared delay.
"""

from __future__ import annotations

from fractions import Fraction
from math import ceil
from typing import Any, cast

import numpy as np
from scipy import sparse

from synth.simulate.adversary import ClassAttack
from synth.simulate.effects import Scenario, Wave
from synth.simulate.measures import Terms
from synth.simulate.model import Array, System
from synth.simulate.prepare import Job, fresh_if_short
from synth.simulate.record import Recorder, stride_for
from synth.simulate.stepper import Block, Stepper, march
from synth.simulate.unit_kernels import Kernels, Places, Target, unit_targets
from synth.simulate.unit_runs import Collect, epoch_of
from synth.simulate.units import Units
from synth.simulate.weave import Thread, Weave, run_woven

MOST_EPOCH, MOST_STEPS = 20_000, 120_000
MOST_TARGETS = 16
MOST_WIRED = 60_000_000


def _listen(watch: Any, recorder: Recorder) -> Any:
    def listener(block: Block) -> np.ndarray:
        recorder(block)
        return np.asarray(watch(block))

    return listener


def attack_units(units: Units, job: Job, amplitude: Array, scale: float | None, title: str, collect: Collect) -> None:
    """The adversary over the class: climb epoch by epoch, then attack every signal from what has been reached."""
    section, h = units.section, float(job.coarse)
    epoch = epoch_of(units, job, MOST_EPOCH)
    kernels = Kernels.of(units, h)
    if not kernels.affordable(epoch):
        job.notes.append("the adversary over the class was left out: there are too many different units to aim at")
        return
    most = max(3 * epoch, int(MOST_STEPS * min(1.0, 600 / (section.cells * section.block.sizes[0]))))
    places = {group: Places.of(units, group) for group in ("takes", "disturbances")}
    stepper = Stepper(units.folded, (), job.coarse, given=True)
    targets = unit_targets(units)[:MOST_TARGETS]
    climbs = [_signs(kernels, target, epoch) for target in unit_targets(units, ("offers",))[:MOST_TARGETS]]
    peak = np.zeros((section.block.sizes[4], section.cells))
    terms = Terms(0.0, scale, True)
    climb, final = job.watch(section, [terms]), job.watch(section, [terms] * len(targets))
    first, last = (Recorder(section, stride_for(section, n, 40)) for n in (most, epoch))
    outside = amplitude[:, None, None] * np.ones((1, section.cells, 1))

    def run(patterns: list[tuple[Array, Array]], start: Array, watch: Any, recorder: Recorder) -> Array:
        nonlocal peak
        v, w = (np.stack([p[i][::-1] for p in patterns], axis=-1) for i in (0, 1))  # [step, spec, number, run]
        delivered = units.intake(peak)[:, :, None]
        reached = peak

        def supply(begin: int, count: int) -> Array:
            rows = [places["disturbances"].spread(w[begin + k].astype(float), units.spec_of) for k in range(count)]
            return np.stack(rows) * outside

        def ports(k: int, _: Array) -> Array:
            return places["takes"].spread(v[k].astype(float), units.spec_of) * delivered

        def listener(block: Block) -> np.ndarray:
            nonlocal reached
            for z in (block.z0, block.z1):
                reached = np.maximum(reached, np.abs(z).max(axis=(0, 3)))
            recorder(block)
            return np.asarray(watch(block))

        end = march(stepper, start, epoch, supply, listener, job.control(), ports)
        peak = reached
        return end

    x, epochs, settled = np.zeros((section.block.sizes[0], section.cells, 1)), 0, not climbs or not units.rays.to.size
    before = peak
    while not settled and (epochs + 2) * epoch <= most and not np.isfinite(climb.stopped[0]):
        x = run([climbs[epochs % len(climbs)]], x, climb, first)
        epochs += 1
        if epochs % len(climbs) == 0:
            settled, before = bool(np.all(peak <= before * (1 + 1e-4))), peak
    words = "every link delivers plus or minus its strength times the peak its source has reached, timed to push"
    collect(job, climb, first, [(f"{title}, climb", words)])
    if targets and not np.isfinite(climb.stopped[0]):
        final.sup_w = np.repeat(climb.sup_w, len(targets))  # the disturbances of the climb belong to these runs
        run([_signs(kernels, target, epoch) for target in targets], np.repeat(x, len(targets), axis=2), final, last)
        last.times = [t + epochs * epoch * h for t in last.times]
        collect(job, final, last, [(f"{title} against {target.label}", words) for target in targets])
    done = ClassAttack(tuple(t.label for t in targets), epochs, (epochs + 1) * epoch * h, settled)
    job.measures.setdefault("class_adversary", []).append(
        {"name": title, "epochs": done.epochs, "seconds": done.seconds, "cells": section.cells, "settled": done.settled}
    )


def _signs(kernels: Kernels, target: Target, steps: int) -> tuple[Array, Array]:
    """Signs by steps before the end: v[step, spec, take], w[step, spec, disturbance]."""
    _, Kv, Kw = kernels.against(target, steps)
    return np.sign(Kv).astype(np.int8), np.sign(Kw).astype(np.int8)


class _Weakening(Weave):
    """Links that may weaken are on where they push along ``sign`` [take, unit, run], off where they do not."""

    def __init__(self, units: Units, step: Fraction) -> None:
        strands, weak = units.strands, units.weak[units.strands.arrival]
        rest = fresh_if_short(strands.threads(units.share * (1.0 - units.weak)), step)
        super().__init__(units.bare, rest)
        pairs = np.flatnonzero(weak & (units.share[strands.arrival] > 0))
        self.take, self.to = strands.take[pairs], strands.to[pairs]
        self.offer, self.source, self.value = strands.offer[pairs], strands.source[pairs], strands.value[pairs]
        _, self.arrival = np.unique(strands.arrival[pairs], return_inverse=True)
        self.arrivals = int(self.arrival.max(initial=-1)) + 1
        self.units, self.sign = units, np.zeros(0)
        self.greedy = _greedy(units)
        # One take and unit per arrival.
        self.first = np.unique(self.arrival, return_index=True)[1]

    def weakened(self, z: Array) -> Array:
        """What the links that may weaken put on the inlets when each is on or off as it pushes."""
        brought = np.zeros((self.arrivals, z.shape[2]))
        np.add.at(brought, self.arrival, self.value[:, None] * z[self.offer, self.source])
        take, to = self.take[self.first], self.to[self.first]
        brought = np.where(brought * self.sign[take, to] > 0, brought, 0.0)
        v = np.zeros((self.shape[1], *z.shape[1:]))
        np.add.at(v, (take, to), brought)
        return v

    def rate(self, x: Array, late: Array, w: Array, limits: Array | None) -> tuple[Array, Array, Array]:
        """As the base, with the links that may weaken at their worst (their values fresh: within every delay)."""
        _, z, _ = super().rate(x, late, w, limits)
        last = x[:, :, -1:]  # the last run decides by the state it is in
        self.sign[:, :, -1] = (self.greedy @ last.reshape(-1, 1)).reshape(self.sign.shape[:2])
        return super().rate(x, late + self.weakened(z), w, limits)


def _greedy(units: Units) -> Any:
    """D'P of every unit, P its quadratic energy (A'P + PA = -I): what is taken along its sign raises the energy."""
    from scipy.linalg import solve_continuous_lyapunov

    section, cells = units.section, units.section.cells
    data, rows, columns = [np.zeros(0)], [np.zeros(0)], [np.zeros(0)]
    for s, unit in enumerate(units.specs):
        A = unit.A.floats()
        if not A.size or not unit.D.shape[1] or np.linalg.eigvals(A).real.max() >= 0:
            continue
        table = unit.D.floats().T @ solve_continuous_lyapunov(A.T, -np.eye(len(A)))
        mine = np.flatnonzero(units.spec_of == s)
        form = section.closed[int(units.form_of[mine[0]])].kind.name
        for r, c in zip(*np.nonzero(table), strict=True):
            rows.append((section.shape.takes[form][0] + r) * cells + mine)
            columns.append((section.shape.states[form][0] + c) * cells + mine)
            data.append(np.full(mine.size, table[r, c]))
    size = (section.block.sizes[1] * cells, section.block.sizes[0] * cells)
    parts = [np.concatenate(part) for part in (data, rows, columns)]
    return sparse.coo_matrix((parts[0], (parts[1].astype(int), parts[2].astype(int))), shape=size).tocsr()


def attack_weakening(units: Units, job: Job, steps: int, collect: Collect) -> None:
    """Every link that may weaken switched between none and all of it, timed against each signal, again and again."""
    if not units.weak.any() or not unit_targets(units):
        return
    section, h = units.section, float(job.step)
    period = min(steps, ceil(epoch_of(units, job, MOST_EPOCH) * float(job.coarse) / h))
    kernels = Kernels.of(units, h)
    if not kernels.affordable(period):
        return
    job.progress("links switched on and off by an adversary")
    targets = unit_targets(units)[:6]
    signs = [_signs(kernels, target, period) for target in targets]
    signs.append(signs[0])  # the run that raises the energy of every unit with what it finds
    v, w = (np.stack([s[i][::-1] for s in signs], axis=-1) for i in (0, 1))
    takes, outside = Places.of(units, "takes"), Places.of(units, "disturbances")
    weave = _Weakening(units, job.step)
    amplitude = job.amplitude[:, None, None]

    def supply(first: int, count: int) -> Array:
        rows = [outside.spread(w[(first + k) % period].astype(float), units.spec_of) for k in range(count)]
        weave.sign = takes.spread(v[first % period].astype(float), units.spec_of)
        return np.stack(rows) * amplitude

    runs = len(signs)
    watch = job.watch(section, [Terms(0.0, job.scale, True)] * runs)
    recorder = Recorder(section, stride_for(section, steps, 20))
    weave.sign = takes.spread(v[0].astype(float), units.spec_of)
    x0 = np.zeros((section.block.sizes[0], section.cells, runs))
    control = job.control()
    limits = None if control is None else control.limits[:, None, None]
    run_woven(weave, x0, job.step, steps, supply, _listen(watch, recorder), limits)
    words = "every link that may weaken is on or off, whichever pushes this signal, with the worst disturbance"
    names = [(f"weakening against {target.label}", words) for target in targets]
    names.append(
        ("weakening that pumps", "every link that may weaken is on or off, whichever raises its unit's energy")
    )
    collect(job, watch, recorder, names)


def attack_late_units(units: Units, job: Job, collect: Collect) -> None:
    """From a corner of the initial box, undisturbed: late links deliver any value within their delay."""
    section, step = units.section, job.coarse
    late = [t for t in section.wires if t.delay >= step]
    steps = ceil(job.seconds / float(step))
    kernels = Kernels.of(units, float(step))
    if not late or not kernels.affordable(steps):
        return
    job.progress("adversary with links as late as declared")
    targets = unit_targets(units, ("states",))[:6]
    states, takes = Places.of(units, "states"), Places.of(units, "takes")
    corners, signs = [], []
    for target in targets:
        Kx, Kv, _ = kernels.against(target, steps)
        when = np.argmax(np.nan_to_num(np.abs(Kx).sum(axis=2), nan=-1.0), axis=0)
        corners.append(states.spread(np.where(Kx[when, np.arange(len(when))] < 0, -job.X0, job.X0), units.spec_of))
        table = np.ones((steps, *Kv.shape[1:]), dtype=np.int8)
        for s, end in enumerate(when.tolist()):
            table[:end, s] = np.sign(Kv[:end, s][::-1])
        signs.append(table)
    sign, x0 = np.stack(signs, axis=-1), np.stack(corners, axis=-1)
    threads: tuple[Thread, ...] = section.wires
    weave = Weave(units.bare, [t for t in fresh_if_short(threads, step) if t.delay == 0])
    depth = max(int(t.delay // step) for t in late)
    rows = np.abs(units.bare.H).sum(axis=1)
    reach = np.asarray(rows).reshape(section.block.sizes[4], section.cells, 1) * job.X0 * np.ones((1, 1, len(targets)))
    past = np.empty((depth, *reach.shape))
    past[0::2], past[1::2] = reach, -reach
    parts = [(t, int(t.delay // step), t.web.maximum(0), t.web.minimum(0)) for t in late]

    def ports(k: int, z: Array) -> Array:
        past[k % depth] = z
        here = takes.spread(sign[k].astype(float), units.spec_of)
        v = np.zeros((section.block.sizes[1], section.cells, len(targets)))
        for thread, m, plus, minus in parts:
            recent = past[(k - np.arange(m)) % depth][:, thread.offer]
            top, low = recent.max(axis=0), recent.min(axis=0)
            high, least = plus @ top + minus @ low, plus @ low + minus @ top
            v[thread.take] += np.where(here[thread.take] >= 0, high, least)
        return v

    watch = job.watch(section, [Terms(job.X0, None, job.together, job.together)] * len(targets))
    watch.start(x0)
    recorder = Recorder(section, stride_for(section, steps, 4 * len(targets)))
    still = np.zeros((1, section.block.sizes[2], section.cells, len(targets)))
    control = job.control()
    limits = None if control is None else control.limits[:, None, None]
    run_woven(
        weave, x0, step, steps, lambda first, count: np.repeat(still, count, axis=0), _listen(watch, recorder), limits,
        ports=ports,
    )  # fmt: skip
    words = "from a corner of the initial box; every link picks the value within its declared delay that pushes most"
    collect(job, watch, recorder, [(f"late links against {target.label}", words) for target in targets])


def wired_attack(units: Units, job: Job, steps: int) -> list[Scenario]:
    """One run per signal of the unit that most others reach: the worst disturbance of every unit, links as wired.

    The kernels are read off the time-reversed network (see model.transposed).
    """
    section, bare = units.section, units.bare
    cell = _deepest(units)
    form = int(units.form_of[cell])
    kind = section.closed[form].kind
    rows: list[tuple[Any, ...]] = []
    n, takes, outside, _, offers, _ = section.block.sizes
    cells = section.cells
    for group, (X, V, W), ranges in (
        ("states", (sparse.identity(n * cells, format="csr"), None, None), section.shape.states),
        ("offers", (bare.H, bare.F, bare.Fw), section.shape.offers),
        ("inputs", (bare.Yx, bare.Yv, bare.Yw), section.shape.inputs),
    ):
        low, high = ranges[kind.name]
        for i in range(low, high):
            pick = i * cells + cell
            width = (n * cells, takes * cells, outside * cells)
            parts = [sparse.csr_matrix((1, w)) if M is None else M[pick] for M, w in zip((X, V, W), width, strict=True)]
            rows.append((f"{units.wiring.names[cell]}.{getattr(kind, group)[i - low].name}", *parts))
    if steps * outside * cells * len(rows) > MOST_WIRED:
        job.notes.append("the worst disturbance for the links as wired was left out: the section is too large for it")
        return []
    found = []
    Rx, Rv, Rw = (cast(Any, sparse).vstack([row[k] for row in rows], format="csr") for k in (1, 2, 3))
    # One input per attacked signal, all at one place: a system of one 'cell' more than it needs would hide them.
    spread = sparse.csr_matrix((np.ones(len(rows)), (np.arange(len(rows)), np.arange(len(rows)) * cells)),
                               shape=(len(rows), len(rows) * cells))  # fmt: skip
    empty = sparse.csr_matrix((n * cells, 0))
    reverse = System(
        bare.A.T.tocsr(), bare.H.T.tocsr(), (Rx.T @ spread).tocsr(), empty, bare.D.T.tocsr(), bare.F.T.tocsr(),
        (Rv.T @ spread).tocsr(), bare.E.T.tocsr(), bare.Fw.T.tocsr(), (Rw.T @ spread).tocsr(), cells,
        (n, offers, len(rows), 0, takes, outside), True,
    )  # fmt: skip
    threads: tuple[Thread, ...] = section.wires
    weave = Weave(reverse, [t.turned() for t in fresh_if_short(threads, job.step)])
    signs = np.zeros((steps, outside, cells, len(rows)), dtype=np.int8)

    def supply(first: int, count: int) -> Array:
        w = np.zeros((count, len(rows), cells, len(rows)))
        if first == 0:
            w[0, np.arange(len(rows)), 0, np.arange(len(rows))] = 1.0
        return w

    def keep(block: Block) -> np.ndarray:
        signs[block.first : block.first + len(block.times)] = np.sign(block.y1)
        return np.asarray(np.abs(block.x).max(axis=(0, 1, 2)) > 1e60)

    run_woven(weave, np.zeros((n, cells, len(rows))), job.step, steps, supply, keep)
    amplitude = job.amplitude[:, None] * units.alive["disturbances"]
    for r, row in enumerate(rows):
        mine = signs[::-1, :, :, r]
        found.append(
            Scenario(
                f"adversary against {row[0]}", "worst disturbance of every unit for this signal, links as wired",
                _signed(mine, amplitude), scale=job.scale,
            )
        )  # fmt: skip
    return found


def _signed(signs: Any, amplitude: Array) -> Wave:
    return lambda first, count: np.asarray(signs[first : first + count] * amplitude, dtype=float)


def _deepest(units: Units) -> int:
    """The unit that most others can act on (the first of them); with very many units the one with most arrivals."""
    heard = units.wiring.source >= 0
    to, source = units.wiring.to[heard], units.wiring.source[heard]
    cells = units.section.cells
    if cells > 2000 or not to.size:
        return int(np.argmax(np.bincount(to, minlength=cells)))
    step = sparse.csr_matrix((np.ones(to.size), (to, source)), shape=(cells, cells))
    from scipy.sparse.csgraph import shortest_path

    far = shortest_path(step, unweighted=True)
    return int(np.argmax(np.isfinite(far).sum(axis=1) + 1e-6 * np.where(np.isfinite(far), far, 0).max(axis=1)))
