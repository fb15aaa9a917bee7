"""The frozen result of a simulation, for a person, for a program, for labelled arrays and for a file."""

from __future__ import annotations

import io
import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from synth.base.errors import InputError, nearest
from synth.base.files import write_text
from synth.base.provenance import Provenance
from synth.simulate.model import Array

CSV_ROWS = 200_000
GROUPS = ("states", "offers", "actuators", "disturbances")


@dataclass(frozen=True)
class Run:
    """One simulated run, thinned; ``counted`` says whether it satisfies the hypotheses of the claim; ``reason`` why
    not, or why
    only its first part was compared.

    ``time`` [sample] in s. ``states``, ``offers``, ``actuators`` (commands before any limit), ``disturbances``: kind
    name ->
    array [sample, cell, signal] in declared units. Ratios and ``violations`` are over every sample, not only the stored
    ones;
    ``worst_signal`` is the largest value of a signal over its guaranteed peak (0 where nothing is claimed).
    """

    name: str
    words: str
    counted: bool
    reason: str
    X0: float
    violations: int
    G_ratio: float
    envelope_ratio: float
    worst_signal: float
    saturated: bool
    stopped: float | None
    time: Array
    states: Mapping[str, Array]
    offers: Mapping[str, Array]
    actuators: Mapping[str, Array]
    disturbances: Mapping[str, Array]

    def as_json(self) -> dict[str, object]:
        """Plain data without the samples."""
        return {
            "name": self.name, "what": self.words, "counted": self.counted, "reason": self.reason, "X0": self.X0,
            "violations": self.violations, "G_ratio": self.G_ratio, "envelope_ratio": self.envelope_ratio,
            "worst_signal": self.worst_signal, "saturated": self.saturated, "stopped_at": self.stopped,
        }  # fmt: skip


@dataclass(frozen=True)
class Worst:
    """Largest |x|/(G sup|w|) over counted runs from rest, and largest |x|/(C e^{-alpha t} X0 + G sup|w|) over those
    from X0.

    None: no such run, or nothing is claimed. Maximum norms; 1 is the bound.
    """

    G_ratio: float | None
    envelope_ratio: float | None

    def as_json(self) -> dict[str, float | None]:
        """Plain data."""
        return {"G_ratio": self.G_ratio, "envelope_ratio": self.envelope_ratio}


@dataclass(frozen=True)
class Trajectory:
    """Every run of one simulation. ``units`` simulated; ``seconds`` of each run; ``violations`` = sample-units above a
    bound.

    ``checked`` says whether there was a proven certificate to check against; without one ``violations`` is 0 and means
    nothing.
    ``signals``: kind -> group -> names with units. ``measures``: plain data, see as_json().
    """

    units: int
    seconds: float
    checked: bool
    violations: int
    worst: Worst
    measures: Mapping[str, Any]
    runs: tuple[Run, ...]
    signals: Mapping[str, Mapping[str, tuple[tuple[str, str], ...]]]
    notes: tuple[str, ...]
    provenance: Provenance

    def run(self, name: str) -> Run:
        """The run of that name; KeyError (with the nearest name) if there is none."""
        for run in self.runs:
            if run.name == name:
                return run
        raise KeyError(f"no run named {name!r}{nearest(name, [r.name for r in self.runs])}")

    def as_json(self) -> dict[str, Any]:
        """The contract keys units, duration (s), violations, worst, measures; and runs without samples, notes."""
        return {
            "units": self.units,
            "duration": self.seconds,
            "checked": self.checked,
            "violations": self.violations,
            "worst": self.worst.as_json(),
            "measures": dict(self.measures),
            "runs": [run.as_json() for run in self.runs],
            "notes": list(self.notes),
            "provenance": self.provenance.as_dict(),
        }

    def as_text(self) -> str:
        """The result in a few lines."""
        lines = [
            f"Simulated {self.units} units, {len(self.runs)} runs of {self.seconds:g} s and more "
            "(the proof does not rest on this)."
        ]
        if not self.checked:
            lines.append("No proven certificate was given: nothing was checked against a bound.")
        elif self.violations:
            broken = [run for run in self.runs if run.counted and run.violations]
            lines.append(
                f"{self.violations} samples ABOVE a proven bound. "
                "What runs is not what was proven, or the model differs."
            )
            lines += [
                f"  {run.name}: {run.violations} samples above, worst {_worst(run):.4g} times its bound"
                for run in broken[:8]
            ]
            if len(broken) > 8:
                lines.append(f"  and {len(broken) - 8} more runs")
        else:
            lines.append("No sample above a proven bound.")
        if self.worst.G_ratio is not None:
            lines.append(f"Largest state reached from rest: {_down(self.worst.G_ratio)} of its bound G sup|w|.")
        if self.worst.envelope_ratio is not None:
            lines.append(
                f"Largest state reached from an initial offset: {_down(self.worst.envelope_ratio)} of its bound."
            )
        for row in self.measures.get("signals", ()):
            lines.append(_signal_line(row))
        for row in self.measures.get("amplification", ()):
            if row["successive"] is not None:
                name, ratio = f"{row['kind']}.{row['offer']}", row["successive"]
                lines.append(f"Along the string, {name}: peaks of successive units at most {ratio:.4g} : 1.")
        grown = [run.name for run in self.runs if run.stopped is not None]
        if grown:
            lines.append(f"DIVERGED: {len(grown)} runs were stopped because a signal kept growing ({grown[0]}, ...).")
        settling = self.measures.get("settling")
        if settling is not None:
            lines.append(f"Settled within 2 % at {settling:.4g} s in the pulse run.")
        for reason in dict.fromkeys(run.reason for run in self.runs if not run.counted):
            names = [run.name for run in self.runs if run.reason == reason]
            lines.append(f"Not counted ({len(names)} runs: {names[0]}, ...): {reason}.")
        for reason in dict.fromkeys(run.reason for run in self.runs if run.counted and run.reason):
            names = [run.name for run in self.runs if run.counted and run.reason == reason]
            lines.append(f"Counted in part ({len(names)} runs: {names[0]}, ...): {reason}.")
        return "\n".join([*lines, *(f"- {note}" for note in self.notes)])

    def to_xarray(self) -> Any:
        """An xarray Dataset: one variable ``kind.group.signal`` per signal with dimensions (run, sample, cell), units
        as attributes.

        ``time`` (run, sample) in s; runs with fewer samples are padded with NaN. InputError if xarray is not installed.
        """
        try:
            import xarray
        except ImportError as error:
            raise InputError(
                "labelled arrays need the package xarray; install localgain[labels], or use save('file.npz')."
            ) from error
        import numpy as np

        most = max((len(run.time) for run in self.runs), default=0)

        def padded(values: Array) -> Array:
            filled = np.full((most, *values.shape[1:]), np.nan)
            filled[: len(values)] = values
            return filled

        variables: dict[str, Any] = {}
        for kind, groups in self.signals.items():
            for group, names in groups.items():
                for i, (name, unit) in enumerate(names):
                    values = np.stack([padded(getattr(run, group)[kind][..., i]) for run in self.runs])
                    variables[f"{kind}.{group}.{name}"] = (("run", "sample", "cell"), values, {"units": unit})
        time = (("run", "sample"), np.stack([padded(run.time) for run in self.runs]), {"units": "s"})
        return xarray.Dataset(variables, coords={"run": [run.name for run in self.runs], "time": time})

    def save(self, path: str | Path) -> Path:
        """Write the stored samples: ``.npz`` (arrays ``run/kind/group`` [sample, cell, signal], ``run/time``) or
        ``.csv`` (long form).

        The CSV has run, time_s, kind, cell, group, signal, in, value; samples are left out evenly to stay near CSV_ROWS
        rows. InputError for another suffix,
        StorageFailure if the disk refuses; the file appears whole or not at all.
        """
        target = Path(path)
        if target.suffix == ".npz":
            return _write_bytes(target, self._npz())
        if target.suffix == ".csv":
            return write_text(target, self._csv())
        found = target.suffix or "a file without suffix"
        raise InputError(f"{target.name}: a trajectory is saved as .npz or .csv, not as {found}.")

    def _npz(self) -> bytes:
        import numpy as np

        arrays: dict[str, Any] = {"names": np.array([run.name for run in self.runs])}
        for i, run in enumerate(self.runs):
            arrays[f"{i}/time"] = run.time
            for group in GROUPS:
                for kind, values in getattr(run, group).items():
                    arrays[f"{i}/{kind}/{group}"] = values
        for kind, groups in self.signals.items():
            for group, names in groups.items():
                arrays[f"signals/{kind}/{group}"] = np.array([f"{name} [{unit}]" for name, unit in names], dtype=str)
        buffer = io.BytesIO()
        np.savez_compressed(buffer, **arrays)
        return buffer.getvalue()

    def _csv(self) -> str:
        import csv

        text = io.StringIO()
        writer = csv.writer(text, lineterminator="\n")
        writer.writerow(["run", "time_s", "kind", "cell", "group", "signal", "in", "value"])
        width = sum(len(names) for groups in self.signals.values() for names in groups.values()) * max(1, self.units)
        most = max(2, min(100, CSV_ROWS // max(1, width * len(self.runs))))
        for run in self.runs:
            every = max(1, -(-len(run.time) // most))
            for kind, groups in self.signals.items():
                for group, names in groups.items():
                    values = getattr(run, group)[kind]
                    for s in range(0, len(run.time), every):
                        for cell in range(values.shape[1]):
                            for i, (name, unit) in enumerate(names):
                                row = [
                                    run.name,
                                    f"{run.time[s]:.9g}",
                                    kind,
                                    cell,
                                    group,
                                    name,
                                    unit,
                                    f"{values[s, cell, i]:.9g}",
                                ]
                                writer.writerow(row)
        return text.getvalue()


def _worst(run: Run) -> float:
    return max(run.G_ratio, run.envelope_ratio, run.worst_signal)


def _signal_line(row: Mapping[str, Any]) -> str:
    bound = row["guaranteed"]
    start = f"{row['kind']}.{row['signal']} ({row['role']}): peak {row['peak']:.4g} {row['in']}"
    return f"{start} from rest." if bound == "inf" else f"{start} from rest, guaranteed {bound:.4g} {row['in']}."


def _write_bytes(target: Path, data: bytes) -> Path:
    """Write ``data`` whole or not at all; StorageFailure if the disk refuses."""
    import tempfile

    from synth.base.errors import StorageFailure

    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        with tempfile.NamedTemporaryFile(dir=target.parent, prefix=f".{target.name}.", delete=False) as stream:
            stream.write(data)
        Path(stream.name).chmod(0o644)
        Path(stream.name).replace(target)
    except OSError as error:
        raise StorageFailure(f"cannot write {target}: {error.strerror or error}; nothing was changed there.") from error
    return target


def _down(ratio: float) -> str:
    """Four decimals, not rounded up: a bound that is nearly reached must not read as reached."""
    return f"{math.floor(ratio * 1e4) / 1e4:.4f}" if math.isfinite(ratio) else "more than any number"
