"""The design of a network with many gain sets: local problems against promised sizes, sweep after sweep.

A sweep takes the Perron vector s of the present gains as the promise and lets every gain set lower its own rows of
M s in parts of s. Rows that all fall below rho s prove a smaller radius (10), so without limits on peaks the radius
never rises (the design operator, theory section 5). Limits are judged at the sizes that the present gains reach under
the declared disturbances. Equal local problems are solved once, all others side by side, and each is kept in a journal
as soon as its chunk is finished.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from synth.base.progress import Listener, silent
from synth.gain.guide import Guide
from synth.local.cell import CellData
from synth.local.core import core_of
from synth.local.finish import TIGHT, Chart, Found
from synth.local.journal import Journal
from synth.local.merit import Merit, loop_of, measure, settled_arrivals, unit_guide
from synth.local.plant import Field
from synth.local.starts import project
from synth.local.unit_search import LocalWork, solve_chunk
from synth.local.workers import in_order

Array = NDArray[np.float64]

MOST_TOGETHER = 30  # search vectors up to this length are searched as a whole
_SWEEPS = 12
_GAIN = 1e-3  # a sweep that lowers the radius by less than this part is the last one
_CHUNK = 16
_FIRST, _NEXT = 40, 25  # steps of a descent in the first sweep and later


def searched_together(field: Field) -> bool:
    """Whether one search over all gains at once is affordable."""
    chart = Chart(field, TIGHT)
    return len(field.groups) == 1 or (chart.size <= MOST_TOGETHER and len(field.plants) <= MOST_TOGETHER)


def sweep(
    field: Field, journal: Journal, workers: int, enough: float | None = None, progress: Listener = silent
) -> Found:
    """The smallest radius met; the search ends early below ``enough`` with every limit kept."""
    chart = Chart(field, TIGHT)
    history: list[str] = []
    points = _first_points(field, chart, progress)
    best_points, merit = points, None
    for number in range(1, _SWEEPS + 1):
        gains, _ = chart.gains(np.concatenate(points))
        units = [unit_guide(p, K, False) for p, K in zip(field.plants, gains, strict=True)]
        closed = [unit for unit in units if unit is not None]
        works = _works(field, chart, points, closed if len(closed) == len(units) else None, number)
        points = _solved(works, journal, workers, progress)
        gains, _ = chart.gains(np.concatenate(points))
        found = measure(field, gains, 3000.0, TIGHT, chart.free_modes, steep=False)
        progress(f"sweep {number}: radius {found.radius:.6g}" + (", limits exceeded" if found.excess > 1e-6 else ""))
        history.append(f"sweep {number}: {len({w.key for w in works})} local problems, radius {found.radius:.6g}")
        gained = merit is None or not found.value >= merit.value - _GAIN
        if merit is None or found.value < merit.value:
            best_points, merit = points, found
        if not gained or (enough is not None and found.excess < 1e-6 and found.radius < enough):
            break
    assert merit is not None  # at least one sweep was made
    point = np.concatenate(best_points)
    gains, _ = chart.gains(point)
    final: Merit = measure(field, gains, tight=TIGHT, mode_excess=chart.free_modes)
    return Found(gains, point, final, chart.evaluations, tuple(history))


def _first_points(field: Field, chart: Chart, progress: Listener) -> list[Array]:
    """A search vector per gain set from the cell problem of its first plant, or spread modes where it has no answer."""
    from synth.local.cell_batch import quick_cells

    sizes = np.ones(field.intake.size)
    cells = []
    for group in field.groups:
        plant, core = field.plants[group[0]], core_of(field.plants[group[0]])
        cells.append(
            CellData(
                A=plant.A[np.ix_(core.fed, core.fed)], B=plant.B[np.ix_(core.fed, core.inputs)], D=plant.D[core.fed],
                E=1e-3 * plant.E[core.fed], H=plant.H[: plant.offers, core.fed],
                intake=field.arriving(group[0], sizes), limit=np.full(len(core.inputs), np.inf),
                size=np.ones(plant.offers), slowest=max(field.slowest, 1e-6), fastest=field.fastest,
            )
        )  # fmt: skip
    points = []
    for k, (group, answer) in enumerate(zip(field.groups, quick_cells(cells), strict=True)):
        plant, core, part = field.plants[group[0]], core_of(field.plants[group[0]]), chart.parts[k]
        if answer is None:
            points.append(np.concatenate((np.full(len(part.sensors), 0.8), np.zeros(len(part.free)))))
            continue
        everything = np.zeros((plant.B.shape[1], len(plant.A)))
        everything[np.ix_(core.inputs, core.fed)] = answer
        points.append(part.point(project(plant, everything)))
    progress(f"cell problems of {len(points)} gain sets solved")
    return points


def _works(
    field: Field, chart: Chart, points: Sequence[Array], units: list[Guide] | None, number: int
) -> list[LocalWork]:
    """The local problem of every gain set at the sizes of the present gains."""
    intake = field.intake
    s, bearing = np.ones(intake.size), None
    if units is not None:
        loop = loop_of(field, units)
        radius, _, _, chosen = loop.radius()
        # The resolvent just above the radius: the Perron vector where there is one, positive everywhere else.
        s = loop.forward(chosen, max(radius, 1e-12) * (1 + 1e-4))
        if radius < 1 - 1e-9:
            bearing = settled_arrivals(field, loop, units)
    arriving = intake.brought(s)
    works = []
    for k, group in enumerate(field.groups):
        hears, promised, bears = [], [], []
        for i in group:
            rows = np.concatenate((arriving[intake.takes[i]], s[intake.rows[i]]), axis=1)
            if bearing is not None:
                rows = np.concatenate((rows, bearing[i]), axis=1)
            # Units that differ in the last digits of a solver are the same problem.
            rows = np.unique(np.array([[float(f"{v:.9e}") for v in row] for row in rows]), axis=0)
            takes, offers = intake.takes[i].shape[1], intake.rows[i].shape[1]
            hears.append(rows[:, :takes])
            promised.append(rows[:, takes : takes + offers])
            bears.append(rows[:, takes + offers :])
        works.append(
            LocalWork(
                tuple(field.plants[i] for i in group), field.slowest, field.fastest, chart.tight, tuple(hears),
                tuple(promised), tuple(bears) if bearing is not None else None, (points[k],),
                _FIRST if number == 1 else _NEXT,
            )
        )  # fmt: skip
    return works


def _solved(works: list[LocalWork], journal: Journal, workers: int, progress: Listener) -> list[Array]:
    """Search vectors of all works, from the journal where they are known."""
    keys = [work.key for work in works]
    new = list({key: work for key, work in zip(keys, works, strict=True) if key not in journal.known}.items())
    chunks = [new[a : a + _CHUNK] for a in range(0, len(new), _CHUNK)]
    pieces = [tuple(work for _, work in chunk) for chunk in chunks]
    done = 0
    for chunk, found in zip(chunks, in_order(solve_chunk, pieces, workers, progress), strict=True):
        journal.add((key, point.tolist()) for (key, _), point in zip(chunk, found, strict=True))
        done += len(chunk)
        progress(f"local problems: {done} of {len(new)} solved")
    return [np.array(journal.known[key]) for key in keys]
