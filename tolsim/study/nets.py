"""Nets must make a circuit: typing slips show as nets with one connection or no DC path.

A net between capacitors is allowed: the leak defines its charge.  A gate, drain or source
without a path for direct current is not, because the leak would set its bias.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Collection, Iterable, Iterator, Mapping
from dataclasses import dataclass
from itertools import combinations

from tolsim.design import GROUND
from tolsim.errors import Mistake, Problem, nearest_name
from tolsim.quantity import read
from tolsim.study.outline import Outline, Table

Edge = tuple[str, str]

_TERMINALS = {
    "diode": ("anode", "cathode"),
    "mosfet": ("drain", "gate", "source_net"),
    "potentiometer": ("nets", "nets", "nets"),
}
_NO_NETS = frozenset({"coupling", "load"})
_CONDUCTS_DC = frozenset({"inductor", "resistor", "potentiometer", "diode", "drive", "mosfet"})
_MAY_TIE = frozenset({"potentiometer", "mosfet"})  # wiper to an end, gate to drain


@dataclass(frozen=True)
class Wired:
    """A part and its nets: (key in the table, net) per terminal."""

    ref: str
    kind: str
    terminals: tuple[tuple[str, str], ...]

    @property
    def nets(self) -> tuple[str, ...]:
        """Nets in the order of the terminals."""
        return tuple(net for _, net in self.terminals)

    def edges(self) -> Iterator[Edge]:
        """Pairs of nets that direct current passes between."""
        if self.kind == "mosfet":
            yield self.nets[0], self.nets[2]
        elif self.kind in _CONDUCTS_DC:
            yield from combinations(self.nets, 2)


def net_problems(outline: Outline) -> Iterator[Problem]:
    """Every mistake in how the parts are joined.

    Says nothing while some part's own nets could not be read, for then all the
    others would look wrong.
    """
    parts = [
        _wired(ref, outline.kinds.get(ref, ""), table)
        for ref, table in outline.parts.items()
        if outline.kinds.get(ref) not in _NO_NETS
    ]
    rails = {ref: table.get("net") for ref, table in outline.rails.items()}
    whole = [part for part in parts if part is not None]
    yield from _shorted(outline, whole)
    yield from _rails_apart(outline, rails)
    if len(whole) < len(parts) or not all(isinstance(net, str) for net in rails.values()):
        return
    roots = {GROUND, *(str(net) for net in rails.values())}
    lonely = list(_lonely(outline, whole, roots))
    yield from lonely
    yield from _idle_rails(outline, whole)
    if not lonely:  # a net with one connection has no path either: say it once
        yield from _islands(outline, whole, roots)
        yield from _unbiased(outline, whole, roots)
    yield from _lossless_loops(outline, whole)


def _wired(ref: str, kind: str, table: Table) -> Wired | None:
    """The part with its nets, or None if they are not written as they should be."""
    if kind in {"diode", "mosfet"}:
        default = {"source_net": GROUND}
        ends = [(key, table.get(key, default.get(key))) for key in _TERMINALS[kind]]
    else:
        listed = table.get("nets")
        count = 3 if kind == "potentiometer" else 2
        if not kind or not isinstance(listed, list) or len(listed) != count:
            return None
        ends = [("nets", net) for net in listed]
    if not all(isinstance(net, str) for _, net in ends):
        return None
    return Wired(ref, kind, tuple((key, str(net)) for key, net in ends))


def _shorted(outline: Outline, parts: Iterable[Wired]) -> Iterator[Problem]:
    for part in parts:
        first, *_, last = part.nets
        if first == last or (len(set(part.nets)) < len(part.nets) and part.kind not in _MAY_TIE):
            yield outline.problem(
                f"parts.{part.ref}",
                part.terminals[0][0],
                f"net {first} at both ends",
                "different nets at its ends",
                "Joined to one net only it does nothing.",
            )


def _rails_apart(outline: Outline, rails: Mapping[str, object]) -> Iterator[Problem]:
    seen = {GROUND: "ground"}
    for ref, net in rails.items():
        if not isinstance(net, str):
            continue
        if net in seen:
            yield outline.problem(
                f"rails.{ref}",
                "net",
                f'"{net}", held by {seen[net]} already',
                "a net that nothing else holds",
            )
        else:
            seen[net] = f"rail {ref}"


def _lonely(outline: Outline, parts: Iterable[Wired], roots: Collection[str]) -> Iterator[Problem]:
    ends = [(part.ref, key, net) for part in parts for key, net in part.terminals]
    count = Counter(net for _, _, net in ends)
    joined = [net for net in {*count, *roots} if count[net] > 1 or net in roots]
    for ref, key, net in ends:
        if count[net] == 1 and net not in roots:
            yield Problem(
                outline.file,
                f"parts.{ref}",
                key,
                f'net "{net}" with this one connection',
                "a net that other parts join too",
                nearest_name(net, joined),
            )


def _idle_rails(outline: Outline, parts: Iterable[Wired]) -> Iterator[Problem]:
    used = {net for part in parts for net in part.nets}
    for ref, table in outline.rails.items():
        if table["net"] not in used:
            yield outline.unknown(
                f"rails.{ref}", "net", table["net"], "a net that parts join", sorted(used)
            )


def _islands(outline: Outline, parts: list[Wired], roots: Collection[str]) -> Iterator[Problem]:
    """Groups of parts that nothing at all joins to a rail or ground, not even a capacitor."""
    coupled = _coupled(outline)
    linked = [pair for part in parts for pair in combinations(part.nets, 2)]
    afar = {net for part in parts if part.ref in coupled for net in part.nets}
    reached = _reached(linked, {*roots, *afar})
    for part in parts:
        if not reached.issuperset(part.nets):
            yield outline.problem(
                f"parts.{part.ref}",
                part.terminals[0][0],
                ", ".join(dict.fromkeys(part.nets)),
                f"nets that lead to a rail or to {GROUND}",
                "Join this part of the circuit to the rest.",
            )


def _unbiased(outline: Outline, parts: list[Wired], roots: Collection[str]) -> Iterator[Problem]:
    """MOSFET terminals that direct current reaches only through the leak or its own channel."""
    for part in parts:
        if part.kind != "mosfet":
            continue
        others = [edge for other in parts if other is not part for edge in other.edges()]
        reached = _reached(others, roots)
        for key, net in part.terminals:
            if net not in reached:
                yield outline.problem(
                    f"parts.{part.ref}",
                    key,
                    f'net "{net}" without one',
                    f"a path for direct current to a rail or to {GROUND}",
                    "Add the resistor or choke that sets its voltage.",
                )


def _lossless_loops(outline: Outline, parts: list[Wired]) -> Iterator[Problem]:
    """Loops of lossless inductors and rails: their direct current has no bound."""
    ideal = [table["net"] for table in outline.rails.values() if _is_ideal(table)]
    joined: list[Edge] = [(GROUND, net) for net in ideal]
    for part in parts:
        table = outline.parts[part.ref]
        lossless = "resistance" in table and _number(table, "resistance") == 0.0
        if part.kind != "inductor" or not lossless:
            continue
        first, last = part.nets
        if last in _reached(joined, {first}):
            yield outline.problem(
                f"parts.{part.ref}",
                "resistance",
                "0 in a loop of lossless inductors and rails",
                "some resistance",
                "Give the winding its resistance, or the rail its own.",
            )
        joined.append((first, last))


def _is_ideal(rail: Table) -> bool:
    """True for a rail that holds its net whatever it delivers."""
    own_current = "inductance" in rail or "current_limit" in rail
    return not own_current and not _number(rail, "resistance")


def _number(table: Table, key: str) -> float:
    """Resistance written under `key`; 0 if there is none, NaN if it cannot be read."""
    value = table.get(key, 0.0)
    try:
        return read(value, "ohm") if isinstance(value, str) else float(value)
    except (Mistake, TypeError, ValueError):
        return float("nan")


def _coupled(outline: Outline) -> set[str]:
    named: set[str] = set()
    for table in outline.parts.values():
        pair = table.get("inductors")
        named.update(
            ref for ref in (pair if isinstance(pair, list) else []) if isinstance(ref, str)
        )
    return named


def _reached(edges: Iterable[Edge], start: Collection[str]) -> set[str]:
    """Nets that can be reached from `start` along `edges`."""
    edges = list(edges)
    reached = set(start)
    while fresh := {
        net for pair in edges if reached.intersection(pair) for net in pair if net not in reached
    }:
        reached |= fresh
    return reached
