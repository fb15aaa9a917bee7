"""Words for the parts of a network that more than one page shows: numbers, places, links."""

from __future__ import annotations

from fractions import Fraction

from synth.base.units import parse_unit
from synth.network.model import Link, Network


def said(value: Fraction | float) -> str:
    """A number with as many digits as a person reads."""
    return f"{float(value):.6g}"


def counted(count: int, noun: str) -> str:
    """``1 unit``, ``2 units``."""
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


def place_words(at: tuple[int, ...]) -> str:
    """Where the sending unit stands, seen from the receiving one; empty where places mean nothing."""
    if not at:
        return ""
    if not any(at):
        return "in the same cell"
    if len(at) > 1:
        return f"at ({', '.join(map(str, at))})"
    steps = "1 place" if abs(at[0]) == 1 else f"{abs(at[0])} places"
    return f"{steps} {'before' if at[0] < 0 else 'behind'} (at {at[0]})"


def link_units(link: Link, network: Network) -> tuple[str, str]:
    """The units of the taken and of the offered signal."""
    source, target = network.kind(link.source_kind), network.kind(link.kind)
    return target.takes[target.index("takes", link.take)].unit, source.offers[source.index("offers", link.offer)].unit


def strength_unit(link: Link, network: Network) -> str:
    """The unit of the strength as units are written, for programs: ``(m/s^2)/(m)``."""
    taken, offered = link_units(link, network)
    return f"({taken})/({offered})"


def per_words(link: Link, network: Network) -> str:
    """The unit of the strength in words, such as ``m/s^2 per m``, or ``per m`` where the taken signal has no unit."""
    taken, offered = link_units(link, network)
    if taken == offered == "1":
        return ""
    return f"{taken} per {offered}" if taken != "1" else f"per {offered}"


def own_part_of(link: Link, network: Network) -> Link | None:
    """The self-link that carries the own part of a relative link which is not folded; None if there is none.

    Of members only the part that is as late as the link is looked for: what intervals leave differs from unit to unit.
    """
    if link.own_part or (link.relative and network.members is not None):
        return None
    ends = (link.name, link.kind, link.take, link.offer)
    beside = next((edge for edge in network.edges if any(single.link is link for single in edge.links)), None)
    links = network.links if beside is None else tuple(single.link for single in beside.links)
    found = [k for k, p in enumerate(links) if p.own_part and (p.name, p.kind, p.take, p.offer) == ends]
    # An own part stands behind the neighbour's part it belongs to; several links into one taken signal have their own.
    return next((links[k] for k in found if k and links[k - 1] is link), links[found[0]] if found else None)


def subtracting(link: Link, network: Network) -> Link:
    """The link that carries the own part of a relative rule for all its sources (the first one), else the link."""
    if network.description != "rules" or not link.choice or link.relative:
        return link
    ends = (link.choice, link.kind, link.take)
    return next((m for m in network.links if m.relative and (m.choice, m.kind, m.take) == ends), link)


def link_nature(link: Link, network: Network) -> str:
    """What kind of link it is, and how late it may be: ``minus the unit's own fresh value, up to 0.1 s late``."""
    parts = []
    own = own_part_of(link, network)
    both = ""
    link = subtracting(link, network)
    if link.relative:
        parts.append("minus the unit's own fresh value")
    elif own is not None:
        parts.append("minus the unit's own value, just as late")
        both = "both "
    else:
        parts.append("absolute")
    if link.weakens:
        parts.append("may weaken to zero at any time")
    parts.append(f"{both}up to {said(link.delay)} s late" if link.delay else "always fresh")
    return ", ".join(parts)


def strength_words(link: Link, network: Network) -> str:
    """The strength, or both ends of its interval where they can be told: ``0.4 to 0.5``."""
    own = own_part_of(link, network) if link.relative else None
    if own is None or _own_ratio(link, network) != 1:
        return said(link.strength)
    return f"{said(2 * link.own_strength - link.strength)} to {said(link.strength)}"


def _own_ratio(link: Link, network: Network) -> Fraction:
    """How the unit that the receiver counts its own signal in compares to the sender's."""
    source, target = network.kind(link.source_kind), network.kind(link.kind)
    theirs = source.offers[source.index("offers", link.offer)].unit
    ours = target.offers[target.index("offers", link.offer)].unit
    return parse_unit(ours).factor / parse_unit(theirs).factor


def link_words(link: Link, network: Network) -> str:
    """One line about a link: both ends, place, strength with unit, nature."""
    place = place_words(link.at)
    taken, offered = link_units(link, network)
    own = own_part_of(link, network) if link.relative else None
    left = "" if own is None else f", the own value left over by the interval counts {said(abs(own.strength))} more"
    return (
        f"{link.source_kind}.{link.offer}{' ' if place else ''}{place} -> {link.kind}.{link.take}: "
        f"strength {strength_words(link, network)} ({taken} per {offered}), {link_nature(link, network)}{left}"
    )
