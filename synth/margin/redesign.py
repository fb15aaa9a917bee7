"""How much stronger the links may get if the gains are picked anew at each strength.

The search goes up from the factor that today's gains already prove, in steps of a quarter, then bisects. A factor
counts only if the new gains keep every limit of the design and are proven there by a certificate; it is a lower bound
on what other gains could do.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import SynthError
from synth.base.progress import Listener, silent
from synth.margin.coupling import Scaling, tidy
from synth.network.gains import Gains
from synth.proof import Certificate, prove

NEAR_ONE = Fraction(999_999, 1_000_000)


@dataclass(frozen=True)
class Redesigned:
    """``factor`` times today's strength is proven with ``gains`` (``certificate``); ``failed``: first strength where
    the search found no gains that prove (None: the cap came first). Not finding gains does not show there are none.
    """

    factor: float
    gains: Gains
    certificate: Certificate
    failed: float | None
    cap: float

    def as_json(self) -> dict[str, object]:
        """Plain data."""
        return {
            "factor": self.factor,
            "gains": {kind: self.gains[kind].as_dict() for kind in self.gains},
            "failed": self.failed,
            "cap": self.cap,
        }


def largest_redesigned(
    scaling: Scaling,
    proven: float,
    certificate: Certificate | None,
    width: float = 0.05,
    cap: float = 100.0,
    progress: Listener = silent,
) -> Redesigned | None:
    """Largest factor, found going up, at which newly picked gains are proven; None if not even the first try succeeds.

    ``proven``: factor that today's gains prove, with its ``certificate`` (None: not proven at all). ``width``: relative
    width at which the bisection stops; each step is a whole design, so it is kept coarse.
    """
    best: Redesigned | None = None
    if certificate is not None and proven > 0:
        best = Redesigned(proven, scaling.gains, certificate, None, cap)
    low, failed = (proven, None) if best is not None else (0.0, None)
    trial = max(low * 1.25, 1.0) if best is not None else 1.0
    while trial <= cap:
        progress(f"picking gains anew at {trial:.4g} times today's strength")
        found = _attempt(scaling, trial, cap)
        if found is None:
            failed = trial
            break
        best, low, trial = found, trial, trial * 1.25
    while best is not None and failed is not None and failed - low > width * failed:
        trial = (low + failed) / 2
        progress(f"picking gains anew at {trial:.4g} times today's strength")
        found = _attempt(scaling, trial, cap)
        if found is None:
            failed = trial
        else:
            best, low = found, trial
    if best is None:
        return None
    return Redesigned(best.factor, best.gains, best.certificate, failed, cap)


def _attempt(scaling: Scaling, factor: float, cap: float) -> Redesigned | None:
    """Pick gains for that strength and prove them; None where the design or the proof says no."""
    from synth.local import design

    kappa = tidy(factor)
    network = scaling.at(kappa)
    try:
        chosen = design(network)
        certificate = prove(network, chosen.gains, route="peak", target=NEAR_ONE)
    except SynthError:  # an obstruction, no stabilising gains, a solver that gave up: no gains at this strength
        return None
    if not certificate.proven or chosen.broken:  # gains that leave the design's own limits are no answer
        return None
    return Redesigned(float(kappa), chosen.gains, certificate, None, cap)
