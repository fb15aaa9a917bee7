"""The design as a whole: limits kept by guaranteed numbers, structure, determinism, units, and honest failure."""

from __future__ import annotations

import json
from dataclasses import replace
from fractions import Fraction

import cvxpy as cp
import numpy as np
import pytest

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain import assemble, close_network
from synth.local import Design, ObstructionFound, design, redesign
from synth.local.guarantee import guarantee
from synth.network.gains import Gains, gain_set
from synth.network.model import Kind, Network
from tests.build import M, convoy, convoy_gains, hauler
from tests.local.cases import bounded, cases, light_unit, tight, without_drive
from tests.local.made import made


def assert_kept(made_design: Design, network: Network) -> None:
    """Radius and every limit recomputed from the gains alone."""
    closed = close_network(network, made_design.gains)
    radius = assemble(closed, network.links).radius()
    assert made_design.lower == pytest.approx(radius.lower) and made_design.upper == pytest.approx(radius.upper)
    assert made_design.lower <= made_design.upper
    for unit in closed:
        modes = np.linalg.eigvals(unit.A.floats())
        # Eigenvalues of a cluster carry errors of about the n-th root of rounding.
        assert np.abs(modes).max() <= float(network.goal.fastest or np.inf) * (1 + 1e-4)
        assert modes.real.max() <= -float(network.goal.slowest or 0) * (1 - 1e-4)
    for peak in made_design.peaks:
        if peak.limit is not None:
            assert peak.value < float(peak.limit)


@pytest.mark.parametrize(
    "name", ["convoy", "convoy, no drive sensor", "convoy, two gains bounded by 20", "lightly damped masses"]
)
def test_reached_within_every_limit(name: str) -> None:
    found = made(name)
    assert found.reached and found.blocking is None and found.broken == ()
    assert_kept(found, found.network)


def test_the_convoy_is_solved_to_its_known_optimum() -> None:
    """All three modes at the edge of the disc: p = (1/lag)/8^3, radius g p = 1/512 (positive response, theory (5))."""
    found = made("convoy")
    assert found.lower >= 1 / 512 and found.upper <= 1.01 / 512


def test_structure_zeros_are_exact() -> None:
    found = made("convoy, no drive sensor")
    assert found.gains["hauler"].K[0, 2] == 0
    assert found.gains["hauler"].K[0, 1] != 0


def test_gain_bounds_hold_exactly_and_matter() -> None:
    found = made("convoy, two gains bounded by 20")
    K = found.gains["hauler"].K
    assert abs(K[0, 0]) <= 20 and abs(K[0, 1]) <= 20
    assert found.lower > 2 * made("convoy").upper


def test_gains_are_short_decimals() -> None:
    found = made("lightly damped masses")
    assert found.digits == 6
    for row in found.gains["mass"].K.rows:
        for value in row:
            assert value == Fraction(f"{float(value):.5e}")


def test_a_limited_actuator_is_used_but_never_reached() -> None:
    found = made("convoy, actuator limit 0.75 m/s^2")
    peak = next(p for p in found.peaks if p.role == "actuator")
    assert 0.98 * 0.75 < peak.value < 0.75


def test_deterministic_for_a_seed() -> None:
    network = light_unit()
    first, second = design(network, seed=3, starts=4), design(network, seed=3, starts=4)
    assert first.gains == second.gains and first.upper == second.upper


def in_other_units(network: Network, scale: dict[str, Fraction]) -> Network:
    """The same convoy with slot, speed, drive and demand in units ``scale`` times smaller."""
    kind = network.kinds[0]
    x = [scale["slot"], scale["speed"], scale["drive"]]
    u, z = scale["demand"], scale["slot"]

    def change(matrix: ExactMatrix, rows: list[Fraction], columns: list[Fraction]) -> ExactMatrix:
        return ExactMatrix.of([[v * r / c for v, c in zip(row, columns, strict=True)]
                               for row, r in zip(matrix.rows, rows, strict=True)], matrix.shape)  # fmt: skip

    one = [Fraction(1)]
    changed: Kind = replace(
        kind,
        A=change(kind.A, x, x), B=change(kind.B, x, [u]), D=change(kind.D, x, one), E=change(kind.E, x, one),
        C=change(kind.C, x, x), H=change(kind.H, [z], x),
        inputs=tuple(replace(a, limit=a.limit * u) for a in kind.inputs if a.limit is not None),
        offers=tuple(replace(s, band=s.band * z) for s in kind.offers if s.band is not None),
    )  # fmt: skip
    links = tuple(
        replace(link, strength=link.strength / z, own_strength=link.own_strength / z) for link in network.links
    )
    return replace(network, kinds=(changed,), links=links)


@pytest.mark.parametrize("exponents", [(6, -6, 3, 5), pytest.param((-5, 2, 6, -6), marks=pytest.mark.long)])
def test_units_do_not_matter(exponents: tuple[int, int, int, int]) -> None:
    """Signals in units from 1e-6 to 1e6: the same gains after the change of units."""
    scale = {name: Fraction(10) ** e for name, e in zip(("slot", "speed", "drive", "demand"), exponents, strict=True)}
    plain = made("convoy, actuator limit 0.75 m/s^2")
    other = design(in_other_units(cases()["convoy, actuator limit 0.75 m/s^2"], scale))
    assert other.reached
    assert other.upper == pytest.approx(plain.upper, rel=2e-3)
    for j, name in enumerate(("slot", "speed", "drive")):
        back = float(other.gains["hauler"].K[0, j] * scale[name] / scale["demand"])
        assert back == pytest.approx(float(plain.gains["hauler"].K[0, j]), rel=2e-2)


@pytest.mark.long
def test_limits_no_gains_keep_are_an_ordinary_outcome_with_the_true_cause() -> None:
    """An actuator limit of .5 cannot be kept; the value said to do does it."""
    network = tight("0.5")
    found = design(network)
    assert not found.reached
    assert [broken.cause for broken in found.broken] == ["actuator limit"]
    blocking = found.blocking
    assert blocking is not None and (blocking.cause, blocking.kind, blocking.name) == (
        "actuator limit", "hauler", "demand",
    )  # fmt: skip
    assert blocking.needed is not None and 0.5 < blocking.needed < 1.0 and blocking.unit == "m/s^2"
    assert design(tight(str(round(blocking.needed, 6))), starts=4).reached
    assert "0.5" in found.explain() and "demand" in found.explain()


def test_target_out_of_reach_names_the_bound_that_blocks() -> None:
    """With strong links and slow modes only, the disc blocks: relaxing it reaches the target."""
    network = convoy(strength="2")
    network = replace(
        network,
        kinds=(hauler(limit=None),),
        goal=replace(network.goal, fastest=Fraction(2), slowest=Fraction("0.1")),
    )
    found = design(network, target=0.2)
    assert not found.reached and found.broken == ()
    assert found.blocking is not None and found.blocking.cause == "fastest"
    assert found.blocking.radius_if_relaxed < 0.2 < found.blocking.radius_now
    assert found.blocking.needed is not None
    wider = replace(network, goal=replace(network.goal, fastest=Fraction(str(round(found.blocking.needed, 6)))))
    assert design(wider, target=0.2, starts=4).reached


def test_missing_sensor_is_named() -> None:
    """The drive sensor alone is what a sharper target needs."""
    found = design(without_drive(), target=0.02)
    assert not found.reached
    assert found.blocking is not None and found.blocking.cause == "structure"
    assert found.blocking.radius_if_relaxed <= 0.02


def test_obstruction_comes_before_any_solve(monkeypatch: pytest.MonkeyPatch) -> None:
    """Units that see only gaps: no search is started."""
    kind = hauler()
    blind = replace(kind, sensors=kind.sensors[1:], C=M([[0, 1, 0], [0, 0, 1]]), N=ExactMatrix.zeros(2, 1))
    network = replace(convoy(), kinds=(blind,), links=())
    monkeypatch.setattr("synth.local.designing.search", lambda *_, **__: pytest.fail("a search was started"))
    with pytest.raises(ObstructionFound) as caught:
        design(network)
    assert caught.value.exit_code == 1
    assert caught.value.obstruction.cause == "not seen"


def test_a_solver_that_fails_leaves_the_placed_starts(monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object, **__: object) -> float:
        raise cp.SolverError("made to fail")

    monkeypatch.setattr(cp.Problem, "solve", fail)
    found = design(light_unit(), starts=6)
    assert found.reached and found.upper <= 1.01 * made("lightly damped masses").upper
    assert any("0 usable answers" in line for line in found.history)


def test_redesign_starts_from_given_gains() -> None:
    stronger = light_unit().scaled(Fraction(6, 5))
    found = redesign(stronger, made("lightly damped masses").gains)
    assert found.reached
    assert_kept(found, stronger)


def test_documents() -> None:
    found = made("convoy, no drive sensor")
    data = json.loads(json.dumps(found.as_json(), allow_nan=False))
    assert set(data) >= {"gains", "target", "radius", "reached", "blocking", "modes", "units"}
    assert data["gains"]["hauler"]["signals"] == ["slot", "speed", "drive"]
    assert data["radius"]["lower"] <= data["radius"]["upper"] == found.radius.upper
    assert data["blocking"] is None and data["reached"] is True
    text = found.as_text()
    assert "u = K y" in text and "(m/s^2)/(m/s)" in text and "1/s" in text


def test_broken_limits_are_reported_for_any_gains() -> None:
    """Each limit broken in turn by gains in service."""
    good = guarantee(convoy(), convoy_gains())
    assert good.broken == ()
    fast = guarantee(convoy(), convoy_gains((-600, -150, -14)))
    assert [b.cause for b in fast.broken] == ["fastest", "actuator limit"]
    slow = guarantee(convoy(), convoy_gains(("-0.9", -5, "-1.5")))
    assert "slowest" in [b.cause for b in slow.broken]
    weak = guarantee(tight("1"), convoy_gains())
    assert [b.cause for b in weak.broken] == ["actuator limit"]
    assert [b.cause for b in guarantee(without_drive(), convoy_gains()).broken] == ["structure"]
    assert "gain bound" in [b.cause for b in guarantee(bounded(), convoy_gains((-25, -19, -4))).broken]
    unstable = guarantee(convoy(), convoy_gains((6, -5, "-1.5")))
    assert unstable.upper == np.inf and unstable.broken[0].cause == "stability"


@pytest.mark.parametrize("wrong", [{"target": 0}, {"target": 1}, {"target": 1.5}, {"seed": -1}, {"starts": 0}])
def test_arguments_out_of_range(wrong: dict[str, float]) -> None:
    with pytest.raises(InputError):
        design(convoy(), **wrong)  # type: ignore[arg-type]
    crossed = convoy()
    crossed = replace(crossed, goal=replace(crossed.goal, slowest=Fraction(9)))
    with pytest.raises(InputError, match="slowest"):
        design(crossed)


def test_no_gains_to_choose() -> None:
    """A network without sensors is evaluated as it stands."""
    kind = replace(
        hauler(limit=None), sensors=(), C=ExactMatrix.zeros(0, 3), N=ExactMatrix.zeros(0, 1),
        A=M([[-1, 0, 0], [0, -1, 0], [0, 0, -2]]),
    )  # fmt: skip
    network = replace(convoy(), kinds=(kind,), links=(), goal=replace(convoy().goal, slowest=None, fastest=None))
    found = design(network, check_obstruction=False)
    assert found.reached and found.upper == 0.0
    assert found.gains == Gains((gain_set(kind, ExactMatrix.zeros(1, 0)),))
