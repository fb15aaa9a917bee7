"""The section ``hop``: what is read from it, and reading a file again with other parameters."""

from __future__ import annotations

from fractions import Fraction

import pytest

from synth.base.errors import InputError
from synth.network import describe, read
from synth.network.hop_reading import per_second
from synth.network.varying import parameters_of, with_parameters
from tests.gain.gap_files import document, network
from tests.network.files import GAP_ONLY


def test_the_section_is_read_in_declared_units():
    wish = network(
        "loaded",
        heard="0.1 s",
        dead_time="100 ms",
        sensing={"closing": "0.05 s"},
        jerk="2.5 m/s^3",
        time_gap="2 s",
        leader={"acceleration": "150 cm/s^2", "speed": "36 km/h", "recorded": "shift.csv"},
    ).goal.hop
    assert (wish.notion, wish.signal, wish.gap_error, wish.any_order) == ("peak", "speed", "spacing", True)
    assert wish.dead_time == Fraction(1, 10)
    assert wish.sensing == {"closing": Fraction(1, 20)}
    assert wish.leader.acceleration == Fraction(3, 2)
    assert wish.leader.speed == 10
    assert wish.most_jerk == Fraction(5, 3)
    assert wish.time_gap == 2


def test_without_the_key_nothing_is_asked_for_and_the_advice_says_what_could_be():
    plain = read(GAP_ONLY)
    assert plain.goal.hop is None
    advice = describe(plain).obstruction.advice
    assert advice.endswith("it must be asked for, with 'claim: hop' in the section design.")
    asked = describe(network("loaded")).obstruction
    assert asked is not None
    assert "must be asked for" not in asked.advice


def test_a_file_read_again_with_its_own_values_is_the_same_network():
    string = network("loaded", "empty", heard="0.1 s")
    own = {kind: {name: value for name, (value, _) in found.items()} for kind, found in parameters_of(string).items()}
    assert own["loaded"] == {"lag": Fraction(1, 2), "headway": 2}
    assert with_parameters(string, own) == string


def test_only_what_is_named_changes_also_to_values_without_a_decimal_form():
    string = network("loaded", "empty")
    other = with_parameters(string, {"loaded": {"headway": Fraction(5, 3)}})
    assert other.kinds[0].C[0, 1] == -Fraction(5, 3)
    assert other.kinds[0].A == string.kinds[0].A
    assert other.kinds[1] == string.kinds[1]
    assert other.hash != string.hash
    with pytest.raises(InputError, match="no parameter 'headwind'"):
        with_parameters(string, {"loaded": {"headwind": Fraction(1)}})
    with pytest.raises(InputError, match="asks for a hop claim"):
        parameters_of(read(GAP_ONLY))


def test_the_model_does_not_depend_on_what_is_asked_of_it():
    """What is asked is hashed in the statement, with the model; the model's own hash stays that of the plant."""
    assert network("loaded").hash == network("loaded", notion="mean square").hash
    one, two = (network("loaded", dead_time=late).goal.hop.document() for late in ("0 s", "0.1 s"))
    assert one != two


@pytest.mark.parametrize(
    ("unit", "wanted"), [("m/s", "m/s^2"), ("m/s^2", "m/s^3"), ("m", "m/s"), ("kg*m", "(kg*m)/s"), ("m/s^12", "m/s^13")]
)
def test_units_per_second(unit, wanted):
    assert per_second(unit) == wanted


def test_a_broken_kind_is_told_alone():
    data = document("loaded")
    data["kinds"]["loaded"]["equations"]["drive'"] = "(demand - drive)/lagg"
    with pytest.raises(InputError) as caught:
        read(data)
    assert len(caught.value.problems) == 1
