"""Words of a spread table for what depends on what: `tracking` in a reel, `follows` in a part.

temperature = {law = "linear", slope = ..., tracking = 0.9}     # parts of one reel drift alike
follows = {threshold = -0.4, basis = "guess", source = "..."}   # beside tolerance and lot
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping

from tolsim.errors import Mistake, nearest_name
from tolsim.spread.dependence import correlation_matrix, is_possible
from tolsim.spread.table import FOLLOWING, QuantitySpread, correlations

Report = Callable[[Mistake], None]


def read_tracking(words: Mapping[str, object], aspect: str, report: Report) -> float | None:
    """Correlation of an aspect between parts of one reel; None if it is not stated."""
    if "tracking" not in words:
        return None
    given = words["tracking"]
    key = f"{aspect}.tracking"
    if aspect == "lot" or words.get("shared") == "reel":
        report(Mistake("no tracking: a reel shares this law as a whole", key=key, got=f"{given}"))
        return None
    number = _number(given)
    if number is None or not 0.0 < number < 1.0:
        cure = 'For parts that drift as one write shared = "reel".'
        report(Mistake("a correlation above 0 and below 1", cure, key=key, got=f"{given!r}"))
        return None
    return number


def read_follows(given: object, report: Report) -> dict[str, float]:
    """Quantities a quantity follows, with correlations; their origin is read elsewhere."""
    if not isinstance(given, Mapping):
        want = "a table like {threshold = -0.4}"
        report(Mistake(want, key="follows", got=f"{given!r}"))
        return {}
    found = {}
    for name, value in given.items():
        if name in ("basis", "source"):
            continue
        number = _number(value)
        if number is None or not -1.0 < number < 1.0 or number == 0.0:
            want = "a correlation between -1 and 1, other than 0"
            report(Mistake(want, key=f"follows.{name}", got=f"{value!r}"))
        else:
            found[str(name)] = number
    return found


def _number(value: object) -> float | None:
    return float(value) if isinstance(value, int | float) and not isinstance(value, bool) else None


def dependence_mistakes(quantities: Mapping[str, QuantitySpread]) -> Iterator[Mistake]:
    """What does not fit together between the quantities of one entry."""
    for name, spread in quantities.items():
        key = f"{name}.follows"
        for leader in spread.follows:
            valid = [other for other in quantities if other != name]
            if leader not in valid:
                near, want = nearest_name(leader, valid), "another quantity of this entry"
                yield Mistake(want, key=key, got=f'"{leader}"', nearest=near)
            elif not any(spread.drawn(a) and quantities[leader].drawn(a) for a in FOLLOWING):
                want = f"a tolerance or a lot law of both {name} and {leader}"
                yield Mistake(want, key=key, got="no aspect that both have")
            elif name in quantities[leader].follows:
                yield Mistake(f"the pair named once, as in {leader}", key=key, got="it twice")
        if "tolerance" in spread.tracking and any(
            name in pair for pair in correlations(quantities)
        ):
            want = "either tracking of the tolerance or follows"
            yield Mistake(want, "The lot law already makes parts alike.", key=key, got="both")
    if not is_possible(correlation_matrix(list(quantities), correlations(quantities))):
        got = ", ".join(f"{a}-{b} {rho:g}" for (a, b), rho in correlations(quantities).items())
        want = "correlations that can hold together"
        yield Mistake(want, "Each may be possible alone.", key="follows", got=got)
