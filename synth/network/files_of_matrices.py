"""Matrices of a kind that stand elsewhere: in a MAT or NPZ file, or in a ``control.StateSpace`` object.

A file holds the variables ``A B D E C N H F Fw Fu`` of the key ``matrices``, in declared units, rows and columns in the
order in which the problem file declares the signals. A StateSpace object names its own signals; the declaration says
which of its inputs are ``inputs``, ``takes`` and ``disturbances``, and which of its outputs are ``offers`` and
``sensors``. Nothing is left over: a variable or a plant input that nobody declared is a problem.

Floats count as the decimals that Python prints for them, as everywhere in a problem. Pickled data is never opened.
"""

from __future__ import annotations

import io
import math
import re
import zipfile
from collections.abc import Iterable, Mapping, Sequence
from fractions import Fraction
from pathlib import Path
from typing import TYPE_CHECKING, Any

from synth.base.errors import nearest
from synth.network.outputs import Draft
from synth.network.sections import KEYS, Section, section, text_of
from synth.network.yaml_map import Entry, Foreign, Listing, Node, Problems, Scalar, Table, child

if TYPE_CHECKING:
    import numpy as np

LARGEST_FILE = 5_000_000
MOST_ENTRIES = 100_000
_Rows = list[list[Fraction]]
_DEFAULT_NAME = re.compile(r"[xuy]\[[0-9]+\]")


def read_matrix_file(node: Node, problems: Problems) -> Table | None:
    """The matrices in the MAT or NPZ file named at ``node`` as the table that ``matrices`` would hold; None with
    problems."""
    name = text_of(node, problems, "the name of a MAT or NPZ file, such as 'zone.mat',")
    if name is None:
        return None
    folder = Path() if problems.source is None else Path(problems.source.file).parent
    path = folder / name
    reader = {".mat": _read_mat, ".npz": _read_npz}.get(path.suffix.lower())
    if reader is None:
        problems.add(
            f"{node.path}: {name[:80]!r} is neither a MAT file nor an NPZ file; accepted are names that end in .mat or "
            ".npz.",
            node,
        )
        return None
    reason = _unreadable(path)
    if reason is not None:
        problems.add(f"{node.path}: {reason}", node)
        return None
    before = problems.count
    arrays = reader(path, node, problems)
    rows = {key: _numbers(key, value, node, problems) for key, value in arrays.items()}
    if problems.count > before:
        return None
    return _table(node, {key: value for key, value in rows.items() if value is not None})


def _unreadable(path: Path) -> str | None:
    """Why the file cannot be opened, with full stop; None if it can."""
    try:
        if not path.exists():
            return f"{path} does not exist; the name is relative to the folder of the problem file."
        if not path.is_file():
            return f"{path} is not a file; name a MAT or NPZ file."
        if path.stat().st_size > LARGEST_FILE:
            return f"{path} is larger than {LARGEST_FILE // 10**6} MB; keep only the matrices of this kind in it."
        with path.open("rb"):
            return None
    except (OSError, ValueError) as error:
        return f"{path!s:.200} cannot be read ({getattr(error, 'strerror', None) or error})."


def _check_names(names: Sequence[str], node: Node, problems: Problems) -> list[str]:
    """The known ones among the names of a file's variables; the others are problems."""
    known = KEYS["matrices"]
    for name in dict.fromkeys(names):
        if name not in known:
            problems.add(
                f"{node.path}: the file holds a variable {name[:60]!r}{nearest(name, known)}, which has no meaning "
                f"here; take it out or rename it. Accepted are {', '.join(known)}.",
                node,
            )
        elif names.count(name) > 1:
            problems.add(f"{node.path}: the file holds the variable {name!r} more than once; keep one.", node)
    if "A" not in names:
        held = ", ".join(dict.fromkeys(names)) or "no variables"
        problems.add(
            f"{node.path}: the file has no variable 'A' (it holds {held[:300]}); save A, B, ... by name.", node
        )
    return [name for name in dict.fromkeys(names) if name in known]


def _read_mat(path: Path, node: Node, problems: Problems) -> dict[str, Any]:
    from synth.network.mat_file import MatError, read_matrices

    try:
        variables = read_matrices(path.read_bytes(), MOST_ENTRIES)
    except (MatError, OSError) as error:
        problems.add(f"{node.path}: {path} cannot be read as a MAT file ({_reason(error)}); save it again.", node)
        return {}
    found: dict[str, Any] = {}
    wanted = _check_names([variable.name for variable in variables], node, problems)
    for variable in variables:
        if variable.name not in wanted:
            continue
        if math.prod(variable.shape) > MOST_ENTRIES:
            problems.add(f"{node.path}: {variable.name} has more than {MOST_ENTRIES} entries; a kind is smaller.", node)
        elif variable.matrix is None:
            problems.add(f"{node.path}: the variable {variable.name} holds no numbers; save a matrix.", node)
        else:
            found[variable.name] = variable.matrix
    return found


def _read_npz(path: Path, node: Node, problems: Problems) -> dict[str, Any]:
    found: dict[str, Any] = {}
    try:
        with zipfile.ZipFile(path) as archive:
            names = [info.filename.removesuffix(".npy") for info in archive.infolist()]
            for name in _check_names(names, node, problems):
                array = _npz_array(archive, name, node, problems)
                if array is not None:
                    found[name] = array
    except Exception as error:  # a damaged archive fails in ways that the library does not name
        problems.add(f"{node.path}: {path} cannot be read as an NPZ file ({_reason(error)}); save it again.", node)
    return found


def _npz_array(archive: zipfile.ZipFile, name: str, node: Node, problems: Problems) -> Any:
    """The array of that name; None with a problem. Nothing larger than a kind needs is unpacked."""
    import numpy as np

    most = 16 * MOST_ENTRIES + 10_000
    stored = f"{name}.npy" if f"{name}.npy" in archive.namelist() else name
    try:
        with archive.open(stored) as stream:
            data = stream.read(most + 1)
        if len(data) > most:
            problems.add(f"{node.path}: {name} has more than {MOST_ENTRIES} entries; a kind is smaller.", node)
            return None
        return np.lib.format.read_array(io.BytesIO(data), allow_pickle=False, max_header_size=10_000)
    except Exception as error:
        if "allow_pickle" in str(error):
            said = "holds Python objects, which are never opened, because opening them can run code; save numbers"
        else:
            said = f"cannot be read ({_reason(error)}); save the file again with numpy.savez"
        problems.add(f"{node.path}: the variable {name} {said}.", node)
        return None


def _reason(error: Exception) -> str:
    text = " ".join(str(error).split()).rstrip(".") or type(error).__name__
    return text if len(text) <= 120 else f"{text[:117]}..."


def _numbers(name: str, value: Any, node: Node, problems: Problems) -> _Rows | None:
    """The rows of a variable as exact numbers; None with a problem if it is no real, finite matrix."""
    import numpy as np

    array = value.toarray() if hasattr(value, "toarray") else np.asarray(value)
    where = f"{node.path}: the variable {name}"
    if array.dtype.kind not in "biufc":
        problems.add(f"{where} holds no numbers; save a matrix of real numbers.", node)
    elif array.ndim != 2:
        shape = " x ".join(map(str, array.shape)) or "a single number"
        problems.add(f"{where} has {array.ndim} dimensions ({shape}); save a matrix with rows and columns.", node)
    elif array.size > MOST_ENTRIES:
        problems.add(f"{where} has more than {MOST_ENTRIES} entries; a kind is smaller.", node)
    elif array.dtype.kind == "c" and np.any(array.imag != 0):
        problems.add(f"{where} is complex{_at(array.imag != 0, array)}; the model has real matrices.", node)
    elif not np.all(np.isfinite(array)):
        problems.add(f"{where} is not finite{_at(~np.isfinite(array), array)}; every entry must be a number.", node)
    else:
        real = array.real if array.dtype.kind == "c" else array
        return [[_exact(entry) for entry in row] for row in real.tolist()]
    return None


def _at(wrong: np.ndarray[Any, Any], array: np.ndarray[Any, Any]) -> str:
    """Where the first wrong entry stands, counted from 1 as in a printed matrix."""
    import numpy as np

    row, column = (int(k) for k in np.argwhere(wrong)[0])
    return f" (row {row + 1}, column {column + 1}: {array[row, column]})"


def _exact(entry: float) -> Fraction:
    return Fraction(repr(entry)) if isinstance(entry, float) else Fraction(int(entry))


def _table(node: Node, matrices: Mapping[str, Sequence[Sequence[Fraction]]]) -> Table:
    """The table that the key ``matrices`` would hold; every node stands at ``node``."""

    def listing(path: str, rows: Sequence[Sequence[Fraction]]) -> Listing:
        def row(i: int, values: Sequence[Fraction]) -> Listing:
            at = f"{path}[{i}]"
            scalars = (Scalar(f"{at}[{j}]", node.place, v, str(v)) for j, v in enumerate(values))
            return Listing(at, node.place, tuple(scalars))

        return Listing(path, node.place, tuple(row(i, values) for i, values in enumerate(rows)))

    entries = {name: Entry(name, node.place, listing(child(node.path, name), rows)) for name, rows in matrices.items()}
    return Table(node.path, node.place, entries)


def plant_object(node: Node | None, problems: Problems) -> Foreign | None:
    """The StateSpace object given at ``plant``; None (with a problem unless it is absent) if it is none."""
    if node is None:
        return None
    if not isinstance(node, Foreign):
        problems.add(
            f"{node.path}: 'plant' takes a control.StateSpace object, which only a program can hand over: "
            "read({'synth': 1, ...}). In a file, write 'equations', 'matrices' or 'file: zone.mat'.",
            node,
        )
        return None
    import control

    system = node.value
    if not isinstance(system, control.StateSpace):
        problems.add(f"{node.path}: a {type(system).__name__} is no state-space model; hand over control.ss().", node)
        return None
    if system.dt:
        problems.add(
            f"{node.path}: the plant is sampled (dt = {system.dt}), but the model is continuous in time; hand over the "
            "continuous plant.",
            node,
        )
        return None
    return node


class _Labels:
    """The signals of a StateSpace object by name, and the complaints about those that do not fit the declaration."""

    def __init__(self, plant: Foreign, problems: Problems) -> None:
        self.plant, self.problems = plant, problems
        system: Any = plant.value
        self.states, self.inputs, self.outputs = (
            list(labels) for labels in (system.state_labels, system.input_labels, system.output_labels)
        )

    def find(self, name: str, labels: Sequence[str], path: str, what: str) -> int | None:
        if name in labels:
            return labels.index(name)
        self.problems.add(
            f"{path}: the plant has no {what} named {name!r}{nearest(name, labels)}; it has "
            f"{', '.join(labels) or 'none'}.{_unnamed(labels, what)}",
            self.plant,
        )
        return None

    def all_used(self, labels: Sequence[str], declared: Iterable[str], path: str, what: str, groups: str) -> None:
        for name in labels:
            if name not in declared:
                self.problems.add(
                    f"{path}: the plant's {what} {name!r} is not declared; put it under {groups}, so that nothing of "
                    f"the plant is left out.{_unnamed([name], what)}",
                    self.plant,
                )


def _unnamed(labels: Sequence[str], what: str) -> str:
    if not any(_DEFAULT_NAME.fullmatch(name) for name in labels):
        return ""
    return f" Name the signals where the plant is built: control.ss(A, B, C, D, {what}s=['...'])."


def plant_matrices(plant: Foreign, part: Section, draft: Draft) -> Section | None:
    """The matrices of a kind from a StateSpace object, by the names that ``draft`` declares.

    Offers and sensors that ``draft`` holds without an expression are outputs of the plant, or states. Records problems
    for names that do not fit, and for a sensor that reads an actuator or a disturbance directly.
    """
    system, path, problems = plant.value, part.table.path, draft.problems
    before = problems.count
    names = _Labels(plant, problems)
    by_place = bool(names.states) and all(_DEFAULT_NAME.fullmatch(name) for name in names.states)
    if by_place and len(names.states) == len(draft.states):
        names.states = list(draft.states)
    states = [names.find(n, names.states, f"{path}.states", "state") for n in draft.states]
    names.all_used(names.states, draft.states, f"{path}.states", "state", "'states'")
    groups = {"B": draft.inputs, "D": draft.takes, "E": draft.disturbances}
    words = {"B": "inputs", "D": "takes", "E": "disturbances"}
    columns = {
        key: [names.find(n, names.inputs, f"{path}.{words[key]}", "input") for n in table]
        for key, table in groups.items()
    }
    declared = [name for table in groups.values() for name in table]
    names.all_used(names.inputs, declared, f"{path}.inputs", "input", "'inputs', 'takes' or 'disturbances'")
    parts = {key: _numbers(key, getattr(system, key), plant, problems) for key in "ABCD"}
    if problems.count > before or any(value is None for value in parts.values()):
        return None
    A, B, C, D = (parts[key] or [] for key in "ABCD")
    matrices: dict[str, _Rows] = {"A": [[A[i][j] for j in states] for i in states]}  # type: ignore[index]
    for key, chosen in columns.items():
        matrices[key] = [[B[i][j] for j in chosen] for i in states]  # type: ignore[index]
    matrices |= _output_rows(names, draft, (C, D), columns, path)  # type: ignore[arg-type]
    if problems.count > before:
        return None
    return section(_table(plant, matrices), "matrices", problems, "{A: [[0, 1], [0, -1]]}")


def _output_rows(
    names: _Labels,
    draft: Draft,
    rows_of_plant: tuple[_Rows, _Rows],
    columns: Mapping[str, Sequence[int]],
    path: str,
) -> dict[str, _Rows]:
    """H, F, Fw (and Fu) or C and N for the offers and sensors that name an output of the plant or a state."""
    C, D = rows_of_plant
    matrices: dict[str, _Rows] = {}
    states = [names.states.index(name) for name in draft.states]
    for group, lead, keys in (("offers", "H", ("Fu", "F", "Fw")), ("sensors", "C", ("", "N", ""))):
        ahead: _Rows = []
        through: _Rows = []
        wanted = [n for n, o in getattr(draft, group).items() if o.value is None]
        for name in wanted:
            if name not in names.outputs and name in names.states:
                at = names.states.index(name)
                ahead.append([Fraction(int(at == j)) for j in range(len(names.states))])
                through.append([Fraction(0)] * len(names.inputs))
            elif (row := names.find(name, names.outputs, f"{path}.{group}.{name}", "output")) is not None:
                ahead.append(list(C[row]))
                through.append(list(D[row]))
        if not wanted or len(ahead) != len(wanted):
            continue
        matrices[lead] = [[row[j] for j in states] for row in ahead]
        for key, chosen in zip(keys, columns.values(), strict=True):
            block = [[row[j] for j in chosen] for row in through]
            if key in KEYS["matrices"]:
                matrices[key] = block
            else:
                _no_feed_through(wanted, block, f"{path}.{group}", names)
    return matrices


def _no_feed_through(outputs: Sequence[str], block: _Rows, path: str, names: _Labels) -> None:
    for name, row in zip(outputs, block, strict=True):
        if any(row):
            names.problems.add(
                f"{path}.{name}: the plant passes an actuator or a disturbance straight through to this output (its D "
                "is not zero there), so the command would feed back on itself without delay; add the lag of the "
                "actuator or of the sensor as a state.",
                names.plant,
            )
