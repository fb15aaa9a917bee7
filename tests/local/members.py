"""Members networks for tests: haulers with lags of their own on a ring. All data invented."""

from __future__ import annotations

from typing import Any

HAULER: dict[str, Any] = {
    "parameters": {"lag": "0.5 s"},
    "states": {"slot": "m", "speed": "m/s", "drive": "m/s^2"},
    "inputs": {"demand": {"in": "m/s^2", "limit": 2.5}},
    "disturbances": {"slope": {"in": "m/s^2", "peak": 0.3}},
    "takes": {"ahead": "m/s^2"},
    "offers": {"place": {"is": "slot"}},
    "sensors": ["slot", "speed", "drive"],
    "equations": {"slot'": "speed", "speed'": "drive + slope", "drive'": "(demand + ahead - drive)/lag"},
}
GOAL = {"target": 0.9, "slowest": "0.4 1/s", "fastest": "4 1/s"}
FOLLOW = {"name": "follow", "from": "hauler.place", "at": -1, "to": "hauler.ahead", "strength": "0.5 1/s^2",
          "relative": True}  # fmt: skip


def problem(network: dict[str, Any], **design: Any) -> dict[str, Any]:
    """A problem file with the hauler, the given network, and changes of the goal."""
    return {"synth": 1, "title": "Invented haulers", "kinds": {"hauler": HAULER}, "network": network,
            "design": {**GOAL, **design}}  # fmt: skip


def pattern(**design: Any) -> dict[str, Any]:
    """A line without end of equal haulers that follow the one before."""
    return problem({"pattern": {"dimension": 1, "links": [FOLLOW]}}, **design)


def ring(count: int, gains: str = "per_kind", lags: int = 0, **design: Any) -> dict[str, Any]:
    """A ring of haulers; ``lags`` different lags (0: one per unit) and strengths that vary from unit to unit."""
    import networkx as nx

    graph = nx.DiGraph()
    for i in range(count):
        lag = 0.3 + 0.5 * ((i * 7) % (lags or count)) / (lags or count)
        graph.add_node(f"u{i}", kind="hauler", lag=f"{lag:.6f} s")
    for i in range(count):
        strength = 0.5 if lags else 0.3 + 0.4 * ((i * 5) % count) / count
        graph.add_edge(f"u{(i - 1) % count}", f"u{i}", name="follow", strength=f"{strength:.6f} 1/s^2", relative=True)
    return problem({"members": {"graph": graph}}, gains=gains, **design)
