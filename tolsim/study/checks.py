"""Tables of a study must fit together: names must exist, the stage must be of one kind.

Limits and rankings have their own checks (`tolsim.study.limits`), so have the nets
(`tolsim.study.nets`).
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from tolsim.errors import Problem
from tolsim.parts import PART_KINDS, Coupling, Load, Rating
from tolsim.study.outline import Outline

_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]*")
_TITLE = re.compile(r"[A-Za-z0-9][A-Za-z0-9_ -]*")


def study_problems(outline: Outline) -> Iterator[Problem]:
    """Every mistake in names, spread tables, couplings and the kind of stage."""
    yield from _names(outline)
    yield from _stage(outline)
    yield from _spread(outline)
    yield from _coupled_parts(outline)
    yield from _ratings(outline)


def _names(outline: Outline) -> Iterator[Problem]:
    groups = (
        ("parts", outline.parts, _NAME, "letters, digits and _, a letter first"),
        ("rails", outline.rails, _NAME, "letters, digits and _, a letter first"),
        ("states", outline.states, _TITLE, "letters, digits, blanks, - and _"),
        ("conditions", outline.conditions, _TITLE, "letters, digits, blanks, - and _"),
    )
    for section, tables, pattern, signs in groups:
        for name in tables:
            if not pattern.fullmatch(name):
                yield outline.problem(section, "", f'the name "{name}"', f"a name of {signs}")
    for name in outline.rails:
        if name in outline.parts:
            yield outline.problem(
                f"rails.{name}", "", f'the name "{name}" of a part', "a name of its own"
            )


def _stage(outline: Outline) -> Iterator[Problem]:
    """A stage is either driven or starts by itself in some state of its load."""
    drives = [ref for ref, kind in outline.kinds.items() if kind == "drive"]
    starts = [name for name, table in outline.states.items() if table.get("starts_here") is True]
    if not outline.rails:
        yield outline.problem("rails", "", "none", "at least one rail", "Add [rails.vdd].")
    if "mosfet" not in outline.kinds.values() and len(outline.kinds) >= len(outline.parts):
        yield outline.problem("parts", "", "none", "at least one part of kind mosfet")
    if outline.driven:
        if not drives:
            yield outline.problem(
                "parts", "", "none", 'a part of kind drive, since kind = "driven"'
            )
        for name in starts:
            yield outline.problem(
                f"states.{name}", "starts_here", "true", "no start in a driven stage", "Drop it."
            )
        return
    for ref in drives:
        yield outline.problem(
            f"parts.{ref}",
            "kind",
            '"drive"',
            "no drive in a self-oscillating stage",
            'Drop it, or write kind = "driven" at the top of the file.',
        )
    if outline.states and not starts:
        yield outline.problem(
            "states",
            "",
            "none",
            "a state with starts_here = true",
            "Say in which state of its load the stage is switched on.",
        )


def _spread(outline: Outline) -> Iterator[Problem]:
    """Spread tables exist and are for the kind of part they are used for."""
    for section, tables in (("parts", outline.parts), ("rails", outline.rails)):
        for ref, table in tables.items():
            if "spread" in table:
                yield from _table(outline, f"{section}.{ref}", "spread", ref, table["spread"])
    for name, state in outline.states.items():
        overrides = state.get("spread", {})
        for ref, table in (overrides if isinstance(overrides, dict) else {}).items():
            place = f"states.{name}.spread"
            if ref in outline.parts or ref in outline.rails:
                yield from _table(outline, place, ref, ref, table)
            else:
                valid = [*outline.parts, *outline.rails]
                yield outline.unknown(place, ref, ref, "a part or rail", valid)


def _table(outline: Outline, place: str, key: str, ref: str, name: object) -> Iterator[Problem]:
    kind = outline.kinds.get(ref)
    if kind is None or not isinstance(name, str):
        return
    suited = [table for table, kinds in outline.tables.items() if kind in kinds]
    if name not in outline.tables:
        cure = "See the list with: tolsim tables"
        yield outline.unknown(place, key, name, "a known spread table", suited, cure)
    elif name not in suited:
        cure = f"'{name}' is for {', '.join(sorted(outline.tables[name]))}."
        yield outline.problem(place, key, f'"{name}"', f"a spread table for {kind}", cure)


def _coupled_parts(outline: Outline) -> Iterator[Problem]:
    """Couplings and loads name inductors, each pair once."""
    inductors = [ref for ref, kind in outline.kinds.items() if kind == "inductor"]
    pairs: dict[frozenset[str], str] = {}
    for ref, kind in outline.kinds.items():
        table = outline.parts.get(ref, {})
        named: dict[str, Any] = {"coupling": table.get("inductors"), "load": [table.get("coil")]}
        refs = named.get(kind)
        if not isinstance(refs, list):
            continue
        key = "inductors" if kind == "coupling" else "coil"
        for name in refs:
            if isinstance(name, str) and name not in inductors:
                yield outline.unknown(f"parts.{ref}", key, name, "an inductor", inductors)
        if kind == "load" or not all(isinstance(name, str) for name in refs):
            continue
        pair = frozenset(refs)
        if len(pair) < len(refs):
            yield outline.problem(
                f"parts.{ref}", key, f"{refs[0]} twice", "two different inductors"
            )
        elif pair in pairs:
            yield outline.problem(
                f"parts.{ref}", key, f"the pair of {pairs[pair]}", "a pair not coupled yet"
            )
        pairs[pair] = ref


def _ratings(outline: Outline) -> Iterator[Problem]:
    """Ratings that parts of this kind have."""
    for ref, part in outline.parts.items():
        model = PART_KINDS.get(outline.kinds.get(ref, ""))
        rating = part.get("rating")
        if model is None or not isinstance(rating, dict):
            continue
        for key in rating:
            if key in Rating.model_fields and key not in model.RATINGS:
                what = f"a rating that {outline.kinds[ref]} has"
                yield outline.unknown(f"parts.{ref}.rating", key, key, what, model.RATINGS)


def coupling_problems(
    outline: Outline, parts: Mapping[str, object], values: Mapping[str, Mapping[str, float]]
) -> Iterator[Problem]:
    """Sets of couplings that no real coils can have, in any state of the load.

    The inductance matrix of coupled coils is positive definite, or they would give energy
    without end; with coefficients k the condition is that of the matrix (1, k; k, 1).

    Parameters
    ----------
    outline : Outline
        Of the study file.
    parts : mapping
        Records of the parts that could be read.
    values : mapping
        Overrides "REF.quantity" of each state; one without overrides is the design itself.
    """
    told: set[str] = set()
    for state, overrides in {"": {}, **values}.items():
        pairs = []
        for ref, part in parts.items():
            if isinstance(part, Coupling | Load):
                one, other = part.inductors if isinstance(part, Coupling) else (part.coil, ref)
                k = overrides.get(f"{ref}.coupling", part.coupling)
                pairs.append((one, other, k, ref))
        for refs in _groups(pairs):
            group = [pair for pair in pairs if pair[3] in refs]
            key = ", ".join(sorted(refs))
            if _possible(group) or key in told:
                continue
            told.add(key)
            yield outline.problem(
                f"states.{state}.values" if state else f"parts.{group[0][3]}",
                "coupling",
                ", ".join(f"{one}-{other} {k:g}" for one, other, k, _ in group),
                "couplings that real coils can have together",
                "Measure them again: each is possible alone, together they are not.",
            )


def _groups(pairs: list[tuple[str, str, float, str]]) -> list[set[str]]:
    """References of the couplings that share coils, directly or through others."""
    groups: list[tuple[set[str], set[str]]] = []  # coils, references
    for one, other, _, ref in pairs:
        coils, refs = {one, other}, {ref}
        apart = []
        for group in groups:
            if group[0] & coils:
                coils, refs = coils | group[0], refs | group[1]
            else:
                apart.append(group)
        groups = [*apart, (coils, refs)]
    return [refs for _, refs in groups]


def _possible(pairs: list[tuple[str, str, float, str]]) -> bool:
    """True if the matrix of coupling coefficients is positive definite."""
    coils = sorted({coil for one, other, _, _ in pairs for coil in (one, other)})
    matrix = np.eye(len(coils))
    for one, other, k, _ in pairs:
        i, j = coils.index(one), coils.index(other)
        if i != j:
            matrix[i, j] = matrix[j, i] = k
    return bool(np.linalg.eigvalsh(matrix)[0] > 0.0)
