"""What measured reels tell, in sentences."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tolsim.answers.wording import shown

Summary = Mapping[str, Any]
Entry = Mapping[str, Any]
POOR_FIT = 0.05  # below which a shape fits worse than chance would have it


def amount(value: float, unit: str) -> str:
    """Value or deviation with its unit of measure."""
    return f"{100.0 * value:.3g} %" if unit == "share" else shown(value, unit)


def heading(entry: Entry) -> str:
    """Which reel it is."""
    return f"{', '.join(entry['parts'])}: {entry['quantity']} from {entry['file']}"


def reel_sentences(summary: Summary) -> Iterator[str]:
    """Every measured reel in two or three sentences."""
    for entry in summary.get("reels") or ():
        yield f"{heading(entry)}. {' '.join(entry_sentences(entry))}"


def entry_sentences(entry: Entry) -> Iterator[str]:
    """One reel: the readings, their shape, and what is expected of the next piece."""
    unit = entry["unit_of_measure"]
    noise = entry["meter_noise"]
    taken = f", {amount(noise, unit)} of it meter noise" if noise else ""
    yield (
        f"{entry['pieces']} pieces, mean {amount(entry['mean'], unit)}, standard deviation "
        f"{amount(entry['sd'], unit)}{taken}."
    )
    if entry["fit_p"] is not None:
        shape = "lognormal" if entry["shape"] == "lognormal" else "normal"
        fits = "fits" if entry["fit_p"] >= POOR_FIT else "does not fit"
        yield f"A {shape} shape {fits} (Anderson-Darling, p = {entry['fit_p']:.2g})."
    coming = entry["next"]
    ends = f"{amount(coming['low'], unit)} to {amount(coming['high'], unit)}"
    yield f"The next piece is expected at {ends}."
    if entry["meter_bias"]:
        bias = amount(entry["meter_bias"], unit)
        yield f"The meter may be off by up to {bias}, the same for all of them."
    for remark in entry["remarks"]:
        yield f"{remark[0].upper()}{remark[1:]}."
