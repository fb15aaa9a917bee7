"""How what happens to a string grows with its length: many hops in a row by fast transforms. Estimates, marked so.

The kernels of T^k, of T^k T_e/s and of T^k R are read from their values on the imaginary axis by one inverse transform
each, over a time in which the last response has passed. The integral of the modulus is a sum over the samples. The
error stated is the largest change when every second sample is left out, plus that when every second length is; it is an
estimate of an error, not a bound, and the numbers here are never part of a claim.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.gain.strings.dead_time import DelayLoop, QuasiPolynomial
from synth.gain.strings.hop import HopGains, rest_of
from synth.gain.strings.hop_network import HopLoop

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_MOST_SAMPLES = 18  # as a power of two
LONGEST = 20_000


@dataclass(frozen=True, eq=False)
class HopGrowth:
    """Numbers by length of the string, all estimates with a stated relative ``error``.

    ``vehicles``: k = 1, 2, ... (those computed); ``hop``: |T^k|_1, peak of the k-th follower's signal per peak of the
    leader's; ``gap_error``: |T^(k-1) T_e/s|_1 for the k-th follower (nan where there is none); ``disturbance``:
    sum_{m<k} |T^m R|_1, peak of the k-th vehicle's signal if the disturbance acts on k vehicles in a row with peak 1.
    ``law``: how the last column grows ('k^0.50' or '1.02^k'); ``extrapolated``: vehicles -> that column by the law.
    """

    name: str
    vehicles: NDArray[np.int64]
    hop: Array
    gap_error: Array
    disturbance: Array
    error: float
    law: str
    extrapolated: tuple[tuple[int, float], ...]

    def at(self, vehicle: int) -> tuple[float, float, float]:
        """(hop, gap_error, disturbance) of one vehicle, between those computed by interpolation in the logarithm."""
        if not 1 <= vehicle <= int(self.vehicles[-1]):
            raise InputError(
                f"vehicle {vehicle} is outside 1 to {int(self.vehicles[-1])}, for which this was computed."
            )
        x = math.log(vehicle)
        logs = np.log(self.vehicles)
        hop, gap, pushed = (float(np.interp(x, logs, y)) for y in (self.hop, self.gap_error, self.disturbance))
        return hop, gap, pushed

    def as_text(self) -> str:
        """One line per power of ten, and the law."""
        lines = [f"Estimates by fast transforms (relative error about {self.error:.1g}); disturbance: {self.name}."]
        for k in sorted({*(10**i for i in range(6) if 10**i <= self.vehicles[-1]), int(self.vehicles[-1])}):
            hop, gap, pushed = self.at(k)
            error = "" if math.isnan(gap) else f", gap error {gap:.4g} per unit of the leader's rate"
            lines.append(f"vehicle {k}: leader's peak times {hop:.4g}{error}; pushes on all {k} vehicles {pushed:.4g}.")
        lines += [f"extrapolated with {self.law}, not computed: {k} vehicles {v:.4g}." for k, v in self.extrapolated]
        return "\n".join(lines) + "\n"


def hop_growth(
    hops: HopGains, vehicles: int = 1000, disturbance: str | None = None, reach: Sequence[int] = (10_000, 100_000)
) -> HopGrowth:
    """Growth along the string up to ``vehicles`` hops, the kinds of the cell in turn, and extrapolated to ``reach``.

    ``disturbance``: which one (default: the first of the first kind). Raises InputError for lengths outside 2 to 20000
    and unknown names.
    """
    if not 2 <= vehicles <= LONGEST:
        raise InputError(f"the number of vehicles must lie between 2 and {LONGEST}, not {vehicles}.")
    chain = [hop.loop for hop in hops.hops]
    name = _chosen(chain, disturbance)
    line = _Line(chain, vehicles)
    ks = _lengths(vehicles)
    transfers = _Transfers(chain, name, line.s)
    hop, gap, push = (np.full(len(ks), np.nan) for _ in range(3))
    coarse = np.zeros(3)
    for i, k, kernels in transfers.along(ks):
        values = [line.kernel(kernel) if kernel is not None else None for kernel in kernels]
        for out, value in zip((hop, gap, push), values, strict=True):
            if value is not None:
                out[i] = np.abs(value).sum() * line.step
        if k > 1:  # the first hop has a jump or a corner, which the enclosures of HopGains settle
            half = [abs(2 * np.abs(v[::2]).sum() / np.abs(v).sum() - 1) for v in values if v is not None]
            coarse[0] = max(coarse[0], *half)
    if hops.hops[0].gap_error is not None:
        gap[0] = hops.hops[0].gap_error.upper
    hop[0] = hops.hops[0].peak.upper
    push[0] = hops.hops[0].disturbances[name].upper
    total, spread = _summed(ks, push)
    law, further = _law(ks, hop, total, reach)
    return HopGrowth(name, ks, hop, gap, total, float(coarse.max() + spread), law, further)


def _chosen(chain: Sequence[HopLoop], disturbance: str | None) -> str:
    known = set.intersection(*(set(hop.disturbances) for hop in chain))
    if disturbance is None:
        disturbance = next((name for name in chain[0].disturbances if name in known), None)
    if disturbance is None or disturbance not in known:
        raise InputError(
            f"no disturbance {disturbance!r} that every kind has; known: {', '.join(sorted(known)) or 'none'}."
        )
    return disturbance


def _lengths(vehicles: int) -> NDArray[np.int64]:
    ks = list(range(1, min(vehicles, 24) + 1))
    while ks[-1] < vehicles:
        ks.append(min(vehicles, max(ks[-1] + 1, round(ks[-1] * 1.08))))
    return np.array(ks, dtype=np.int64)


def evaluated(q: QuasiPolynomial, s: Complex) -> Complex:
    """Values of a quasi-polynomial in doubles."""
    total = np.zeros_like(s)
    for delay, row in q.terms.items():
        total += np.exp(-s * float(delay)) * np.polyval([float(c) for c in reversed(row)], s)
    return total


class _Line:
    """Samples of time, and the points of the imaginary axis that belong to them."""

    def __init__(self, chain: Sequence[HopLoop], vehicles: int) -> None:
        """Long enough for the last response to pass, and as fine as the number of samples allows."""
        mean = spread = slow = quick = 0.0
        for hop in chain:
            num, den = hop.loop.transfer("hop")
            n, d = num.taylor(2), den.taylor(2)
            first = float(n[1] / n[0] - d[1] / d[0]) if n[0] else -1.0
            second = float(2 * (n[2] / n[0] - d[2] / d[0]) - (n[1] / n[0]) ** 2 + (d[1] / d[0]) ** 2) if n[0] else 1.0
            mean, spread = max(mean, -first), max(spread, abs(second))
            modes = np.abs(
                np.linalg.eigvals(hop.loop.now.floats() + sum(A.floats() for b, A in hop.loop.A.items() if b))
            )
            slow, quick = max(slow, 1 / max(float(modes.min()), 1e-9)), max(quick, float(modes.max()))
        length = vehicles * mean + 14 * math.sqrt(vehicles * spread) + 30 * slow
        self.samples = 1 << min(_MOST_SAMPLES, max(12, math.ceil(math.log2(length * quick * 24))))
        self.step = length / self.samples
        self.s = np.asarray(2j * np.pi * np.fft.rfftfreq(self.samples, self.step), dtype=np.complex128)

    def kernel(self, values: Complex) -> Array:
        """Samples of the kernel whose transform has these values on the axis."""
        return np.asarray(np.fft.irfft(values, self.samples) / self.step, dtype=np.float64)


class _Transfers:
    """T of every hop of the cell, T_e/s and R, on the imaginary axis."""

    def __init__(self, chain: Sequence[HopLoop], name: str, s: Complex) -> None:
        self.hops = [_value(hop.loop, "hop", s) for hop in chain]
        self.errors = [_error_value(hop.loop, s) if _has_error(hop.loop) else None for hop in chain]
        self.push = _value(chain[0].disturbances[name], "hop", s)

    def along(self, ks: NDArray[np.int64]):  # type: ignore[no-untyped-def]
        """(place, k, (T^k, T^(k-1) T_e/s, T^(k-1) R)) for every k of the list."""
        so_far, place = np.ones_like(self.push), 0
        for k in range(1, int(ks[-1]) + 1):
            here = (k - 1) % len(self.hops)
            before = so_far
            so_far = so_far * self.hops[here]
            if k == ks[place]:
                error = self.errors[here]
                yield place, k, (so_far, None if error is None else before * error, before * self.push)
                place += 1


def _value(loop: DelayLoop, outlet: str, s: Complex) -> Complex:
    num, den = loop.transfer(outlet)
    return evaluated(num, s) / evaluated(den, s)


def _error_value(loop: DelayLoop, s: Complex) -> Complex:
    """T_e(s)/s; at s = 0 its limit from the exact power series."""
    num, den = loop.transfer("gap_error")
    values = evaluated(num, s)
    with np.errstate(divide="ignore", invalid="ignore"):
        values = values / (evaluated(den, s) * s)
    return np.where(s == 0, float(num.taylor(1)[1] / den.at_zero()), values)


def _has_error(loop: DelayLoop) -> bool:
    if "gap_error" not in loop.H or loop.F.get("gap_error"):
        return False
    return bool((loop.H["gap_error"] @ rest_of(loop))[0, 0] == 0)


def _summed(ks: NDArray[np.int64], push: Array) -> tuple[Array, float]:
    """Sums over all m < k from values at some lengths, and the change if every second of those is left out."""
    every = np.arange(1, int(ks[-1]) + 1)

    def total(at: NDArray[np.int64], values: Array) -> Array:
        filled = np.exp(np.interp(np.log(every), np.log(at), np.log(np.maximum(values, 1e-300))))
        return np.asarray(np.cumsum(filled), dtype=np.float64)

    fine = total(ks, push)
    pick = np.unique(np.concatenate([np.arange(0, len(ks), 2), [len(ks) - 1]]))
    coarse = total(ks[pick], push[pick])
    return fine[ks - 1], float(np.max(np.abs(coarse / fine - 1)))


def _law(
    ks: NDArray[np.int64], hop: Array, total: Array, reach: Sequence[int]
) -> tuple[str, tuple[tuple[int, float], ...]]:
    """Geometric where the hop gain itself grows that way, else a power of the length, from the last quarter."""
    last, from_k = int(ks[-1]), max(1, int(ks[-1]) // 4)
    start = int(np.searchsorted(ks, from_k))
    rate = (math.log(hop[-1]) - math.log(hop[start])) / (last - int(ks[start])) if last > ks[start] else 0.0
    longer = [int(n) for n in reach if n > last]
    if rate * last > 3:
        text, values = f"{math.exp(rate):.5g}^k", [_safe(math.log(total[-1]) + rate * (n - last)) for n in longer]
    else:
        power = math.log(total[-1] / total[start]) / math.log(last / int(ks[start]))
        text, values = f"k^{power:.3g}", [float(total[-1]) * (n / last) ** power for n in longer]
    return text, tuple(zip(longer, values, strict=True))


def _safe(logarithm: float) -> float:
    return math.exp(logarithm) if logarithm < 700 else math.inf


def leader_signal(
    hops: HopGains, vehicle: int, outlet: str = "hop", seconds: float | None = None
) -> tuple[Array, Array, float]:
    """The signal of the leader that is worst for one vehicle: times (s), values of 1 or -1, and the bound's estimate.

    ``outlet`` 'hop': the leader's hop signal, against the vehicle's; 'gap_error': its rate of change, against the gap
    error. The value holds from each time to the next. Method: the sign of the kernel, reversed in time, is where the
    convolution reaches the integral of its modulus. ``seconds``: length (default: until the response has passed).
    """
    if outlet not in ("hop", "gap_error"):
        raise InputError(f"outlet must be 'hop' or 'gap_error', not {outlet!r}.")
    chain = [hop.loop for hop in hops.hops]
    if outlet == "gap_error" and not _has_error(chain[(vehicle - 1) % len(chain)].loop):
        raise InputError("this string has no gap error that vanishes at rest; name one with gap_error.")
    line = _Line(chain, vehicle)
    values = np.ones_like(line.s)
    for k in range(vehicle - 1):
        values = values * _value(chain[k % len(chain)].loop, "hop", line.s)
    own = chain[(vehicle - 1) % len(chain)].loop
    last = _error_value(own, line.s) if outlet == "gap_error" else _value(own, "hop", line.s)
    kernel = line.kernel(values * last)
    count = line.samples if seconds is None else min(line.samples, max(2, round(seconds / line.step)))
    kernel = kernel[:count]
    signs = np.where(kernel >= 0, 1.0, -1.0)[::-1]
    times = np.asarray(line.step * np.arange(count), dtype=np.float64)
    return times, signs.astype(np.float64), float(np.abs(kernel).sum() * line.step)
