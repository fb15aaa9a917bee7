"""The margin of the coupling as one frozen result, as plain data and as sentences."""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from math import inf, isinf

from synth.base.caution import CAUTIONS
from synth.base.provenance import Provenance
from synth.margin.exact import ExactLimit
from synth.margin.redesign import Redesigned
from synth.proof import Certificate


@dataclass(frozen=True)
class LinkTolerance:
    """How much stronger one link of the file may get while all others stay as they are, peak route.

    ``tolerance``: all its copies along the pattern, and all links of its class, get stronger together (own parts as
    the margin says; ``capped``: nothing failed up to that factor). ``single``: one copy only, its own part as it is;
    inf where nothing that the link carries ever returns to it, None where it is not offered.
    ``link`` describes the line in words.
    """

    name: str
    link: str
    tolerance: float
    single: float | None
    capped: bool = False

    def as_json(self) -> dict[str, object]:
        """Plain data; infinity as 'inf'."""
        return {key: _plain(value) for key, value in self.__dict__.items()}


@dataclass(frozen=True)
class Margin:
    """Largest tolerable coupling, as factors on today's strengths. Law: proven_factor <= class_limit <= exact.upper.

    ``proven_factor``: the network with links that much stronger is proven, any number of units (``certificate`` is
    about that network, with disturbance peaks of zero where the declared ones are too large for the limits there);
    0 if nothing is. ``covered``: every factor from 1 up to this one is proven too (0 if 1 is not).
    ``capped``: nothing failed up to ``proven_factor`` = the cap. ``class_limit``: there the guarantee for every link
    behaviour |v| <= g sup|z| is lost, whatever the proof (theory (2)); ``class_capped`` as above.
    ``exact``, ``exact_no_delay``: where the network as declared breaks, with links exactly at their delays, and fresh.
    ``within_limits_factor``: largest factor, found going outward from 1, at which the declared disturbances keep every
    actuator and band inside its bound (None: no bound declared); ``within_limits_certified``: a certificate agreed.
    ``bottleneck``: share of each link class in the radius at today's strength.
    """

    proven_factor: float
    class_limit: float
    exact: ExactLimit
    exact_no_delay: ExactLimit
    covered: float
    capped: bool
    class_capped: bool
    route: str
    classes: tuple[str, ...] | None
    own_parts: bool
    relative: bool
    links: tuple[LinkTolerance, ...]
    bottleneck: tuple[tuple[str, float], ...]
    within_limits_factor: float | None
    within_limits_certified: bool
    redesigned: Redesigned | None
    certificate: Certificate | None
    notes: tuple[str, ...]
    units_word: str
    provenance: Provenance
    smallest_gap: None = None
    whole: str = "any number of units"

    def as_json(self) -> dict[str, object]:
        """Plain data with the keys of the contract; infinity as 'inf'."""
        return {
            "proven_factor": _plain(self.proven_factor),
            "class_limit": _plain(self.class_limit),
            "exact": self.exact.as_json(),
            "exact_no_delay": self.exact_no_delay.as_json(),
            "covered": _plain(self.covered),
            "capped": self.capped,
            "class_capped": self.class_capped,
            "route": self.route,
            "classes": None if self.classes is None else list(self.classes),
            "own_parts_scale": self.own_parts,
            "links": [link.as_json() for link in self.links],
            "bottleneck": [{"name": name, "share": share} for name, share in self.bottleneck],
            "within_limits_factor": _plain(self.within_limits_factor),
            "within_limits_certified": self.within_limits_certified,
            "smallest_gap": None,
            "redesigned": None if self.redesigned is None else self.redesigned.as_json(),
            "certificate_sha256": None if self.certificate is None else self.certificate.hash,
            "notes": list(self.notes),
            "provenance": self.provenance.as_dict(),
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """One plain sentence first, then the details, each number with what it is about."""
        lines = [self.sentence(), ""]
        which = "all links" if self.classes is None else "links of class " + ", ".join(self.classes)
        own = ""
        if self.relative:
            own = "; own parts of relative links " + ("grow with them" if self.own_parts else "stay as they are")
        lines.append(f"What is made stronger: {which}{own}. Route: {self.route}.")
        lines.append(
            "Class: every link independently any causal operator with |received| <= strength times the peak of what "
            "was sent so far (delay, loss, either sign, any variation)."
        )
        if self.within_limits_factor is not None:
            word = "certified" if self.within_limits_certified else "computed, no certificate at that strength"
            lines.append(
                f"Under the declared disturbances every actuator and band stays inside its bound up to "
                f"{_number_below(self.within_limits_factor)} times today's strength ({word})."
            )
        lines.append(
            "Proven here means that the radius is below 1; 'synth prove' asks for a radius of at most the target of "
            "the goal, so it may refuse what is proven here with less room."
        )
        if self.exact.note:
            lines.append(f"Where it breaks: {self.exact.note}")
        if self.exact.with_delays:
            lines.append(f"With every link fresh: {_breaks(self.exact_no_delay, self.units_word)}.")
        for link in self.links:
            reach = "at least " if link.capped else ""
            line = f"{link.link}: the whole class may get {reach}{_number_below(link.tolerance)} times as strong"
            if link.single is not None:
                line += f", one single copy, its own part as it is, {_number_below(link.single)} times"
            lines.append(line + ".")
        if self.bottleneck:
            lines.append("Share in the radius: " + ", ".join(f"{n} {100 * s:.0f} %" for n, s in self.bottleneck) + ".")
        if self.redesigned is not None:
            if self.redesigned.factor > self.proven_factor:
                times = _number_below(self.redesigned.factor)
                lines.append(f"With gains picked anew: proven at {times} times today's strength.")
            else:
                lines.append("Picking the gains anew, within the limits of the design, was not found to give more.")
        lines += [f"Note: {note}" for note in self.notes]
        return "\n".join(lines) + "\n"

    def sentence(self) -> str:
        """The answer in one sentence."""
        if self.proven_factor <= 0:
            first = "Nothing is proven at any strength tried"
        elif isinf(self.proven_factor):
            first = f"Proven at every strength for {self.whole}"
        else:
            upto = "up to" if self.covered >= self.proven_factor else "at"
            times = f"{_number_below(self.proven_factor)} times today's strength"
            first = f"Proven {upto} {times} for {self.whole}"
        if self.class_capped:
            second = "the class was not lost at any strength tried"
        elif isinf(self.class_limit):
            second = "the class is never lost"
        else:
            second = f"the class is lost at {_number(self.class_limit)}"
        inside = ""
        if self.within_limits_factor is not None and self.within_limits_factor < self.proven_factor:
            inside = f" (inside actuator limits and bands up to {_number_below(self.within_limits_factor)})"
        return f"{first}{inside}; {second}; {self.exact.about} {_breaks(self.exact, self.units_word)}."

    def __repr__(self) -> str:
        """The sentence."""
        return f"<Margin: {self.sentence()}>"


def _breaks(limit: ExactLimit, units: str) -> str:
    if limit.capped:
        word = "is stable" if limit.between_certified else "showed no failure"
        return f"{word} up to {_number(limit.cap)}"
    if isinf(limit.lower):
        return "never breaks, because no mode depends on these links"
    if isinf(limit.upper):
        return "could not be judged exactly"
    if not limit.nominal_stable and limit.lower <= 0:
        return "is unstable at every strength tried"
    parts = []
    if limit.wavelength is not None:
        parts.append(
            f"all {units} alike" if isinf(limit.wavelength) else f"a wave {_number(limit.wavelength)} {units} long"
        )
    if limit.frequency is not None:
        parts.append("without oscillation" if limit.frequency < 1e-9 else f"at {_number(limit.frequency)} rad/s")
    mode = f" ({', '.join(parts)})" if parts else ""
    if not limit.nominal_stable:
        return f"is unstable today and stable at {_number(limit.lower)}{mode}"
    return f"breaks at {_number(limit.upper)}{mode}"


def _number(value: float) -> str:
    """Four digits, rounded to nearest, for reading; the exact values are in the JSON."""
    return "any number of" if isinf(value) else f"{value:.4g}"


def _plain(value: object) -> object:
    return "inf" if isinstance(value, float) and value == inf else value


def _number_below(value: float) -> str:
    """Four digits, rounded down: what is claimed up to a number must not be read as more."""
    text = _number(value)
    if isinf(value) or value <= 0 or float(text) <= value:
        return text
    step = Decimal(1).scaleb(Decimal(text).adjusted() - 3)
    return f"{float(Decimal(text) - step):.4g}"
