"""simulate(): choose a step, build the section that runs, let every scenario and adversary loose on it, collect the
result.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from fractions import Fraction
from math import ceil, isfinite
from typing import Any

import numpy as np

from synth.base.errors import InputError, Problem, nearest
from synth.base.progress import Listener, silent
from synth.base.provenance import Provenance
from synth.network.gains import Gains
from synth.network.model import Network
from synth.simulate.adversary import GROUPS, attack_class, attack_late, late_starts, wired_scenarios
from synth.simulate.effects import Scenario, random_scenarios, start_scenarios, steady_scenarios, worst_frequency
from synth.simulate.kernels import horizon, targets
from synth.simulate.measures import Terms, Watch, amplification, signal_table
from synth.simulate.model import Array, Section, build_section, fold_fresh, open_loop
from synth.simulate.prepare import MOST_STEPS, Job, fresh_if_short, prepare
from synth.simulate.record import Recorder, stride_for
from synth.simulate.stepper import Block, Control, Stepper, march
from synth.simulate.trajectory import Run, Trajectory, Worst
from synth.simulate.unit_stage import Asked, attack_sizes, run_units
from synth.simulate.units import needs_units
from synth.simulate.written import Written, parameter_runs, run_written

SCENARIOS = ("step", "sine", "random", "pulse", "leader", "start", "written", "adversary", "held")
MOST_CLASS_STEPS, MOST_EPOCH, MOST_WRITTEN = 120_000, 20_000, 20_000
CLASS_CELLS = 100  # cells of the class adversary; the claim is about any number, and this is deep enough


def simulate(
    network: Network,
    design_or_gains: Any,
    certificate: Any = None,
    units: int | None = None,
    seconds: float | Fraction | None = None,
    seed: int = 0,
    scenarios: Sequence[str] | None = None,
    plant_gains: Gains | None = None,
    saturate: bool = True,
    progress: Listener = silent,
) -> Trajectory:
    """Run an open-ended section of ``network`` against disturbances and adversaries; compare every sample with the
    certificate.

    ``design_or_gains``: a Design (its ``.gains``) or Gains, u = K y. ``certificate``: the claim to check; None or
    unproven: nothing is
    checked. ``units``: cells simulated, one unit of each kind in each (default: the network's plan); in two and three
    dimensions a block of at least as many, from an edge inward as many cells, under rules as many units of each kind;
    members are taken whole. ``seconds``:
    length of a run in s.
    ``seed``: integer for the random scenarios. ``scenarios``: names from SCENARIOS, default all. ``plant_gains``: the
    gains that
    really run in the simulated units, if other than those the certificate is about. ``saturate``: whether actuators
    stop at their
    limits. Law: equal arguments give equal results. Raises InputError for unknown scenarios and for sizes that are not
    positive.
    """
    chosen = _check(scenarios, units, seconds)
    gains = plant_gains if plant_gains is not None else getattr(design_or_gains, "gains", design_or_gains)
    if not isinstance(network, Network):
        raise InputError(
            f"the simulation needs a network, not {type(network).__name__}; read a problem file first: "
            "synth.read(path)."
        )
    cells = units if units is not None else network.simulation.units
    if needs_units(network):
        length = float(seconds if seconds is not None else network.simulation.seconds)
        ask = Asked(cells, length, seed, chosen, saturate)
        return _finish(run_units(network, gains, certificate, ask, _collect, progress), network, seed, chosen)
    section = build_section(network.without_self_links(), gains, cells)
    job = prepare(
        section, certificate, float(seconds if seconds is not None else network.simulation.seconds), saturate, progress
    )
    _run_wired(job, chosen, seed)
    inner = any(link.sort != "link" for link in network.links)
    if inner:
        job.notes.append(
            "runs as wired: parameters at the middle of their tolerances, nonlinear terms on their centre lines; runs "
            "as written: the equations themselves; the adversary over the class moves all of them freely within their "
            "ranges"
        )
    if "written" in chosen and any(kind.dynamics is not None for kind in network.kinds):
        _run_equations(job, gains, seed)
    if "adversary" in chosen:
        _run_class(job, build_section(network, gains, cells) if inner else section)
        _run_late(job)
    if "held" in chosen:
        _run_held(job, network)
    return _finish(job, network, seed, chosen)


def _check(scenarios: Sequence[str] | None, units: int | None, seconds: Any) -> tuple[str, ...]:
    chosen = SCENARIOS if scenarios is None else tuple(scenarios)
    problems = [
        Problem(f"{name!r} is no scenario{nearest(name, SCENARIOS)}; known are {', '.join(SCENARIOS)}.")
        for name in chosen
        if name not in SCENARIOS
    ]
    if units is not None and units < 1:
        problems.append(Problem(f"{units} cells cannot be simulated; ask for one or more."))
    if seconds is not None and not (float(seconds) > 0 and isfinite(float(seconds))):
        problems.append(Problem(f"a run of {seconds} s cannot be simulated; ask for a positive number of seconds."))
    if problems:
        raise InputError(problems)
    return chosen


def _wave(scenarios: Sequence[Scenario]) -> Callable[[int, int], Array]:
    return lambda first, count: np.stack([s.wave(first, count) for s in scenarios], axis=-1)


def _run_wired(job: Job, chosen: Sequence[str], seed: int) -> None:
    """All scenarios with the links as wired, in one march."""
    section, h = job.section, float(job.step)
    steps = ceil(job.seconds / h)
    found: list[Scenario] = []
    steady = steady_scenarios(section, job.amplitude, h, steps, job.scale)
    for name in chosen:
        if name in steady:
            found += steady[name]
        elif name == "random":
            found += random_scenarios(section, job.amplitude, h, steps, job.scale, seed)
        elif name == "start":
            amplitude = job.amplitude if job.together else 0 * job.amplitude
            found += start_scenarios(section, amplitude, h, steps, job.X0, job.scale)
        elif name == "adversary" and section.peaks.any():
            job.progress("finding the worst disturbance for the links as wired")
            found += wired_scenarios(section, job.amplitude, job.step, steps, job.scale)
    if not found:
        return
    job.progress(f"running {len(found)} scenarios on {section.units} units")
    system, late = fold_fresh(section.block, fresh_if_short(section.wires, job.step))
    stepper = Stepper(system, late, job.step)
    n = section.block.sizes[0]
    x0 = np.stack([s.x0 if s.x0 is not None else np.zeros((n, section.cells)) for s in found], axis=-1)
    terms = [Terms(s.X0, s.scale, True) if s.X0 == 0 else Terms(s.X0, None, job.together, job.together) for s in found]
    watch = job.watch(section, terms)
    watch.start(x0)
    recorder = Recorder(section, stride_for(section, steps, 2 * len(found)))
    march(stepper, x0, steps, _wave(found), _both(watch, recorder), job.control())
    _collect(job, watch, recorder, [(s.name, s.words) for s in found])
    names = [s.name for s in found]
    if "pulse" in names:
        pulse = names.index("pulse")
        # A run that was stopped because it grew has not settled, however calm its last sample looked.
        end = watch.last_out[pulse] if not isfinite(float(watch.stopped[pulse])) else float("inf")
        job.measures["settling"] = float(end) if end < steps * h - 1.5 * h else None
    if "leader" in names:
        job.measures["amplification"] = amplification(section, watch.peaks["offer"][..., names.index("leader")])


def _both(watch: Watch, recorder: Recorder) -> Callable[[Block], np.ndarray]:
    def listener(block: Block) -> np.ndarray:
        recorder(block)
        return watch(block)

    return listener


def _collect(job: Job, watch: Watch, recorder: Recorder, names: Sequence[tuple[str, str]], table: bool = True) -> None:
    """Turn what was watched into Run records, and join the peaks of counted runs from rest."""
    for r, (name, words) in enumerate(names):
        reason = watch.reason(r)
        terms = watch.terms[r]
        times, samples = recorder.samples(r)
        stopped = float(watch.stopped[r]) if isfinite(watch.stopped[r]) else None
        job.runs.append(
            Run(
                name, words, True, reason, terms.X0, int(watch.violations[r]), float(watch.G_ratio[r]),
                float(watch.envelope_ratio[r]), float(watch.peak_ratio[r]),
                bool(isfinite(watch.saturated_at[r])), stopped, times,
                samples["states"], samples["offers"], samples["actuators"], samples["disturbances"],
            )
        )  # fmt: skip
        if table and terms.X0 == 0 and terms.scale is not None:
            for role, values in watch.peaks.items():
                here = values[..., r].max(axis=1, keepdims=True, initial=0.0)
                job.peaks[role] = np.maximum(job.peaks.get(role, np.zeros_like(here)), here)


def _run_class(job: Job, section: Section) -> None:
    """The adversary over every link of the class, once with the declared peaks and, where it differs, once with equal
    sizes for G.
    """
    section = replace_cells(section, min(section.cells, CLASS_CELLS))
    if not section.block.sizes[2]:
        return
    flavours = attack_sizes(job, section)
    h = float(job.coarse)
    epoch = min(MOST_EPOCH, ceil(horizon(section) / h))
    most = max(3 * epoch, int(MOST_CLASS_STEPS * min(1.0, 600 / (section.cells * section.block.sizes[0]))))
    names = [name for name, _ in targets(section, GROUPS)]
    for title, amplitude, scale in flavours:
        job.progress(f"adversary over every admitted link behaviour ({title})")
        terms = Terms(0.0, scale, True)
        climb, final = job.watch(section, [terms]), job.watch(section, [terms] * len(names))
        first, last = (
            Recorder(section, stride_for(section, most, 20)),
            Recorder(section, stride_for(section, epoch, 40)),
        )

        def inherit(block: Block, climb: Watch = climb, final: Watch = final, last: Recorder = last) -> np.ndarray:
            final.sup_w = np.maximum(final.sup_w, climb.sup_w[0])  # the disturbances of the climb belong to these runs
            last(block)
            return final(block)

        done = attack_class(section, amplitude, job.coarse, epoch, most, _both(climb, first), inherit, job.control())
        words = "every link delivers plus or minus its strength times the peak its source has reached, timed to push"
        _collect(job, climb, first, [(f"{title}, climb", words)])
        if last.times:
            last.times = [t + done.epochs * epoch * h for t in last.times]
            first.times = [np.concatenate(first.times)] if first.times else []
            _collect(job, final, last, [(f"{title} against {name}", words) for name in done.names])
        job.measures.setdefault("class_adversary", []).append(
            {
                "name": title,
                "epochs": done.epochs,
                "seconds": done.seconds,
                "cells": section.cells,
                "settled": done.settled,
            }
        )


def replace_cells(section: Section, cells: int) -> Section:
    """The same section with another number of cells."""
    return (
        section if cells == section.cells else replace(section, cells=cells, block=replace(section.block, cells=cells))
    )


def _run_late(job: Job) -> None:
    """The adversary on the decaying envelope: any age of the values within the declared delay."""
    section = replace_cells(job.section, min(job.section.cells, CLASS_CELLS))
    if not any(w.delay >= job.coarse for w in section.wires):
        return
    job.progress("adversary with links as late as declared")
    steps = ceil(job.seconds / float(job.coarse))
    names, x0, signs = late_starts(section, job.X0, float(job.coarse), steps)
    if not names:
        return
    watch = job.watch(section, [Terms(job.X0, None, job.together, job.together)] * len(names))
    watch.start(x0)
    recorder = Recorder(section, stride_for(section, steps, 4 * len(names)))
    attack_late(section, x0, signs, job.X0, job.coarse, _both(watch, recorder), job.control())
    words = "from a corner of the initial box; every link picks the value within its declared delay that pushes most"
    _collect(job, watch, recorder, [(name, words) for name in names])


def _run_equations(job: Job, gains: Gains, seed: int) -> None:
    """The equations as written, nonlinear terms and uncertain parameters included, against the same claim."""
    section, h = job.section, float(job.coarse)
    steps = ceil(job.seconds / h)
    if steps > MOST_WRITTEN:
        job.notes.append(f"runs as written end at {MOST_WRITTEN * h:.4g} s; the fastest mode asks for a short step")
        steps = MOST_WRITTEN
    job.progress("running the equations as written")
    every = steady_scenarios(section, job.amplitude, h, steps, job.scale)
    rough = random_scenarios(section, job.amplitude, h, steps, job.scale, seed)[1]
    begun = start_scenarios(section, job.amplitude if job.together else 0 * job.amplitude, h, steps, job.X0, job.scale)
    dwell = max(1, round(np.pi / worst_frequency(section) / h))
    plan = [(every["step"][0], "middle"), (every["sine"][1], "middle"), (rough, "middle"), (begun[0], "middle")]
    drift, uncertain = parameter_runs(section, seed, dwell, [])
    if uncertain:
        plan += [(every["step"][0], "low"), (every["step"][0], "high"), (every["sine"][1], "mixed")]
        plan += [(rough, "changing"), (begun[0], "low"), (begun[0], "high")]
        drift, _ = parameter_runs(section, seed, dwell, [values for _, values in plan])
    found = [scenario for scenario, _ in plan]
    zero = np.zeros((section.block.sizes[0], section.cells))
    x0 = np.stack([s.x0 if s.x0 is not None else zero for s in found], axis=-1)
    terms = [Terms(s.X0, s.scale, True) if s.X0 == 0 else Terms(s.X0, None, job.together, job.together) for s in found]
    watch = job.watch(section, terms)
    watch.start(x0)
    recorder = Recorder(section, stride_for(section, steps, 4 * len(found)))
    control = job.control()
    written = Written(section, gains, fresh_if_short(section.wires, job.coarse))
    limits = None if control is None else control.limits
    run_written(written, x0, job.coarse, steps, _wave(found), drift, _both(watch, recorder), limits)
    said = {
        "middle": "" if not uncertain else "; uncertain parameters at the middle of their ranges",
        "low": "; uncertain parameters at their lowest",
        "high": "; uncertain parameters at their highest",
        "mixed": "; every unit with its own parameters, each at an end of its range",
        "changing": f"; parameters redrawn from the ends of their ranges every {dwell * h:.3g} s",
    }
    words = [(f"as written, {s.name}" + (f", {v}" if uncertain else ""), f"equations as written: {s.words}{said[v]}")
             for s, v in plan]  # fmt: skip
    _collect(job, watch, recorder, words)


def _run_held(job: Job, network: Network) -> None:
    """The controller sampled and held at the goal's period: outside the claim, reported as measures only."""
    period = network.goal.period
    if period is None:
        return
    section = job.section
    many = ceil(float(period) / float(job.step))
    step = period / many
    steps = ceil(job.seconds / float(step))
    if steps > 3 * MOST_STEPS:
        job.notes.append(
            f"the controller period of {float(period):g} s is too short for a run of {job.seconds:g} s; "
            "held runs were left out"
        )
        return
    job.progress("controller sampled and held")
    system, late = fold_fresh(open_loop(section), fresh_if_short(section.wires, step))
    everywhere = steady_scenarios(section, job.amplitude, float(step), steps, job.scale)
    found = [*everywhere["step"], *everywhere["sine"]]
    limits = section.limits if job.saturate else np.full_like(section.limits, np.inf)
    watch = Watch(section, None, [Terms()] * len(found), limits if np.isfinite(limits).any() else None)
    recorder = Recorder(section, stride_for(section, steps, 20))
    x0 = np.zeros((section.block.sizes[0], section.cells, len(found)))
    march(Stepper(system, late, step), x0, steps, _wave(found), _both(watch, recorder), Control(limits, many))
    before = len(job.runs)
    _collect(
        job,
        watch,
        recorder,
        [(f"held, {s.name}", f"{s.words}; controller sampled every {float(period):g} s") for s in found],
        False,
    )
    reason = "outside the claim: the controller is sampled and held, the certificate is about the continuous loop"
    job.runs[before:] = [replace(run, counted=False, reason=reason) for run in job.runs[before:]]
    joined = {role: values.max(axis=(1, 2), initial=0.0)[:, None] for role, values in watch.peaks.items()}
    job.measures["held"] = {
        "period": float(period),
        "signals": signal_table(section, None, joined, job.scale),
        "stopped": any(run.stopped is not None for run in job.runs[before:]),
    }


def _ends(network: Network) -> str:
    if network.members is not None:
        return "these units with their links, and no others"
    if network.description == "rules":
        return "a random wiring within the rules; the claim is about every one of them"
    begin = "the section starts at the edge; beyond its other end" if len(network.edges) == 1 else "open ends:"
    if len(network.edges) == 2:
        return "the line between both edges, all of it; in a field units along the edges behave alike"
    return f"{begin} a link from outside delivers nothing; an end unit keeps its own part of a relative link"


def _finish(job: Job, network: Network, seed: int, chosen: Sequence[str]) -> Trajectory:
    """Put the result together."""
    section, claim = job.section, job.claim
    counted = [run for run in job.runs if run.counted]
    rest = [run.G_ratio for run in counted if run.X0 == 0]
    begun = [run.envelope_ratio for run in counted if run.X0 > 0]
    n, _, _, _, nz, ny = section.block.sizes
    zero = {"state": np.zeros((n, 1)), "offer": np.zeros((nz, 1)), "actuator": np.zeros((ny, 1))}
    measures = {
        "step": float(job.step), "adversary_step": float(job.coarse), "scale": job.scale, "X0": job.X0,
        "signals": signal_table(section, claim, job.peaks or zero, job.scale), **job.measures,
    }  # fmt: skip
    notes = [
        _ends(network),
        "peaks are read on the grid: a maximum between two samples is not seen",
        *job.notes,
    ]
    signals = {
        unit.kind.name: {
            "states": tuple((s.name, s.unit) for s in unit.kind.states),
            "offers": tuple((s.name, s.unit) for s in unit.kind.offers),
            "actuators": tuple((a.name, a.unit) for a in unit.kind.inputs),
            "disturbances": tuple((w.name, w.unit) for w in unit.kind.disturbances),
        }
        for unit in section.closed
    }
    settings = {
        "cells": section.cells,
        "seconds": job.seconds,
        "seed": seed,
        "scenarios": list(chosen),
        "saturate": job.saturate,
    }
    return Trajectory(
        units=section.units, seconds=job.seconds, checked=claim is not None,
        violations=sum(run.violations for run in counted),
        worst=Worst(max(rest, default=None), max(begun, default=None)) if claim is not None else Worst(None, None),
        measures=measures, runs=tuple(job.runs), signals=signals, notes=tuple(notes),
        provenance=Provenance(network.hash, settings),
    )  # fmt: skip
