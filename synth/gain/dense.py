"""The gain operator as its definition reads, loop by loop: slow, and the truth that the fast code is tested against."""

from __future__ import annotations

import itertools
import math

from synth.gain.operator import GainOperator


def apply_literally(operator: GainOperator, s: list[float]) -> list[float]:
    """G(s) row by row and link by link; ``s`` (size,) non-negative."""
    result = []
    for i in range(operator.size):
        links = [k for k in range(len(operator.gain)) if operator.to[k] == i]
        # Links with equal choice >= 0 are alternatives, every other link is an alternative to nothing.
        alternatives: dict[tuple[str, int], list[int]] = {}
        for k in links:
            name = ("choice", int(operator.choice[k])) if operator.choice[k] >= 0 else ("alone", k)
            alternatives.setdefault(name, []).append(k)
        terms = [
            (int(operator.inlet[group[0]]), max(float(operator.gain[k] * s[operator.source[k]]) for k in group))
            for group in alternatives.values()
        ]
        if operator.rows[i] == "sum":
            result.append(math.fsum(term for _, term in terms))
        elif operator.rows[i] == "max":
            result.append(max((term for _, term in terms), default=0.0))
        else:
            sums = [math.fsum(term for at, term in terms if at == g) for g in sorted({at for at, _ in terms})]
            result.append(math.hypot(*sums))
    return result


def radius_literally(operator: GainOperator, steps: int) -> float:
    """|G^n(1)|^{1/n}, the definition of the radius before its limit; an upper bound for every n."""
    s, logarithm = [1.0] * operator.size, 0.0
    for _ in range(steps):
        s = apply_literally(operator, s)
        largest = max(s)
        if largest == 0:
            return 0.0
        logarithm += math.log(largest)
        s = [value / largest for value in s]
    return math.exp(logarithm / steps)


def largest_loop_literally(operator: GainOperator) -> float:
    """Largest geometric mean of the gains round any simple loop, by trying all of them (the radius of max rows)."""
    best: dict[tuple[int, int], float] = {}
    for k in range(len(operator.gain)):
        pair = (int(operator.to[k]), int(operator.source[k]))
        best[pair] = max(best.get(pair, 0.0), float(operator.gain[k]))
    largest = 0.0
    for length in range(1, operator.size + 1):
        for nodes in itertools.permutations(range(operator.size), length):
            product = math.prod(best.get((a, b), 0.0) for a, b in zip(nodes, (*nodes[1:], nodes[0]), strict=True))
            largest = max(largest, product ** (1 / length))
    return largest
