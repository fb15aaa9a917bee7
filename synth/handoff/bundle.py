"""Write the bundle: everything the firmware team needs, in one folder, whole or not at all."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from importlib import resources
from pathlib import Path
from typing import TYPE_CHECKING, TypeAlias

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError, SynthError
from synth.base.exact import ExactMatrix
from synth.base.files import MARK, whole_folder
from synth.base.provenance import sha256
from synth.handoff.code import controllers, rounding_document
from synth.handoff.metadata import csvw, data_package
from synth.handoff.operating import operating_values
from synth.handoff.readme import Story, readme_text
from synth.handoff.scaling import Facts, exact_peaks, scaling
from synth.handoff.statement import MANIFEST, PROVENANCE, manifest, provenance
from synth.handoff.table import SIGN_CONVENTION, GainRow, csv_text, exact_text, gain_rows, grouped_rows
from synth.network.gains import Gains
from synth.network.model import Kind, Network

if TYPE_CHECKING:
    from synth.local import Design
    from synth.proof import Certificate
    from synth.proof.firmware_limits import TimingSheet

    DesignOrGains: TypeAlias = Design | Gains


# The first checks proofs about the continuous loop; all of them together those about the code as flashed.
CHECKERS = ("check.py", "check_flashed.py", "check_sampled.py", "check_firmware.py")
CERTIFICATE, CONTINUOUS = "certificate.json", "certificate_continuous.json"


class UnprovenTable(SynthError):
    """The certificate does not prove these gains, so no bundle is written (exit code 1)."""

    exit_code = 1


@dataclass(frozen=True)
class Bundle:
    """A hand-off folder as written.

    ``proven`` is about the code as flashed (sampled, rounded): True for a certificate of the firmware route, False for
    the others, ``reason`` says why; ``proven_continuous`` is a claim about the continuous loop, which those make (a
    bundle of the firmware route may carry one besides). ``timing`` is the timing sheet, plain data, None without one.
    ``scaling`` holds, by ``kind.actuator.signal``, the gain with its units and the guaranteed peaks in them. ``files``
    are names inside ``path``, sorted.
    """

    path: Path
    files: tuple[str, ...]
    proven: bool
    proven_continuous: bool
    reason: str
    scaling: Mapping[str, Facts]
    rows: tuple[GainRow, ...]
    certificate_sha256: str
    timing: Mapping[str, object] | None = None

    def as_json(self) -> dict[str, object]:
        """Plain data with the keys bundle, files, proven, scaling and some more."""
        return {
            "bundle": str(self.path),
            "files": list(self.files),
            "proven": self.proven,
            "proven_continuous": self.proven_continuous,
            "reason": self.reason,
            "scaling": dict(self.scaling),
            "sign_convention": SIGN_CONVENTION,
            "certificate_sha256": self.certificate_sha256,
            "timing": self.timing,
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """A few lines for a terminal."""
        lines = [
            f"Bundle {self.path}: {len(self.files)} files, gains: {len(self.rows)}, sign convention {SIGN_CONVENTION}.",
            f"Proven for the continuous loop: {'yes' if self.proven_continuous else 'no'}. "
            f"Proven as flashed: {'yes' if self.proven else 'no'}.",
            self.reason,
            "Check on the other side: sha256sum -c SHA256SUMS; python3 "
            f"{'check_firmware.py' if self.proven else 'check.py'} certificate.json",
        ]
        return "\n".join(lines)


def hand_off(
    network: Network,
    design_or_gains: DesignOrGains,
    certificate: Certificate,
    out: str | Path,
    continuous: Certificate | None = None,
    timing: TimingSheet | None = None,
    unproven: str = "",
) -> Bundle:
    """Write the bundle for ``design_or_gains`` (u = K y, declared units) into the folder ``out``.

    The folder takes the place of whatever folder stood there; after any error the old one stands untouched.
    Equal inputs give equal bytes: no date or path is written inside. Beside a ``certificate`` of the firmware route may
    go one about the ``continuous`` loop of the same gains and the ``timing`` sheet; ``unproven`` says why the code as
    flashed is not proven, where it was tried.

    Raises UnprovenTable if a certificate is not proven (an unproven table must not reach firmware by this way),
    InputError if it is about another network or other gains, or the gains do not fit the network, or
    ``out`` holds somebody's other work; StorageFailure if the disk refuses.
    """
    gains = design_or_gains if isinstance(design_or_gains, Gains) else design_or_gains.gains
    _fits(network, gains)
    given = {CERTIFICATE: certificate} | ({} if continuous is None else {CONTINUOUS: continuous})
    for one in given.values():
        if not one.proven:
            why = "; ".join(one.reasons) or "its claim was not accepted"
            raise UnprovenTable(
                f"no bundle was written to {out}: the certificate does not prove these gains ({why}). "
                "Lower the link strengths or let design search further, prove again, then hand off."
            )
        _about_these(network, gains, one)
    as_flashed = _as_flashed(certificate)
    if not as_flashed and (continuous is not None or timing is not None):
        raise InputError("a second certificate and a timing sheet go beside a certificate of the firmware route only.")
    story = Story(
        certificate.claim, certificate.covers, certificate.excludes, as_flashed, continuous is not None,
        unproven, None if timing is None else timing.as_text(),
    )  # fmt: skip
    with whole_folder(out, "handoff") as work:
        saved = {}
        for name, one in given.items():
            one.save(work / name)
            saved[name] = (work / name).read_bytes()
            _still_verified(work / name, network)
        certificate_sha256 = sha256(saved[CERTIFICATE])
        rows = gain_rows(network, gains, certificate_sha256)
        facts = scaling(network, rows, exact_peaks(certificate.document))
        files = _contents(network, rows, facts, story)
        if timing is not None:
            files["timing.csv"] = timing.csv_text().encode()
        files |= saved
        files[PROVENANCE] = _json(
            provenance(files, network.hash, certificate_sha256, story.proven_continuous, as_flashed)
        )
        files[MANIFEST] = manifest(files).encode()
        for name, data in files.items():
            (work / name).write_bytes(data)
        left = {path.name for path in work.iterdir()} - set(files) - {MARK}
        if left:
            raise SynthError(f"saving the certificate left unexpected files in the bundle: {sorted(left)}")
    sheet = None if timing is None else timing.as_json()
    return Bundle(
        Path(out), tuple(sorted(files)), as_flashed, story.proven_continuous, story.reason, facts, rows,
        certificate_sha256, sheet,
    )  # fmt: skip


def _as_flashed(certificate: Certificate) -> bool:
    """Whether the certificate is about the sampled and rounded code and not about the continuous loop."""
    return bool(certificate.document.get("route") == "firmware")


def checker_text(name: str = "check.py") -> str:
    """Source of a file of the stand-alone checker: check.py is one file of its parts, the others are as installed."""
    if name == "check.py":
        from synth.proof.joined import checker_text as joined

        return joined()
    return resources.files("synth.proof").joinpath(name).read_text(encoding="utf-8")


def _fits(network: Network, gains: Gains) -> None:
    """Names and sizes of the gains must be those of the network's kinds; InputError with every misfit."""
    wrong = []
    for kind in network.kinds:
        if kind.name not in gains:
            wrong.append(f"kind {kind.name} has no gains")
            continue
        found = gains[kind.name]
        actuators, signals = tuple(a.name for a in kind.inputs), tuple(s.name for s in kind.sensors)
        if found.actuators != actuators or found.signals != signals or found.K.shape != (len(actuators), len(signals)):
            wrong.append(
                f"the gains of {kind.name} are for actuators {list(found.actuators)} and signals "
                f"{list(found.signals)}; the network has {list(actuators)} and {list(signals)}"
            )
    wrong.extend(
        f"gains are given for {name}, which is no kind of this network"
        for name in gains
        if name not in {kind.name for kind in network.kinds}
    )
    if wrong:
        raise InputError("; ".join(wrong) + ". Use gains designed for this network.")


def _about_these(network: Network, gains: Gains, certificate: Certificate) -> None:
    """The certificate must be about exactly this network and these gains, digit for digit; InputError otherwise."""
    if certificate.document["network_hash"] != network.hash:
        raise InputError(
            "the certificate is about another network (its hash differs: a matrix, a link or a bound has changed). "
            "Prove again with this network, then hand off."
        )
    for proven in certificate.document["gains"]:
        found = gains[proven["kind"]]
        names = (list(found.actuators), list(found.signals))
        if (list(proven["actuators"]), list(proven["signals"])) != names or ExactMatrix.of(proven["K"]) != found.K:
            raise InputError(
                f"the certificate proves other gains of {found.kind} than the ones to be handed off. "
                "Prove these gains, then hand off."
            )


def _still_verified(path: Path, network: Network) -> None:
    """Run the checker on the very file that is shipped; UnprovenTable if it does not accept it."""
    from synth.proof import verify

    result = verify(path, network)
    if not result.verified:
        raise UnprovenTable("no bundle was written: the checker refuses the certificate: " + "; ".join(result.reasons))


def _contents(
    network: Network, rows: tuple[GainRow, ...], facts: Mapping[str, Facts], story: Story
) -> dict[str, bytes]:
    """Every file made here but certificates, timing sheet, the provenance statement and the manifest."""
    table = csv_text(rows).encode()
    return {
        "gains.csv": table,
        "gains.csv-metadata.json": _json(csvw(network.title, rows)),
        "datapackage.json": _json(data_package(network.title, rows, table, sha256(table))),
        "gains.json": _json(_table_document(network, rows, facts, story)),
        **{name: checker_text(name).encode() for name in (CHECKERS if story.as_flashed else CHECKERS[:1])},
        "README.txt": readme_text(network, rows, facts, story).encode(),
    }


def _table_document(
    network: Network, rows: tuple[GainRow, ...], facts: Mapping[str, Facts], story: Story
) -> dict[str, object]:
    """The JSON gain table with what a table alone cannot carry; rows of a shared gain set stand once, by its name."""
    goal = network.goal
    return {
        "table": "localgain gains",
        "title": network.title,
        "network_sha256": network.hash,
        "sign_convention": SIGN_CONVENTION,
        "meaning": "actuator = sum over its rows of gain * signal; deviations from the operating point; time in s",
        "rows": [row.as_dict() for row in grouped_rows(network, rows)],
        "gain_sets": {group: list(names) for group, names in network.gain_groups().items()},
        "signals": {kind.name: _definitions(kind) for kind in network.kinds},
        "controllers": controllers(network),
        "at_rest": {
            kind: {
                group: {name: {"value": value, "unit": unit} for name, (value, unit) in named.items()}
                for group, named in values.items()
            }
            for kind, values in operating_values(network).items()
        },
        "sampling": None
        if goal.period is None
        else {
            "period_s": exact_text(goal.period),
            "computation_delay_s": exact_text(goal.computation_delay),
            "rounding": rounding_document(goal.rounding),
            "part_of_the_proof": story.as_flashed,
        },
        "scaling": dict(facts),
        "proven_continuous": story.proven_continuous,
        "proven_as_flashed": story.as_flashed,
        "reason": story.reason,
        "cautions": list(CAUTIONS),
    }


def _definitions(kind: Kind) -> dict[str, object]:
    """Every sensor as the sum that defines it (y = C x + N v), and every actuator with its limit, exact texts."""
    sensors = {}
    for i, sensor in enumerate(kind.sensors):
        terms = {state.name: str(kind.C[i, j]) for j, state in enumerate(kind.states) if kind.C[i, j]}
        heard = {take.name: str(kind.N[i, j]) for j, take in enumerate(kind.takes) if kind.N[i, j]}
        sensors[sensor.name] = {"unit": sensor.unit, "states": terms, "taken": heard}
    actuators = {a.name: {"unit": a.unit, "limit": None if a.limit is None else str(a.limit)} for a in kind.inputs}
    return {"sensors": sensors, "actuators": actuators, "states": {s.name: {"unit": s.unit} for s in kind.states}}


def _json(value: object) -> bytes:
    """Readable JSON, keys in the order given, no NaN, one final newline."""
    return (json.dumps(value, indent=2, ensure_ascii=False, allow_nan=False) + "\n").encode()
