"""Words for the parts of a network that more than one page shows: numbers, places, links."""

from __future__ import annotations

from fractions import Fraction

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
    """The unit of the strength, such as ``(m/s^2)/(m)``."""
    taken, offered = link_units(link, network)
    return f"({taken})/({offered})"


def link_nature(link: Link, network: Network) -> str:
    """What kind of link it is, and how late it may be: ``minus the unit's own fresh value, up to 0.1 s late``."""
    parts = []
    ends = (link.name, link.kind, link.take, link.offer)
    if link.relative:
        parts.append("minus the unit's own fresh value")
    elif any(other.own_part and (other.name, other.kind, other.take, other.offer) == ends for other in network.links):
        parts.append("minus the unit's own value, just as late")
    else:
        parts.append("absolute")
    if link.weakens:
        parts.append("may weaken to zero at any time")
    parts.append(f"up to {said(link.delay)} s late" if link.delay else "always fresh")
    return ", ".join(parts)


def link_words(link: Link, network: Network) -> str:
    """One line about a link: both ends, place, strength with unit, nature."""
    place = place_words(link.at)
    taken, offered = link_units(link, network)
    return (
        f"{link.source_kind}.{link.offer}{' ' if place else ''}{place} -> {link.kind}.{link.take}: "
        f"strength {said(link.strength)} ({taken} per {offered}), {link_nature(link, network)}"
    )
