"""The sentences of a certificate, made from its numbers and its model alone."""

from __future__ import annotations

from typing import Any

from synth.proof.checking.reading import number, shown

MOST_LINES = 200  # of one sort: a network of many listed parts is described by one sentence and the model itself


def about(document: dict[str, Any]) -> str:
    """Which units and wirings the claim is about, as the beginning of a sentence."""
    model = document["model"]
    description, dimension = model["description"], model["dimension"]
    if description == "pattern":
        return "For any number of units"
    if description == "rules":
        return "For every wiring that the rules allow, with any number of units, rewired at any time"
    if description == "members":
        return f"For these {len(model['members']['units'])} units with these links, and for no larger or other network"
    one, many, finite = {1: ("half line", "half lines", "line"), 2: ("half plane", "half planes", "strip")}.get(
        dimension, ("half space", "half spaces", "layer")
    )
    if len(model["edges"]) == 1:
        return f"For the {one} with this {model['edges'][0]['side']} edge, without end to the other side"
    least = document["windows"]["least"]
    return f"For every {finite} of {least} or more cells between these two edges, and for both {many}"


def claim_of(document: dict[str, Any]) -> str:
    """The claim."""
    constants, valid = document["constants"], document["validity"]
    claim = (
        f"{about(document)}: sup_i |x_i(t)| <= C e^(-alpha t) X0 + G sup|w| with C = {constants['C']}, "
        f"alpha = {constants['alpha']} 1/s, G = {constants['G']} ({constants['norm']}; X0 bounds every state at the "
        f"start and over the longest delay before it, and what offers with feed-through had stored). The gain operator "
        f"of the {document['route']} route has radius at most {document['radius']['upper']}, not above the target "
        f"{shown(document['target'])}."
    )
    if any(peak["limit"] is not None for peak in document["peaks"]):
        claim += (
            f" It holds while no actuator saturates; no actuator reaches its limit and no band is left when X0 <= "
            f"{valid['X0']} and the disturbances stay within their declared peaks, or from rest when |w| <= "
            f"{valid['w']}."
        )
    return claim


def wirings(document: dict[str, Any]) -> list[str]:
    """What is covered of the ways in which units stand and are joined."""
    model = document["model"]
    description = model["description"]
    if description == "pattern":
        ring = "closed to a ring" if model["dimension"] == 1 else "closed to a ring in any of its directions"
        return [
            f"any number of units: the pattern without end, {ring}, or cut to a finite section whose missing "
            "neighbours are read as zero while the own parts of relative links stay in force"
        ]
    if description == "rules":
        return [
            "every wiring that the rules allow, with any number of units, also while links come, go and change their "
            "source; a unit that joins starts inside the bound that holds for the others at that time",
            *(
                f"rule {rule['name']}: {rule['kind']}.{rule['take']} receives at most {rule['most']} links at a time; "
                f"the strength listed for a source is that of {rule['most']} such links together"
                for rule in model["rules"]
            ),
        ]
    if description == "members":
        missing = any(row[2] < 0 for row in model["members"]["links"])
        cut = " (a link from beyond the cut is read as zero while its own part stays in force)" * missing
        return [f"these {len(model['members']['units'])} units with the {len(model['members']['links'])} links{cut}"]
    found = []
    for edge in model["edges"]:
        found.append(
            f"the {edge['side']} edge: a link of the pattern whose source would stand beyond it is not there, own part "
            "included"
        )
        found += [
            f"the {edge['side']} edge: {unit['name']} ({unit['kind']}) stands at place {unit['at']} instead of "
            f"{unit['instead_of']}"
            for unit in edge["units"]
        ]
    if model["dimension"] > 1:
        found.append("along the edge: the same units and links everywhere, without end or closed to a ring; no corners")
    return found


def link_words(link: dict[str, Any], listed: bool, choice: str = "") -> str:
    """What is covered of one link; ``listed`` if the units it joins are listed one by one."""
    if "sort" in link:
        what = {
            "tolerance": "any value, steady or varying in time, within the declared tolerance",
            "curve": "any nonlinear term inside its sector, while its argument stays in the band",
        }
        return f"{link['name']} ({link['to']['kind']}): {what[link['sort']]}"
    fresh = number(link["delay"], "delay") == 0
    age = (
        "the present value"
        if fresh
        else f"values no older than {shown(link['delay'])} s, constant or varying age, held or lost"
    )
    at = "" if listed else f" at {link['at']}"
    ends = f"({link['from']['kind']}.{link['from']['offer']}{at} to {link['to']['kind']}.{link['to']['take']})"
    size = shown(link["strength"]).lstrip("-")
    if "own_part" in link:
        return f"own value in link {link['name']} {ends}: {age}; any strength, steady or varying, up to {size}"
    if "weakens" in link:
        own = shown(link["own_strength"]).lstrip("-")
        return (
            f"link {link['name']} {ends}: {age}; any part from none to all of its strength {size} (own value: {own}, "
            f"always fresh, weakened by the same part), steady or varying: weakened, broken, restored{choice}"
        )
    return (
        f"link {link['name']} {ends}: {age}; any strength, steady or varying, up to {size} in absolute value "
        f"(weakened, lost to zero, of either sign){choice}"
    )


def covers_of(document: dict[str, Any]) -> list[str]:
    """What the claim covers."""
    model = document["model"]
    covers, listed = wirings(document), model["description"] in ("members", "rules")
    links = model["links"]
    if len(links) > MOST_LINES:
        covers.append(
            f"links: {len(links)} sorts as they stand in the model; values no older than their delay, constant or "
            "varying age, held or lost; any strength, steady or varying, up to theirs (of weakening links, any part "
            "from none to all)"
        )
    else:
        for link in links:
            choice = "; together with the other sources of its rule, shared out in any way" if "choice" in link else ""
            covers.append(link_words(link, listed, choice))
    for edge in model.get("edges", []):
        for link in edge["links"]:
            covers.append(f"the {edge['side']} edge, into place {link['to_place']}: {link_words(link, False)}")
    waves = [(kind["name"], w) for kind in model["kinds"] for w in kind["disturbances"]]
    if len(waves) > MOST_LINES:
        return [*covers, f"{len(waves)} disturbances: any course in time, within the peaks that the model declares"]
    return covers + [
        f"disturbance {kind}.{w['name']}: any course in time, declared peak {shown(w['peak'])} {w['in']}"
        for kind, w in waves
    ]


def excludes_of(document: dict[str, Any]) -> list[str]:
    """What the claim does not cover."""
    model = document["model"]
    links = model["links"] + [link for edge in model.get("edges", []) for link in edge["links"]]
    excludes = [
        "sampling, computation delay and rounding of the firmware: the proof is about the continuous loop",
        "a saturated actuator, and any state outside the region of validity",
        "dynamics that the model leaves out, and gains or model parameters away from their stated values"
        + (" and tolerances" if any("sort" in link for link in links) else ""),
        "link values older, or strengths larger, than listed under covers; sensor noise and failed sensors",
    ]
    if model["description"] == "members":
        excludes.append("any unit or link that is not listed: nothing follows for a longer or larger network")
    if model["description"] == "rules":
        excludes.append("a unit that receives more than the rules allow, or joins with a state outside the bound")
    if any(number(link["own_strength"], "g") for link in links):
        excludes.append(
            "the own part of a relative link late, lost or away from its nominal strength"
            + (", except with its whole link where that may weaken" if any("weakens" in x for x in links) else "")
        )
    if any("sort" in link for link in links):
        excludes.append(
            "how tolerances and sectors follow from the equations: the reader of the problem file bounds them"
        )
    if any(number(v, "N") for kind in model["kinds"] for row in kind["N"] for v in row):
        excludes.append("a controller that hears a taken signal later, or otherwise, than it acts on its unit")
    return excludes


def sentences(document: dict[str, Any]) -> tuple[str, list[str], list[str]]:
    """(claim, covers, excludes) of a document, from its numbers alone."""
    return claim_of(document), covers_of(document), excludes_of(document)
