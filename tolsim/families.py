"""Spread tables that can only be replaced together: parts or reels that follow several of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from tolsim.design import Study
from tolsim.spread.alternatives import REPLACED, band, basis_of, replaceable
from tolsim.spread.sampling import Factor, tables_of
from tolsim.spread.table import SpreadTable


@dataclass(frozen=True)
class Family:
    """One or more spread tables and the parts that follow them.

    Attributes
    ----------
    tables, parts : tuple of str
    bases : tuple of str
        Basis of each tolerance or lot law.
    lots : bool
        True if any of these laws is of whole lots.
    relative_sd : float
        Largest standard deviation of its laws, in half widths of their bands.
    """

    tables: tuple[str, ...]
    parts: tuple[str, ...]
    bases: tuple[str, ...]
    lots: bool
    relative_sd: float


def families(
    study: Study, tables: Mapping[str, SpreadTable], factors: Sequence[Factor]
) -> tuple[Family, ...]:
    """Families whose tolerance or lot laws leave anything to chance, in the order of the parts."""
    everyone = {**study.design.parts, **study.design.rails}
    groups: list[tuple[set[str], set[str], list[str]]] = []  # tables, reels, parts
    for ref, part in everyone.items():
        names = set(tables_of(study, ref))
        reel: str | None = getattr(part, "reel", None)
        reels = {reel} if reel else set()
        if not names:
            continue
        joined = [group for group in groups if group[0] & names or group[1] & reels]
        merged = (
            names.union(*(group[0] for group in joined)),
            reels.union(*(group[1] for group in joined)),
            [*(one for group in joined for one in group[2]), ref],
        )
        place = groups.index(joined[0]) if joined else len(groups)
        groups = [group for group in groups if group not in joined]
        groups.insert(place, merged)
    drawn = {factor.table for factor in factors}
    found = (_family(tables, sorted(names), refs) for names, _, refs in groups if names & drawn)
    return tuple(family for family in found if family.bases)


def metered(study: Study, tables: Mapping[str, SpreadTable]) -> tuple[Family, ...]:
    """Every table made of readings whose meter may be off, as a family of its own."""
    parts: dict[str, list[str]] = {}
    for ref in (*study.design.parts, *study.design.rails):
        for name in tables_of(study, ref):
            if any(spread.meter for spread in tables[name].quantities.values()):
                parts.setdefault(name, []).append(ref)
    return tuple(
        Family((name,), tuple(refs), (), lots=False, relative_sd=0.0)
        for name, refs in parts.items()
    )


def _family(tables: Mapping[str, SpreadTable], names: Sequence[str], refs: list[str]) -> Family:
    bases, widths, lots = [], [], False
    for name in names:
        for spread in tables[name].quantities.values():
            for aspect in REPLACED:
                law, basis = getattr(spread, aspect), basis_of(spread, aspect)
                if replaceable(law, basis):
                    low, high = band(law)
                    bases.append(basis)
                    widths.append(2.0 * law.sd / (high - low))
                    lots = lots or aspect == "lot"
    return Family(tuple(names), tuple(refs), tuple(bases), lots, max(widths, default=0.0))
