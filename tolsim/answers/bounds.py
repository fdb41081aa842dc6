"""What each limit of a study means for each part, in the figure's own unit of measure."""

from __future__ import annotations

from dataclasses import dataclass

from tolsim.design import Limit, Study
from tolsim.figure_names import RAIL, STAGE, TRIM, FigureInfo, figure_of


@dataclass(frozen=True)
class Bound:
    """Limit number `limit` of the study, for one part.

    Attributes
    ----------
    limit : int
        Index into `study.limits`.
    part : str
        Reference designator; empty for a figure of the whole stage.
    column : str
        Where the figure stands in the rows of results.
    at_most, at_least : float or None
        In the figure's unit of measure (SI; degC).
    """

    limit: int
    part: str
    column: str
    figure: FigureInfo
    at_most: float | None
    at_least: float | None


def owner_of(study: Study, part: str) -> str:
    """Owner of the figures of `part`: "stage" (empty name), "rail", "trim" or the kind of part."""
    if not part:
        return STAGE
    if part in study.trims:
        return TRIM
    if part in study.design.rails:
        return RAIL
    return study.design.parts[part].kind


def rating_of(study: Study, part: str, figure: FigureInfo) -> float | None:
    """Rating the figure of this part is compared with, if the part has one."""
    if figure.rating is None or part not in study.design.parts:
        return None
    rating: float | None = getattr(study.design.parts[part].rating, figure.rating)
    return rating


def applies(limit: Limit, condition: str, state: str) -> bool:
    """Tell whether the limit counts in this condition and state."""
    return (not limit.conditions or condition in limit.conditions) and (
        not limit.states or state in limit.states
    )


def bounds(study: Study) -> tuple[Bound, ...]:
    """Every limit spelled out part by part, in the order of the study.

    A limit on a share of the rating skips parts without that rating when it names no parts;
    the study check has already refused it for parts it does name.
    """
    found: list[Bound] = []
    everyone = ["", *study.design.rails, *study.design.parts, *study.trims]
    for index, limit in enumerate(study.limits):
        for part in limit.parts or everyone:
            figure = figure_of(owner_of(study, part), limit.figure)
            if figure is None:
                continue
            at_most = limit.at_most
            if limit.share_of_rating is not None:
                rating = rating_of(study, part, figure)
                if rating is None:
                    continue
                share = limit.share_of_rating * rating
                at_most = share if at_most is None else min(share, at_most)
            column = figure.column(part)
            found.append(Bound(index, part, column, figure, at_most, limit.at_least))
    return tuple(found)


def named_figure(study: Study, column: str) -> tuple[str, FigureInfo] | None:
    """Part and figure of a column; None for a column that is no known figure."""
    part, _, name = column.rpartition(".")
    known = (study.design.parts, study.design.rails, study.trims)
    if part and not any(part in names for names in known):
        return None
    figure = figure_of(owner_of(study, part), name)
    return None if figure is None else (part, figure)
