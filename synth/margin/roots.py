"""Rightmost roots of a linear loop with constant delays: a Chebyshev discretisation finds them, Newton polishes them.

The history on [-d, 0] is replaced by its values at Chebyshev points, which turns the delay equation into an eigenvalue
problem (Breda, Maset, Vermiglio, SIAM J. Sci. Comput. 27(2) 2005; Trefethen, Spectral Methods in MATLAB, 2000, for the
differentiation matrix). Each candidate is then polished on det M(s) = 0 and kept only if its residual is small.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.margin.symbol import Angle, ComplexArray, Loop, Term


@dataclass(frozen=True)
class Root:
    """A polished root ``s`` (1/s) at angle ``theta``; ``residual`` is |M(s) x| over the size of the parts of M."""

    s: complex
    theta: Angle
    residual: float


def rightmost_roots(
    A: Sequence[Sequence[float]] | NDArray[np.float64],
    delayed: Sequence[tuple[Sequence[Sequence[float]] | NDArray[np.float64], float]] = (),
    count: int = 1,
) -> tuple[Root, ...]:
    """The ``count`` roots with the largest real parts of x'(t) = A x(t) + sum of A_d x(t - d), polished.

    ``A`` and every A_d: shape (n, n), 1/s; delays in seconds, >= 0. One of each conjugate pair may be missing when
    ``count`` cuts between them. Raises ValueError for a negative delay.
    """
    base = np.asarray(A, dtype=float)
    if any(delay < 0 for _, delay in delayed):
        raise ValueError("a delay must not be negative")
    terms = tuple(Term(np.asarray(J, dtype=float), 0, float(d), False) for J, d in delayed)
    size = np.abs(base) + sum((np.abs(t.J) for t in terms), np.zeros_like(base))
    bound = float(np.max(np.abs(np.linalg.eigvals(size)))) + 1e-9
    loop = Loop(np.eye(len(base)), base, terms, len(base), bound, 1.0, 0.0)
    return polished(loop, 0.0, count)


def candidates(loop: Loop, thetas: NDArray[np.float64], fine: bool = True) -> ComplexArray:
    """Approximate roots at each angle, shape (angles, roots), sorted by falling real part.

    ``thetas``: shape (angles,) on a line, (angles, directions) otherwise.
    """
    nodes = _nodes(loop, fine)
    stack = np.stack([_discretised(loop, _angle(theta), nodes)[0] for theta in thetas])
    if loop.A.shape[0] == loop.states:
        found = np.linalg.eigvals(stack)
    else:
        from scipy.linalg import eigvals

        found = np.stack(
            [eigvals(m, _discretised(loop, _angle(t), nodes)[1]) for m, t in zip(stack, thetas, strict=True)]
        )
        found = np.where(np.isfinite(found) & (np.abs(found) < 1e8), found, -1e300)
    order = np.argsort(-found.real, axis=1)
    sorted_roots: ComplexArray = np.take_along_axis(np.asarray(found), order, axis=1)
    return sorted_roots


def _angle(theta: NDArray[np.float64]) -> Angle:
    return float(theta) if np.ndim(theta) == 0 else tuple(float(t) for t in theta)


def polished(loop: Loop, theta: Angle, count: int = 1) -> tuple[Root, ...]:
    """The ``count`` rightmost roots at one angle after Newton's method; fewer if some did not converge."""
    rough = candidates(loop, np.array([theta]))[0]
    found: list[Root] = []
    for guess in rough[: 2 * count + 6]:
        root = polish(loop, theta, complex(guess))
        if root is not None and all(abs(root.s - r.s) > 1e-9 * (1 + abs(root.s)) for r in found):
            found.append(root)
    found.sort(key=lambda r: -r.s.real)
    return tuple(found[:count])


def polish(loop: Loop, theta: Angle, guess: complex) -> Root | None:
    """Newton on M(s) x = 0 with a normalised vector; None if the residual does not become small."""
    angle = np.array([theta])
    M = loop.matrix(angle, np.array([guess]))[0]
    scale = abs(guess) + float(np.linalg.norm(loop.A)) + sum(float(np.linalg.norm(t.J)) for t in loop.terms) + 1e-300
    x = np.linalg.svd(M)[2][-1].conj()
    s, normal = guess, x.conj()
    size = len(x)
    for _ in range(30):
        M = loop.matrix(angle, np.array([s]))[0]
        system = np.zeros((size + 1, size + 1), dtype=complex)
        system[:size, :size], system[:size, size] = M, loop.slope(theta, s) @ x
        system[size, :size] = normal
        try:
            step = np.linalg.solve(system, np.concatenate([-(M @ x), [1 - normal @ x]]))
        except np.linalg.LinAlgError:
            break  # a double root: the candidate itself is as good as it gets
        if not np.all(np.abs(step) < 1e100):
            return None  # a nearly singular system: the iteration has lost its way
        x, s = x + step[:size], s + complex(step[size])
        if abs(s - guess) > 1 + abs(guess):
            return None
        if abs(step[size]) <= 1e-14 * (1 + abs(s)):
            break
    with np.errstate(over="ignore", invalid="ignore"):  # e^{-s d} may overflow far to the left: then it is no root
        residual = float(np.abs(loop.matrix(angle, np.array([s]))[0] @ x).max() / np.abs(x).max()) / scale
    return Root(s, theta, residual) if residual < 1e-9 else None


def encircled(loop: Loop, root: Root) -> bool:
    """Whether det M winds around zero once or more along a circle about ``root`` that stays in Re s > 0.

    A second witness for an unstable verdict: the phase is followed in steps below a quarter turn.
    """
    radius = root.s.real / 2
    if radius <= 0:
        return False
    for points in (64, 512, 4096):
        circle = root.s + radius * np.exp(2j * np.pi * np.arange(points + 1) / points)
        values = np.linalg.det(loop.matrix(np.repeat(np.array([root.theta]), points + 1, axis=0), circle))
        if np.any(values == 0):
            return True
        turns = np.angle(values[1:] / values[:-1])
        if np.max(np.abs(turns)) < np.pi / 2:
            return bool(round(float(np.sum(turns)) / (2 * np.pi)) >= 1)
    return False


def _nodes(loop: Loop, fine: bool) -> int:
    """Number of Chebyshev intervals: enough for exp(s theta) with |s| up to the root bound, within reason."""
    longest = max((t.delay for t in loop.terms), default=0.0)
    if longest == 0:
        return 0
    reach = longest * (loop.radius if np.isfinite(loop.radius) else 10.0)
    return int(np.clip(np.ceil(8 + reach), 10, 40 if fine else 16))


def _discretised(loop: Loop, theta: Angle, nodes: int) -> tuple[ComplexArray, ComplexArray]:
    """Matrices (left, right) of the eigenvalue problem left u = s right u for the loop at one angle."""
    now, late = loop.split(theta)
    size = len(now)
    if nodes == 0:
        return now, loop.E.astype(complex)
    longest = max(delay for _, delay in late) if late else max(t.delay for t in loop.terms)
    grid = np.cos(np.pi * np.arange(nodes + 1) / nodes)  # 1 .. -1 stands for time 0 .. -longest
    weights = np.where((np.arange(nodes + 1) % nodes) == 0, 0.5, 1.0) * (-1.0) ** np.arange(nodes + 1)
    ratio = weights[None, :] / weights[:, None]
    gaps = grid[:, None] - grid[None, :] + np.eye(nodes + 1)
    derivative = ratio / gaps
    np.fill_diagonal(derivative, 0.0)
    derivative -= np.diag(derivative.sum(axis=1))
    left = np.kron(derivative * (2 / longest), np.eye(size)).astype(complex)
    left[:size] = 0
    left[:size, :size] = now
    for J, delay in late:
        left[:size] += np.kron(_interpolation(grid, weights, 1 - 2 * delay / longest)[None, :], J)
    right = np.eye(len(left), dtype=complex)
    right[:size, :size] = loop.E
    return left, right


def _interpolation(grid: NDArray[np.float64], weights: NDArray[np.float64], at: float) -> NDArray[np.float64]:
    """Barycentric weights that evaluate the interpolating polynomial at ``at``."""
    distance = at - grid
    hit = np.abs(distance) < 1e-14
    if np.any(hit):
        return hit.astype(float)
    raw = weights / distance
    return np.asarray(raw / raw.sum())
