"""How much stronger one link may get while everything else stays: theory (15), for finite networks and for patterns.

With M_link[l, l'] = p_{outlet(l), inlet(l')} g_l' where link l' ends at the unit at which link l starts, and
R = (I - M_link)^{-1}, multiplying the strength of link l alone by f multiplies column l of M_link by f; the radius
reaches one at f = R_ll / (R_ll - 1). Looking at entries of the outlet matrix instead is wrong as soon as one link
feeds several entries.

In an endless pattern "one link" can mean two things, and both are given. *Single*: one instance somewhere along the
pattern gets stronger while all its copies stay. M_link is then invariant along the pattern and R_ll is its lattice
Green's function at distance zero, the mean of [(I - M^(theta))^{-1}]_ll over theta, with
M^[l, l'](theta) = p g_l' exp(i theta at_l). *Everywhere*: all copies get stronger together (coupling.py).
In the single case the own part of a relative link stays as it is.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import inf

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.base.errors import InputError
from synth.gain.sensitivity import LinkNetwork
from synth.network.model import Network


@dataclass(frozen=True)
class FiniteLink:
    """A link of a finite network: from ``outlet`` of unit ``source`` to ``inlet`` of unit ``to``; ``strength`` >= 0."""

    source: int
    outlet: int
    to: int
    inlet: int
    strength: float


def finite_link_tolerances(
    peaks: Sequence[ArrayLike], links: Sequence[FiniteLink], only: Sequence[int] | None = None
) -> tuple[float, ...]:
    """Factor on each link alone, all others unchanged, below which the radius of a finite network certainly stays 1.

    ``peaks[u]`` is the peak gain matrix of unit u, shape (outlets, inlets), entries >= 0; ``only``: numbers of the
    links asked for (None: all). Guaranteed: with that one link so much stronger the enclosed radius is below 1; the
    exact tolerance lies above by about one part in 10^12. Infinite for a link on no closed path. Raises InputError if
    the network as given already has radius >= 1. Source: theory (15), ours.
    """
    network = LinkNetwork.of(
        peaks,
        [one.source for one in links],
        [one.outlet for one in links],
        [one.to for one in links],
        [one.inlet for one in links],
        [one.strength for one in links],
    )
    # A hair less, so that the rounding of strength times factor cannot carry the product past what was proven.
    return tuple((network.lower_tolerances(only) * (1 - 1e-13)).tolist())


def pattern_link_tolerances(network: Network, peaks: Mapping[str, ArrayLike]) -> tuple[float, ...]:
    """Factor on a *single* instance of each link of an endless pattern at which the radius reaches one.

    ``peaks[kind]``: peak gains of the closed unit, shape (offers, takes). Links in the order of ``network.links``. The
    Green's function is computed on rings of doubling length: a ring adds the paths around it, so each answer is on the
    safe (small) side. Raises InputError if the pattern as given has radius >= 1.
    Law: never below the factor that all copies of the link may take together. Source: theory (15) on the lattice, ours.
    """
    links = network.links
    count = len(links)
    weight, phase = np.zeros((count, count)), np.array([float(link.at[0]) for link in links])
    for row, reader in enumerate(links):
        kind = network.kind(reader.source_kind)
        for column, feeder in enumerate(links):
            if feeder.kind == reader.source_kind:
                gain = np.atleast_2d(np.asarray(peaks[kind.name], dtype=float))[
                    kind.index("offers", reader.offer), kind.index("takes", feeder.take)
                ]
                weight[row, column] = gain * abs(float(feeder.strength))
    _refuse_unproven(weight)
    previous: NDArray[np.float64] | None = None
    length = 64
    while True:
        angles = 2 * np.pi * np.arange(length) / length
        symbols = np.exp(1j * angles[:, None] * phase[None, :])[:, :, None] * weight
        returns = np.mean(np.linalg.inv(np.eye(count) - symbols), axis=0).diagonal().real
        done = previous is not None and np.max(np.abs(returns - previous) / returns, initial=0.0) < 1e-10
        if done or length >= 65_536:
            return tuple(_from_return(float(r)) for r in returns)
        previous, length = returns, 2 * length


def _refuse_unproven(M: NDArray[np.float64]) -> None:
    if M.size and np.max(np.abs(np.linalg.eigvals(M))) >= 1:
        raise InputError(
            "a link tolerance needs a network whose radius is below 1 as it stands; "
            "weaken the links or choose other gains first."
        )


def _from_return(r: float) -> float:
    """R_ll/(R_ll - 1); a link from which nothing ever returns (R_ll = 1 up to rounding) tolerates any strength."""
    return inf if r - 1 <= 1e-12 else float(r / (r - 1))
