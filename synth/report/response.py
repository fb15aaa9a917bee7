"""The section of the report about the simulation, kept apart from the proof."""

from __future__ import annotations

from typing import TYPE_CHECKING

from synth.network.describing import internal
from synth.network.words import counted
from synth.report.figures import closest, draw_peaks_along, draw_string_response, draw_worst_run, telling
from synth.report.html import Child, Html, bullets, element, figure, paragraph, quantity, table, upper
from synth.report.sections import section

if TYPE_CHECKING:
    from synth.simulate import Trajectory

TITLE = "Response in simulation"
NOT_SIMULATED = "Nothing was simulated: no trajectory was handed to this report."
STORED = (
    "Curves join stored samples, fewer than were computed; a pale band shows how far they swing where they swing "
    "faster than a line can show. The tables count every computed sample."
)
_PICTURES = 3  # offered signals that get pictures; more would bury the reader
_RUNS = 12


def response_section(trajectory: Trajectory | None) -> Html:
    """Verdict, pictures and numbers of the simulated section."""
    if trajectory is None:
        return section("response", TITLE, paragraph(NOT_SIMULATED, cls="absent"))
    size = f"{trajectory.units} units, {len(trajectory.runs)} runs of {quantity(trajectory.seconds, 's')} or more"
    parts: list[Child] = [
        paragraph(f"A finite section was run: {size}. The proof does not rest on this; it is a test of it."),
        _outcome(trajectory),
    ]
    # The trajectory's own names: members whose parameters differ share one form and are kept under one name.
    every = [(kind, name) for kind, groups in trajectory.signals.items() for name, _ in groups["offers"]]
    offers = [(kind, name) for kind, name in every if not internal(name)]
    for kind, offer in offers[:_PICTURES] if any(len(run.time) for run in trajectory.runs) else ():
        parts += _pictures(trajectory, kind, offer)
    if len(offers) > _PICTURES:
        parts.append(paragraph(f"{len(offers) - _PICTURES} more offered signals are not drawn; see the table."))
    found = closest(trajectory) if trajectory.checked else None
    worst = draw_worst_run(trajectory) if found is not None else None
    if found is not None and worst is not None:
        share = _percent(found.share)
        parts.append(
            figure(worst, f"Closest to its bound from rest: {found.words} ({found.run.words}), {share}. {STORED}")
        )
    parts += [_as_written(trajectory), _signals(trajectory), _amplification(trajectory), _runs(trajectory)]
    if trajectory.notes:
        parts.append(bullets(trajectory.notes))
    return section("response", TITLE, *parts)


def _outcome(trajectory: Trajectory) -> Html:
    """Whether any sample passed a bound, and how close the runs came."""
    if not trajectory.checked:
        return paragraph("There was no proven certificate to check the runs against.", cls="absent")
    close = []
    for value, words in (
        (trajectory.worst.G_ratio, "from rest"),
        (trajectory.worst.envelope_ratio, "from an initial offset"),
    ):
        if value is not None:
            close.append(f"{_percent(value)} of its bound {words}")
    reach = f" The largest state reached {' and '.join(close)}." if close else ""
    if trajectory.violations:
        text = (
            f" {trajectory.violations} samples above a proven bound. What runs is not what was proven, or the model "
            "differs."
        )
        return element("p", "✗ ", element("strong", "Bound passed."), text, reach, cls="verdict no")
    return element("p", "✓ ", element("strong", "No sample above a proven bound."), reach, cls="verdict yes")


def _percent(share: float) -> str:
    """A share that only reads 100 % when it is: rounded away from the bound on either side."""
    return f"{quantity(100 * share, rounding='down' if share < 1 else 'up')} %"


def _pictures(trajectory: Trajectory, kind: str, offer: str) -> list[Html]:
    """How a disturbance travels, and how large the signal gets in each unit."""
    name = f"{kind}.{offer}"
    alone = any(run.name == "leader" for run in trajectory.runs)
    travels = f"{name} over time in some units, up to where it has settled" + (
        "; only the first unit is disturbed." if alone else "."
    )
    runs = "; ".join(run.name for run in telling(trajectory))
    travels += " " + STORED
    return [
        figure(draw_string_response(trajectory, kind, offer), travels),
        figure(
            draw_peaks_along(trajectory, kind, offer),
            f"Largest stored value of {name} in each unit, in the runs {runs}.",
        ),
    ]


def _as_written(trajectory: Trajectory) -> Html | None:
    """How near the runs of the equations as written came to a bound; None if there are none."""
    runs = [run for run in trajectory.runs if run.name.startswith("as written")]
    if not runs:
        return None
    words = (
        f"{counted(len(runs), 'run')} as written: the equations of the problem file themselves, with nonlinear terms "
        "and uncertain parameters as they stand, so that a mistake in how the proof counts them would show."
    )
    share = [max(run.G_ratio, run.envelope_ratio, run.worst_signal) for run in runs if run.counted]
    if trajectory.checked and share:
        words += f" The closest reached {_percent(max(share))} of a bound."
    return paragraph(words)


def _signals(trajectory: Trajectory) -> Html | None:
    """Largest value seen from rest beside the guaranteed peak."""
    rows: list[list[Child]] = []
    for row in trajectory.measures.get("signals", ()):
        bound = row["guaranteed"]
        rows.append(
            [
                f"{row['kind']}.{row['signal']}",
                row["role"],
                quantity(row["peak"], row["in"]),
                "none" if bound == "inf" else upper(bound, row["in"]),
                "" if row["ratio"] is None else _percent(row["ratio"]),
            ]
        )
    header = ("Signal", "Role", "Largest seen", "Guaranteed", "Share")
    return table("Peaks in the runs from rest", header, rows, numeric=(2, 3, 4)) if rows else None


def _amplification(trajectory: Trajectory) -> Html | None:
    """How peaks grow or shrink from unit to unit, and when the pulse has died out."""
    lines: list[Child] = []
    for row in trajectory.measures.get("amplification", ()):
        if row["successive"] is not None:
            word = "shrink" if row["successive"] < 1 else "do not shrink everywhere"
            lines.append(
                f"{row['kind']}.{row['offer']}: when the first unit alone is disturbed, peaks {word} along the string; "
                f"the largest ratio of neighbours is {quantity(row['successive'])} : 1."
            )
    settling = trajectory.measures.get("settling")
    if settling is not None:
        lines.append(f"After the pulse every state is within 2 % of its peak from {quantity(settling, 's')} on.")
    return bullets(lines) if lines else None


def _runs(trajectory: Trajectory) -> Html:
    """The runs, those that came closest to a bound first."""

    def nearness(index: int) -> tuple[float, int]:
        run = trajectory.runs[index]
        return -max(run.G_ratio, run.envelope_ratio, run.worst_signal), index

    order = sorted(range(len(trajectory.runs)), key=nearness)[:_RUNS]
    rows: list[list[Child]] = []
    for index in order:
        run = trajectory.runs[index]
        share = max(run.G_ratio, run.envelope_ratio, run.worst_signal)
        rows.append(
            [
                run.name,
                run.words if run.counted else f"{run.words} ({run.reason})",
                _percent(share) if trajectory.checked and run.counted else "not compared",
                str(run.violations) if run.counted else "",
            ]
        )
    more = len(trajectory.runs) - len(rows)
    caption = "Runs, closest to a bound first" + (f"; {more} more are not listed" if more else "")
    return table(caption, ("Run", "What happens", "Reached", "Samples above"), rows, numeric=(2, 3))
