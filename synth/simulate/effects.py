"""Scenarios with the links as wired: outside disturbances and initial sizes, each piecewise constant on the grid.

Every disturbance keeps to ``amplitude`` per component (declared peak, times the factor up to which the certificate is
valid), so
that every scenario of this file satisfies the hypotheses of the claim.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from synth.simulate.kernels import Line, held_kernels, stack_rows, targets
from synth.simulate.model import Array, Section

Wave = Callable[[int, int], Array]  # (first step, number of steps) -> w[step, disturbance, cell]


@dataclass(frozen=True)
class Scenario:
    """One run: its name, what it does in words, w over time, and the initial state (size ``X0`` in the maximum norm).

    ``scale`` is the largest disturbance as a multiple of the declared peaks; None: not comparable (sizes are set
    another way).
    """

    name: str
    words: str
    wave: Wave
    x0: Array | None = None
    X0: float = 0.0
    scale: float | None = 1.0


def constant(value: Array) -> Wave:
    """The same w[disturbance, cell] at every step."""
    return lambda first, count: np.broadcast_to(value, (count, *value.shape))


def steady_scenarios(
    section: Section, amplitude: Array, h: float, steps: int, scale: float
) -> dict[str, list[Scenario]]:
    """Step, sines, pulse and a disturbance of the first unit only; sines at the frequency the network answers most to,
    half and twice.
    """
    cells = section.cells
    everywhere = np.repeat(amplitude[:, None], cells, axis=1)
    omega = worst_frequency(section)

    def sine(frequency: float) -> Wave:
        return lambda first, count: np.sin(frequency * h * (first + np.arange(count) + 0.5))[:, None, None] * everywhere

    length = max(1, min(round(np.pi / omega / h), steps // 4))

    def pulse(first: int, count: int) -> Array:
        return (first + np.arange(count) < length)[:, None, None] * everywhere

    alone = np.zeros_like(everywhere)
    alone[:, section.first] = amplitude
    return {
        "step": [Scenario("step", "every disturbance steps to its peak and stays", constant(everywhere), scale=scale)],
        "sine": [
            Scenario(f"sine {f:.3g} rad/s", "every disturbance a sine at its peak, all in phase", sine(f), scale=scale)
            for f in (omega / 2, omega, 2 * omega)
        ],
        "pulse": [
            Scenario("pulse", f"every disturbance at its peak for {length * h:.3g} s, then none", pulse, scale=scale)
        ],
        "leader": [Scenario("leader", "only the first unit is disturbed, by a step", constant(alone), scale=scale)],
    }


def random_scenarios(
    section: Section, amplitude: Array, h: float, steps: int, scale: float, seed: int
) -> list[Scenario]:
    """Two runs of independent piecewise constant disturbances: any value within the peak, and always plus or minus the
    peak.
    """
    rng = np.random.default_rng(seed)
    dwell = max(1, round(np.pi / worst_frequency(section) / h))
    pieces = (steps // dwell + 1, len(amplitude), section.cells)
    anywhere = rng.uniform(-1.0, 1.0, pieces) * amplitude[:, None]
    extreme = rng.choice([-1.0, 1.0], pieces) * amplitude[:, None]

    def hold(values: Array) -> Wave:
        return lambda first, count: values[(first + np.arange(count)) // dwell]

    words = f"independent random values, each held {dwell * h:.3g} s"
    return [
        Scenario("random", words, hold(anywhere), scale=scale),
        Scenario("random extreme", words + ", always plus or minus the peak", hold(extreme), scale=scale),
    ]


def start_scenarios(
    section: Section, amplitude: Array, h: float, steps: int, X0: float, scale: float
) -> list[Scenario]:
    """Runs from corners of the initial box |x| <= X0, chosen to push one signal each: at its own worst time, and late.

    The corner is sign(R e^{At}) for the signal's row R and the time t at which |R e^{At}|_1 is largest; once
    undisturbed, once with
    the disturbance that adds most (and t where the sum of both is largest). Late corners (states only) aim at the decay
    rate.
    """
    block, cells = section.block, section.cells
    still = constant(np.zeros((len(amplitude), cells)))
    found: list[Scenario] = []
    for label, lines in targets(section, ("states", "offers", "inputs")):
        Kx, _, Kw = held_kernels(block, stack_rows(lines), h, steps)
        sizes = np.abs(Kx).sum(axis=2)  # [step, kind]
        best = np.argmax(np.nan_to_num(sizes, nan=-1.0), axis=0)
        corner = _corner(section, lines, Kx, best, X0)
        found.append(
            Scenario(f"start against {label}", "from a corner of the initial box, undisturbed", still, corner, X0, 0.0)
        )
        pushed = np.vstack([np.zeros(len(lines)), np.cumsum(np.abs(Kw) @ amplitude, axis=0)])
        both = np.argmax(np.nan_to_num(X0 * sizes + pushed, nan=-1.0), axis=0)
        words = "from a corner of the initial box, with the disturbance that adds most"
        wave = _ending_at(section, lines, Kw, both, amplitude)
        corner = _corner(section, lines, Kx, both, X0)
        found.append(Scenario(f"start and disturbance against {label}", words, wave, corner, X0, scale))
    for label, lines in targets(section, ("states",)):
        Kx, _, _ = held_kernels(block, stack_rows(lines), h, steps)
        for part in (3, 1):
            corner = _corner(section, lines, Kx, np.full(len(lines), steps // part), X0)
            name = f"start against {label} at {steps // part * h:.3g} s"
            found.append(Scenario(name, "from the corner that is largest late, undisturbed", still, corner, X0, 0.0))
    return found


def _corner(section: Section, lines: list[Line], Kx: Array, when: np.ndarray, X0: float) -> Array:
    """x0[state, cell] = X0 sign(R e^{A t}) per kind; a zero of the kernel counts as plus."""
    corner = np.zeros(section.block.sizes[0])
    for r, line in enumerate(lines):
        low, high = section.shape.states[line.kind]
        corner[low:high] = np.where(Kx[when[r], r, low:high] < 0, -X0, X0)
    return np.repeat(corner[:, None], section.cells, axis=1)


def _ending_at(section: Section, lines: list[Line], Kw: Array, when: np.ndarray, amplitude: Array) -> Wave:
    """w at its peak with the sign of the time-reversed kernel until each kind's time, then zero."""
    table = np.zeros((int(when.max()) + 1, len(amplitude)))
    for r, line in enumerate(lines):
        low, high = section.shape.disturbances[line.kind]
        count = int(when[r])
        table[:count, low:high] = np.sign(Kw[:count, r, low:high][::-1]) * amplitude[low:high]

    def wave(first: int, count: int) -> Array:
        index = np.minimum(first + np.arange(count), len(table) - 1)
        return np.repeat(table[index][:, :, None], section.cells, axis=2)

    return wave


def worst_frequency(section: Section) -> float:
    """The angular frequency in rad/s at which the endless network, all units in phase, answers most to its
    disturbances.

    Gain: sum of |offers| per disturbance at its declared peak, over a grid of frequencies around the modes of the
    closed units.
    """
    block = section.block
    modes = np.abs(np.linalg.eigvals(block.A)) if block.sizes[0] else np.array([1.0])
    fastest = float(max(modes.max(initial=0.0), 1e-3))
    slowest = float(max(modes[modes > 1e-9 * fastest].min(initial=fastest), 1e-3 * fastest))
    best, found = -1.0, fastest
    n, offers = block.sizes[0], block.sizes[4]
    for omega in np.geomspace(slowest / 30, fastest * 3, 120):
        S = np.zeros((block.sizes[1], block.sizes[4]), dtype=complex)
        for wire in section.wires:
            S[wire.take, wire.offer] += wire.strength * np.exp(-1j * omega * float(wire.delay))
        # [iw - A, -D S; -H, I - F S] [x; z] = [E; Fw] w
        top = np.hstack([1j * omega * np.eye(n) - block.A, -block.D @ S])
        matrix = np.vstack([top, np.hstack([-block.H, np.eye(offers) - block.F @ S])])
        right = np.vstack([block.E, block.Fw])
        try:
            answer = np.linalg.solve(matrix, right)
        except np.linalg.LinAlgError:
            return float(omega)
        size = float((np.abs(answer[n:] if offers else answer) @ section.peaks).sum())
        if size > best:
            best, found = size, float(omega)
    return found
