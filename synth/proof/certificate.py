"""The certificate as a frozen value, its file, and the re-check of a file.

The file is one JSON object with exactly these fields (numbers are exact texts, decimal or p/q, in the declared units):

    schema, version   "localgain certificate", 2
    network_hash      SHA-256 of the canonical form of ``model``
    model             Network.model_document(): kinds with A B D E C N H F Fw, limits, bands, declared peaks; links; and
                      rules, members, or edges and cell, by description
    gains             per kind {kind, actuators, signals, K}: u = K y
    route, target     "peak", "storage" or "firmware"; the radius that must not be exceeded
    evidence          per closed unit {kind, own, P, a, tau, tau_w}: what is folded in, a norm, its decay (1/s),
                      multipliers (storage route only);
                      firmware route: {kind, P, gamma}, a norm that the transition over one period contracts
    radius            {lower, upper} of the gain operator
    point             per row {of, s, low}, and fast where needed: of is kind.offer, unit.offer, or (storage) kind or
                      unit; G s <= upper s, G low >= lower low, fast decays at the claimed rate
    windows           edges only: {first, last, least}, cells of the windows and the shortest line covered
    constants         {C, alpha, G, norm}: |x(t)| <= C e^(-alpha t) X0 + G sup|w|
    peaks             per offer, state, actuator {kind, role, signal, value, in, limit}, under the declared disturbances
    validity          {X0, w, factor, meaning}; "inf" where no limit is near
    claim, covers, excludes, cautions    sentences; the first three are made from the numbers by check.sentences
    firmware          firmware route only: {period, delay, kinds}; per kind {kind, sensors, commands, products, form,
                      stored}, distances of neighbouring numbers; peaks then have "rounding" and constants have R
    provenance, hash  {network_hash, settings, versions} (recorded, not proven); SHA-256 of everything else

Canonical form: keys sorted, no spaces, UTF-8. check.py derives every number of a claim again from model, gains and
evidence, and refuses the file otherwise.
"""

from __future__ import annotations

import html
import json
import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from synth.base.errors import InputError
from synth.base.files import write_text
from synth.network.model import Network
from synth.proof import check, check_firmware


@dataclass(frozen=True)
class RadiusClaim:
    """Proven bounds of the gain operator's spectral radius (no unit); upper is infinite where nothing is known."""

    lower: float
    upper: float


@dataclass(frozen=True)
class Constants:
    """|x(t)| <= C e^(-alpha t) X0 + G sup|w|: ``alpha`` in 1/s, ``norm`` says how sizes are measured."""

    C: float
    alpha: float
    G: float
    norm: str


@dataclass(frozen=True)
class Peak:
    """Guaranteed peak of a signal in ``unit``; ``role`` offer, state or actuator; ``limit`` (or band) None for none."""

    kind: str
    role: str
    signal: str
    value: float
    unit: str
    limit: float | None


@dataclass(frozen=True)
class Validity:
    """Where claims that rest on limits hold: initial size X0, disturbance w from rest, factor of declared peaks.

    Infinite where nothing limits them.
    """

    X0: float
    w: float
    factor: float
    meaning: str


@dataclass(frozen=True)
class Certificate:
    """The result of a proof attempt. Law: ``proven`` is True exactly if the checker accepted ``document``.

    ``radius`` is reported also where nothing is proven; ``constants`` and ``validity`` are None then. Floats here are
    the nearest doubles of the exact texts in ``document``, which is what is hashed and checked.
    """

    proven: bool
    route: str
    claim: str
    radius: RadiusClaim
    target: float
    constants: Constants | None = None
    peaks: tuple[Peak, ...] = ()
    validity: Validity | None = None
    covers: tuple[str, ...] = ()
    excludes: tuple[str, ...] = ()
    reasons: tuple[str, ...] = ()
    document: dict[str, Any] = field(default_factory=dict, repr=False)
    hash: str = ""

    def save(self, path: str | Path) -> Path:
        """Write the document as JSON in one step; InputError if nothing was proven, StorageFailure from the disk."""
        if not self.proven:
            raise InputError("nothing was proven, so there is no certificate to save; see its reasons.")
        return write_text(path, json.dumps(self.document, indent=1, ensure_ascii=False, allow_nan=False) + "\n")

    def as_json(self) -> dict[str, Any]:
        """Plain data for `synth prove --json`; infinity as "inf", what is unknown as null."""
        constants, valid = self.constants, self.validity
        return {
            "proven": self.proven,
            "route": self.route,
            "claim": self.claim,
            "target": self.target,
            "radius": {"lower": _plain(self.radius.lower), "upper": _plain(self.radius.upper)},
            "constants": {
                "C": _plain(constants.C if constants else None),
                "alpha": _plain(constants.alpha if constants else None),
                "G": _plain(constants.G if constants else None),
                **(
                    {"R": _plain(number(self.document["constants"]["R"]))}
                    if self.route == "firmware" and constants
                    else {}
                ),
                "norm": constants.norm if constants else check.NORM,
            },
            "peaks": self._peaks(),
            "validity": {
                "X0": _plain(valid.X0 if valid else None),
                "w": _plain(valid.w if valid else None),
                "factor": _plain(valid.factor if valid else None),
                "meaning": check.MEANING,
            },
            "covers": list(self.covers),
            "excludes": list(self.excludes),
            "reasons": list(self.reasons),
            "cautions": list(check.CAUTIONS),
            "provenance": self.document.get("provenance", {}),
            "hash": self.hash,
        }

    def _peaks(self) -> dict[str, Any]:
        """Peaks by "kind.signal"; a name that two roles share gets its role behind it the second time."""
        found: dict[str, Any] = {}
        for peak in self.peaks:
            key = f"{peak.kind}.{peak.signal}"
            found[f"{key} ({peak.role})" if key in found else key] = {
                "value": _plain(peak.value),
                "in": peak.unit,
                "role": peak.role,
                "limit": _plain(peak.limit),
            }
        return found

    def _repr_html_(self) -> str:
        """The text, for notebooks."""
        return f"<pre>{html.escape(self.as_text())}</pre>"

    def as_text(self) -> str:
        """What a person reads: verdict, claim, numbers, what is covered and what is not."""
        lines = [f"{'PROVEN' if self.proven else 'NOT PROVEN'} ({self.route} route)"]
        lines += [f"  because: {reason}" for reason in self.reasons]
        lines.append(f"  radius {self.radius.lower:.6g} .. {self.radius.upper:.6g}, target {self.target:.6g}")
        if self.claim:
            lines += ["", self.claim, ""]
        for peak in self.peaks:
            limit = "" if peak.limit is None else f" (limit {peak.limit:.6g})"
            lines.append(f"  peak of {peak.role} {peak.kind}.{peak.signal}: {peak.value:.6g} {peak.unit}{limit}")
        lines += [f"  covered: {line}" for line in self.covers]
        lines += [f"  not covered: {line}" for line in self.excludes]
        return "\n".join([*lines, "", *(f"- {line}" for line in check.CAUTIONS)])


def _plain(value: float | None) -> float | str | None:
    return "inf" if value is not None and math.isinf(value) else value


def number(value: Any) -> float:
    """The nearest double of an exact text of a document; "inf" is infinity."""
    return float("inf") if value == "inf" else float(check.number(value, "number"))


def from_document(document: dict[str, Any], reasons: list[str]) -> Certificate:
    """The certificate of a complete document, proven exactly if the checker gave no reasons against it."""
    radius, constants, valid = document["radius"], document["constants"], document["validity"]
    return Certificate(
        proven=not reasons,
        route=document["route"],
        claim="" if reasons else document["claim"],
        radius=RadiusClaim(number(radius["lower"]), number(radius["upper"])),
        target=number(document["target"]),
        constants=Constants(
            number(constants["C"]), number(constants["alpha"]), number(constants["G"]), constants["norm"]
        ),
        peaks=tuple(
            Peak(
                p["kind"],
                p["role"],
                p["signal"],
                number(p["value"]),
                p["in"],
                None if p["limit"] is None else number(p["limit"]),
            )
            for p in document["peaks"]
        ),
        validity=Validity(number(valid["X0"]), number(valid["w"]), number(valid["factor"]), valid["meaning"]),
        covers=tuple(document["covers"]),
        excludes=tuple(document["excludes"]),
        reasons=tuple(reasons),
        document=document,
        hash=document["hash"],
    )


@dataclass(frozen=True)
class Verification:
    """Verdict of the checker on a file; ``reasons`` is empty exactly if ``verified``."""

    verified: bool
    reasons: tuple[str, ...]

    def as_json(self) -> dict[str, Any]:
        """Plain data for `synth verify --json`."""
        return {"verified": self.verified, "reasons": list(self.reasons)}

    def as_text(self) -> str:
        """One line, or the reasons."""
        if self.verified:
            return "verified: every number was derived again in exact arithmetic"
        return "\n".join(["NOT VERIFIED", *(f"  because: {reason}" for reason in self.reasons)])


def verify(path: str | Path, network: Network | None = None) -> Verification:
    """Re-check a certificate file; with ``network``, also that it is about exactly this network.

    Raises InputError if the file cannot be read or is not JSON; everything else wrong with it is a reason.
    """
    try:
        content = Path(path).read_text(encoding="utf-8")
        document = json.loads(content)
    except OSError as error:
        raise InputError(f"cannot read {path}: {error.strerror or error}; name a certificate file.") from error
    except (ValueError, RecursionError) as error:
        raise InputError(f"{path} is not JSON ({error}); name a file written by `synth prove`.") from error
    sampled = isinstance(document, dict) and document.get("route") == "firmware"
    reasons = check_firmware.check_text(content) if sampled else check.check_text(content)
    if network is not None and isinstance(document, dict):
        model = document.get("model")
        if not isinstance(model, dict) or check.canonical(model) != check.canonical(network.model_document()):
            reasons.append("the certificate is about another network than the one given")
    return Verification(not reasons, tuple(reasons))
