"""Operating values that firmware must subtract from readings and add to commands, where a kind rests at one."""

from __future__ import annotations

from synth.network.model import Network

AtRest = dict[str, dict[str, dict[str, tuple[float, str]]]]


def operating_values(network: Network) -> AtRest:
    """``[kind][group][signal] -> (value, unit)`` for the actuators and sensors of kinds that do not rest at zero.

    Values are in the declared units. Kinds written in differences from the start have none. Source: the equilibrium
    that the reader of the problem file found and proved.
    """
    found: AtRest = {}
    for kind in network.kinds:
        if kind.dynamics is None:
            continue
        at = kind.dynamics.operating
        values = {
            "actuator": {a.name: (float(at["inputs"][a.name]), a.unit) for a in kind.inputs},
            "sensor": {s.name: (float(at["sensors"][s.name]), s.unit) for s in kind.sensors},
        }
        if any(value for named in values.values() for value, _ in named.values()):
            found[kind.name] = values
    return found
