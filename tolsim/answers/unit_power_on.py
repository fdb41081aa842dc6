"""The power-on of one unit in sentences; every number is read off its track."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from tolsim.answers.wording import measured, shown
from tolsim.circuit.device_groups import feed_branch
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.otherwise import Remedy, nearest
from tolsim.circuit.thermal import mosfets
from tolsim.design import Design
from tolsim.figures.track import Track

STILL = 0.002  # change of the swing per window that counts as none, relative
NONE = 1e-4  # of the orbit's swing: less is no swing
PER_MICROSECOND = 1e-6
MOST_REMEDIES = 4
LEAST_SHARE = 0.01  # of a rating: less is not worth telling as one


def power_on_story(design: Design, track: Track) -> list[str]:
    """What became of the unit, what it was doing when all its gates came on, and what it means."""
    story = [track.fate.sentence]
    if track.fate == Fate.STARTS:
        story[0] = (
            f"Switched on from zero charge, it reaches 90 % of its swing after"
            f" {shown(track.figures['power_on_time'], 's')}."
        )
    else:
        story += _turning_point(design, track)
    peaks = _peaks(design, track)
    if peaks:
        story.append(f"On the way {peaks}.")
    return [*story, *_latch(design, track)]


def parting_sentence(design: Design, track: Track, other: Track, who: str) -> str:
    """Where the unit first goes another way than another one."""
    if other.fate == track.fate:
        return f"Switched on in time, {who} does the same: its pass rests on its modes alone."
    parting = track.parts_from(other)
    if parting is None:
        return f"Its envelopes stay within 20 % of those of {who}."
    when, name = parting
    return f"It parts from {who} after {shown(when, 's')}: {words_of(design, name)} first."


def words_of(design: Design, name: str) -> str:
    """A watched quantity for people: "Q1 gate", "L2 current", "net d"."""
    ref, _, end = name.partition(":")
    if end in ("gs", "ds"):
        return f"{ref} {'gate' if end == 'gs' else 'drain'}"
    if end == "feed":
        return f"current of rail {ref}"
    if end:
        return f"{ref} inside ({end})"
    return f"{ref} current" if ref in design.parts else f"net {name}"


def _turning_point(design: Design, track: Track) -> Iterator[str]:
    """The moment from which every gate stays above its threshold."""
    place = track.all_on
    every = len(track.thresholds) > 1
    if place is None:
        who = "do all gates stay" if every else "does its gate stay"
        yield f"At no time {who} above threshold for a whole period."
        return
    gates = ", ".join(
        f"{ref} {measured(float(track.middle(f'{ref}:gs')[place]), 'V')}"
        f" over {measured(volts, 'V')}"
        for ref, volts in track.thresholds.items()
    )
    who = "every gate stays" if every else "the gate stays"
    rising = track.time[place] < track.integrated_from
    when = "while the supply still rises" if rising else "for a whole period"
    yield (
        f"At {shown(track.time[place], 's')} {who} above threshold {when} ({gates});"
        f" {_swing(design, track, place)}{_current(design, track, place)}."
    )
    rate = float(track.growth[place])
    grows = "grows" if rate > 0 else "decays"
    yield f"At the supply of that moment a small swing {grows} at {shown(abs(rate), '1/s')}."
    yield _best_growth(track)


def _best_growth(track: Track) -> str:
    """Whether the supply passed through a point where a small swing grows."""
    best = int(np.argmax(track.growth))
    rate, last = float(track.growth[best]), float(track.growth[-1])
    if rate <= 0:
        return (
            f"A small swing grows at no point of the ramp; it decays at"
            f" {shown(-rate, '1/s')} or faster."
        )
    end = f"grows at {shown(last, '1/s')}" if last > 0 else f"decays at {shown(-last, '1/s')}"
    return (
        f"A small swing grows fastest at {shown(track.time[best], 's')}"
        f" ({shown(rate, '1/s')}) and {end} in the end."
    )


def _swing(design: Design, track: Track, place: int) -> str:
    """The swing then, and which way it goes."""
    who, swing = f"swing of {words_of(design, track.lead)}", float(track.swing[place])
    if swing < NONE * track.wanted:
        return f"no {who} to speak of yet"
    slope = track.slope(track.swing, place)
    window = float(np.diff(track.time).min(initial=np.inf))
    steady = abs(slope) * window < STILL * swing
    way = "steady" if steady else "rising" if slope > 0 else "falling"
    return f"{who} {shown(swing, 'A' if track.lead in track.currents else 'V')} and {way}"


def _current(design: Design, track: Track, place: int) -> str:
    """The largest inductor current then, and how fast it changes."""
    feeds = {feed_branch(name) for name in design.rails}
    names = [name for name in track.currents if name not in feeds]
    if not names:
        return ""
    name = max(names, key=lambda one: abs(track.middle(one)[place]))
    slope = track.slope(track.middle(name), place) * PER_MICROSECOND
    way = "rising" if slope > 0 else "falling"
    return (
        f"; {words_of(design, name)} {shown(float(track.middle(name)[place]), 'A')} {way}"
        f" {shown(abs(slope), 'A')}/us"
    )


def _peaks(design: Design, track: Track) -> str:
    found = []
    for ref, part in mosfets(design).items():
        for figure, word, rating in (
            ("power_on_drain_peak", "drain", part.rating.drain_voltage),
            ("power_on_gate_peak", "gate", part.rating.gate_voltage),
        ):
            value = track.figures.get(f"{ref}.{figure}", np.nan)
            known = rating is not None and value >= LEAST_SHARE * rating
            share = f" ({100 * value / rating:.0f} % of its rating)" if rating and known else ""
            found.append(f"{ref} {word} peaks at {shown(value, 'V')}{share}")
    return ", ".join(found)


def _latch(design: Design, track: Track) -> Iterator[str]:
    """What a latch draws, and whether the supply trips before a junction is too hot."""
    if track.fate != Fate.LATCHED:
        return
    yield f"It ends with {shown(track.figures['latch_current'], 'A')} from the supply."
    limits = {ref: part.rating.junction_temperature for ref, part in mosfets(design).items()}
    times = {ref: track.figures.get(f"{ref}.latch_damage_time", np.nan) for ref in limits}
    known = {ref: time for ref, time in times.items() if np.isfinite(time)}
    if not known:
        if any(limits.values()):
            yield "No junction passes its limit so."
        return
    first = min(known, key=lambda ref: known[ref])
    limit = shown(limits[first], "degC")
    yield f"{first} passes its junction limit of {limit} {shown(known[first], 's')} later."
    for name, rail in design.rails.items():
        if rail.trip_time is not None:
            late = rail.trip_time > known[first]
            yield (
                f"Rail {name} trips after {shown(rail.trip_time, 's')}:"
                f" {'too late' if late else 'in time'}."
            )


def remedy_sentences(found: Sequence[Remedy]) -> list[str]:
    """What single change would have made it start; what was tried in vain."""
    helps = nearest(found)[:MOST_REMEDIES]
    if not helps:
        tried = ", ".join(f"{_name(one)} to {_at(one, one.fails_at)}" for one in found)
        return [f"No single change that was tried makes it start: {tried}."]
    story = ["It would have started with one of these changes, each alone:"]
    for one in helps:
        assert one.starts_at is not None
        story.append(
            f"  {_name(one)} {_at(one, one.starts_at)} instead of {_at(one, one.own)}"
            f" (not yet with {_at(one, one.fails_at)})."
        )
    return story


def _name(one: Remedy) -> str:
    words = {
        "ramp": f"ramp of rail {one.knob.name}",
        "supply": f"rail {one.knob.name}",
        "bias": f"bias rail {one.knob.name}",
        "setting": f"setting of {one.knob.name}",
    }
    return words[one.knob.kind]


def _at(one: Remedy, place: float) -> str:
    if one.knob.kind == "ramp":
        return shown(place, "s")
    return f"{100 * place:.1f} %" if one.knob.kind == "setting" else shown(place, "V")
