"""Runs of sections unit by unit: outside disturbances, starts, wirings that change, links that weaken, adversaries.

Every run satisfies the hypotheses of the claim: members and edges run as wired; under rules the wiring is drawn anew at
random times, never beyond a rule, and units that join do so from inside the envelope; links that may weaken take any
strength between none and all of it.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from math import ceil

import numpy as np

from synth.simulate.effects import Scenario, Wave, constant
from synth.simulate.kernels import horizon
from synth.simulate.measures import Terms
from synth.simulate.model import Array
from synth.simulate.prepare import Job, fresh_if_short
from synth.simulate.record import Recorder, stride_for
from synth.simulate.rewiring import random_shares, random_wiring
from synth.simulate.stepper import Block
from synth.simulate.unit_kernels import Kernels, Places, unit_targets
from synth.simulate.units import Units, strands_of
from synth.simulate.weave import Rewired, Schedule, Thread, Weave, run_woven

JOINING = 0.1  # share of the units that are replaced when a wiring changes
MOST_STARTS = 24
Collect = Callable[..., None]


def frequency_of(units: Units) -> float:
    """The angular frequency (rad/s) at which a closed unit answers most to its disturbances, over a grid."""
    modes = np.abs(units.section.eigenvalues())
    fastest = float(max(modes.max(initial=0.0), 1e-3))
    slowest = float(max(modes[modes > 1e-9 * fastest].min(initial=fastest), 1e-3 * fastest))
    best, found = -1.0, fastest
    for unit in units.specs[:20]:
        A, E, H = unit.A.floats(), unit.E.floats(), unit.H.floats()
        if not A.size or not E.size:
            continue
        for omega in np.geomspace(slowest / 30, fastest * 3, 60):
            answer = np.linalg.solve(1j * omega * np.eye(len(A)) - A, E)
            size = float(np.abs(H @ answer if len(H) else answer).sum())
            if size > best:
                best, found = size, float(omega)
    return found


def steady(units: Units, job: Job, steps: int, omega: float) -> dict[str, list[Scenario]]:
    """Step, sines, pulse, and a disturbance of one unit only."""
    h, scale = float(job.step), job.scale
    everywhere = units.alive["disturbances"] * job.amplitude[:, None]

    def sine(w: float) -> Wave:
        return lambda first, count: np.sin(w * h * (first + np.arange(count) + 0.5))[:, None, None] * everywhere

    length = max(1, min(round(np.pi / omega / h), steps // 4))

    def pulse(first: int, count: int) -> Array:
        return np.asarray((first + np.arange(count) < length)[:, None, None] * everywhere)

    alone = np.zeros_like(everywhere)
    alone[:, 0] = everywhere[:, 0]
    name = units.wiring.names[0]
    return {
        "step": [Scenario("step", "every disturbance steps to its peak and stays", constant(everywhere), scale=scale)],
        "sine": [
            Scenario(f"sine {f:.3g} rad/s", "every disturbance a sine at its peak, all in phase", sine(f), scale=scale)
            for f in (omega / 2, omega, 2 * omega)
        ],
        "pulse": [
            Scenario("pulse", f"every disturbance at its peak for {length * h:.3g} s, then none", pulse, scale=scale)
        ],
        "leader": [Scenario("leader", f"only {name} is disturbed, by a step", constant(alone), scale=scale)],
    }


def rough(units: Units, job: Job, steps: int, omega: float, seed: int) -> list[Scenario]:
    """Independent piecewise constant disturbances: any value within the peak, and always plus or minus the peak."""
    h = float(job.step)
    dwell = max(1, round(np.pi / omega / h))
    everywhere = units.alive["disturbances"] * job.amplitude[:, None]

    def hold(sort: int) -> Wave:
        known: dict[int, Array] = {}

        def piece(epoch: int) -> Array:
            if epoch not in known:
                known.clear()
                rng = np.random.default_rng([seed, sort, epoch])
                shape = everywhere.shape
                known[epoch] = (rng.uniform(-1, 1, shape) if sort == 0 else rng.choice([-1.0, 1.0], shape)) * everywhere
            return known[epoch]

        return lambda first, count: np.stack([piece((first + k) // dwell) for k in range(count)])

    words = f"independent random values, each held {dwell * h:.3g} s"
    return [
        Scenario("random", words, hold(0), scale=job.scale),
        Scenario("random extreme", words + ", always plus or minus the peak", hold(1), scale=job.scale),
    ]


def starts_against(units: Units, job: Job, steps: int) -> list[Scenario]:
    """From corners of the initial box: each signal at its own worst time and late, undisturbed."""
    kernels, places = Kernels.of(units, float(job.step)), Places.of(units, "states")
    shape = (units.section.block.sizes[2], units.section.cells)
    still = constant(np.zeros(shape))
    if not kernels.affordable(steps):
        corner = job.X0 * units.alive["states"]
        job.notes.append("starts are from one corner only: there are too many different units to aim at each signal")
        return [Scenario("start", "every state at the same end of the initial box", still, corner, job.X0, 0.0)]
    found = []
    for target in unit_targets(units)[:MOST_STARTS]:
        Kx, _, _ = kernels.against(target, steps)
        sizes = np.nan_to_num(np.abs(Kx).sum(axis=2), nan=-1.0)
        best = np.argmax(sizes, axis=0)
        for word, when in (("", best), (" late", np.full(len(best), steps))):
            table = np.where(Kx[when, np.arange(len(best))] < 0, -job.X0, job.X0)
            corner = places.spread(table, units.spec_of)
            what = f"from a corner of the initial box, undisturbed{', aimed at the end of the run' if word else ''}"
            found.append(Scenario(f"start against {target.label}{word}", what, still, corner, job.X0, 0.0))
    return found


def run_wired(units: Units, job: Job, chosen: Sequence[str], seed: int, collect: Collect) -> None:
    """All scenarios in one run of the section, links as declared; under rules the wiring changes on the way."""
    steps, omega = ceil(job.seconds / float(job.step)), frequency_of(units)
    calm = steady(units, job, steps, omega)
    found: list[Scenario] = []
    for name in chosen:
        if name in calm:
            found += calm[name]
        elif name == "random":
            found += rough(units, job, steps, omega, seed)
        elif name == "start":
            found += starts_against(units, job, steps)
    if not found:
        return
    job.progress(f"running {len(found)} scenarios on {units.section.cells} units")
    rules = units.section.network.description == "rules"
    if rules:
        word = "wirings within the rules, drawn anew at random times; a tenth of the units is replaced each time"
        job.notes.append(f"{word}: a joining unit starts inside the envelope")
    plan = rewired(units, job, steps, omega, seed) if rules else None
    march_units(units, job, found, steps, collect, plan, joins(units, job, found, seed) if rules else None)
    if units.weak.any() and not rules:
        again = [s for s in found if s.name in ("step", "random extreme") or s.name.startswith("start")][:6]
        again = [replace(s, name=f"weakening, {s.name}", words=f"{s.words}; links weaken at random") for s in again]
        if again:
            march_units(units, job, again, steps, collect, weakening(units, job, omega, seed), None)


def march_units(
    units: Units, job: Job, found: list[Scenario], steps: int, collect: Collect, plan: Schedule | None = None,
    changed: Rewired | None = None,
) -> None:  # fmt: skip
    """Run the scenarios together and hand on what was watched; nothing to do without any."""
    if not found:
        return
    section = units.section
    zero = np.zeros((section.block.sizes[0], section.cells))
    x0 = np.stack([s.x0 if s.x0 is not None else zero for s in found], axis=-1)
    terms = [Terms(s.X0, s.scale, True) if s.X0 == 0 else Terms(s.X0, None, job.together, job.together) for s in found]
    watch = job.watch(section, terms)
    watch.start(x0)
    recorder = Recorder(section, stride_for(section, steps, 2 * len(found)))
    threads: tuple[Thread, ...] = section.wires
    weave = Weave(units.bare, fresh_if_short(threads, job.step))

    def listener(block: Block) -> np.ndarray:
        recorder(block)
        return watch(block)

    def waves(first: int, count: int) -> Array:
        return np.stack([s.wave(first, count) for s in found], axis=-1)

    control = job.control()
    limits = None if control is None else control.limits[:, None, None]
    oldest = max((t.delay for t in section.wires), default=job.step * 0)
    late = [link.delay for link in section.network.links]
    run_woven(weave, x0, job.step, steps, waves, listener, limits, plan, changed, oldest=max([oldest, *late]))
    collect(job, watch, recorder, [(s.name, s.words) for s in found])


def _random_times(steps: int, mean: float, rng: np.random.Generator) -> Array:
    """Steps at which something changes: exponential gaps of ``mean`` steps, at least one."""
    gaps = np.maximum(1, rng.exponential(mean, ceil(4 * steps / mean) + 8).astype(int))
    return np.cumsum(gaps)


def rewired(units: Units, job: Job, steps: int, omega: float, seed: int) -> Schedule:
    """A wiring within the rules per stretch of time, the stretches of random length."""
    network, section = units.section.network, units.section
    forms = [unit.kind for unit in section.closed]
    count = len(units.wiring.names) // max(len(units.wiring.kinds), 1)
    times = _random_times(steps, max(2.0, 2 * np.pi / omega / float(job.step)), np.random.default_rng([seed, 41]))
    known: dict[int, tuple[Thread, ...]] = {}

    def at(k: int) -> tuple[int, tuple[Thread, ...]]:
        number = int(np.searchsorted(times, k, side="right"))
        if number not in known:
            known.clear()
            if number == 0:
                known[0] = fresh_if_short(section.wires, job.step)
            else:
                wiring = random_wiring(network, count, np.random.default_rng([seed, 43, number]))
                strands = strands_of(wiring, forms, units.form_of, section.shape)
                there = np.array([float(k.strength != 0 or not k.weakens) for k in wiring.links])[wiring.link]
                known[number] = fresh_if_short(strands.threads(there), job.step)
        return number, known[number]

    return at


def weakening(units: Units, job: Job, omega: float, seed: int) -> Schedule:
    """Every link that may weaken takes a new strength between none and all of it, at random times."""
    dwell = max(1, round(np.pi / omega / float(job.step)))
    known: dict[int, tuple[Thread, ...]] = {}

    def at(k: int) -> tuple[int, tuple[Thread, ...]]:
        number = k // dwell
        if number not in known:
            known.clear()
            share = units.share * random_shares(units.weak, np.random.default_rng([seed, 47, number]))
            known[number] = fresh_if_short(units.strands.threads(share), job.step)
        return number, known[number]

    return at


def joins(units: Units, job: Job, found: list[Scenario], seed: int) -> Rewired:
    """When the wiring changes some units leave and others take their places: at rest where the run began at rest, else
    anywhere in the box that the envelope has shrunk to. What they sent before is nothing.
    """
    times = _random_times(
        ceil(job.seconds / float(job.step)),
        max(2.0, 2 * np.pi / frequency_of(units) / float(job.step)),
        np.random.default_rng([seed, 41]),
    )
    sizes = np.array([s.X0 for s in found])
    alpha = job.claim.alpha if job.claim is not None else np.inf

    def changed(number: int, x: Array, past: Array) -> None:
        rng = np.random.default_rng([seed, 53, number])
        new = np.flatnonzero(rng.uniform(size=units.section.cells) < JOINING)
        box = sizes * np.exp(-alpha * float(times[number - 1]) * float(job.step))
        signs = rng.uniform(-1.0, 1.0, (x.shape[0], new.size, x.shape[2]))
        x[:, new] = signs * box * units.alive["states"][:, new, None]
        past[:, :, :, new] = 0.0

    return changed


def epoch_of(units: Units, job: Job, most: int) -> int:
    """Steps of one epoch of the adversaries over the class: as long as the units' kernels."""
    return min(most, ceil(horizon(units.section) / float(job.coarse)))
