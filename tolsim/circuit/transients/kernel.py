"""The run of every unit from its start to its own end, compiled.

Steps are chosen on the rungs h, h/2, h/4 ... so that the estimated local error of every state
stays below a share of its scale.  After every window (about a period) the swing is looked at:
a unit ends when it swings as its orbit does, when it has gone quiet with no growth left, or when
its time is up.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats
from tolsim.circuit.stepper import GAMMA
from tolsim.circuit.transients.compiling import hot
from tolsim.circuit.transients.elements import FlatElements
from tolsim.circuit.transients.laws import Point, evaluate, new_point, unit_elements
from tolsim.circuit.transients.sources import Sources, SourceTable, unit_sources
from tolsim.circuit.transients.stepping import (
    LOCAL_ERROR,
    Circuit,
    Place,
    Rung,
    add_product,
    charge_state,
    final_part,
    make_ladder,
    new_place,
    rung_of,
    solve_stage,
    trapezoid_part,
)

RUNNING, SETTLED, QUIET, TIME_UP, LOST = 0, 1, 2, 3, 4
EASY = 1.0 / 16.0  # of the allowed error: a step twice as long makes 8 times as much
EASY_STEPS = 2  # in a row before a longer step is tried
MEMORY = 8  # windows a steady swing is compared over
FIRST_LOOK = 10  # windows before any end is considered


class Task(NamedTuple):
    """What is asked of N units."""

    x: Floats  # (N, n) states at the start
    step: Floats  # (N,) s, longest step
    window: Floats  # (N,) s
    begin: Floats  # (N,) s, time of the start on the sources' clock
    up: Floats  # (N,) s, when the sources have reached their final values
    limit: Floats  # (N,) s, when time is up
    hopeless: NDArray[np.bool_]  # (N,) no growth once everything is up: quiet means the end
    goal: Floats  # (N, n) peak-to-peak of each state on the orbit; NaN if unknown
    scale: Floats  # (n,) size of each state
    watch: NDArray[np.int64]  # (k,) recorded quantities among states then ports; first the swing
    rungs: int
    tolerance: float  # local error, share of the scale
    steady: float  # change over `MEMORY` windows that counts as none
    near: float  # share of the goal by which a settled swing may differ
    quiet: float  # share of the goal below which there is no swing


class Record(NamedTuple):
    """What is kept of N units."""

    ending: NDArray[np.int64]  # (N,)
    time: Floats  # (N,) s
    x: Floats  # (N, n) at the end
    reached: Floats  # (N,) s, when the swing first passed 90 % of the goal; NaN if never
    highest: Floats  # (N, n + p) over the whole run
    lowest: Floats  # (N, n + p)
    highest_at: Floats  # (N, n + p) s
    last_high: Floats  # (N, n + p) over the last window
    last_low: Floats  # (N, n + p)
    last_mean: Floats  # (N, n + p)
    energy: Floats  # (N, e) J, of every ramp element
    watch_high: NDArray[np.float32]  # (N, windows, k)
    watch_low: NDArray[np.float32]  # (N, windows, k)
    windows: NDArray[np.int64]  # (N,)
    steps: NDArray[np.int64]  # (N,)


class Past(NamedTuple):
    """Times and port voltages of the last step (start, inner stage, end), then of the next."""

    times: Floats  # (5,) s
    volts: Floats  # (5, p)
    x: Floats  # (n,) states at the inner stage of the last step


class Window(NamedTuple):
    """Running extremes and integral of the window in hand, and what the last ones were."""

    high: Floats  # (n + p,)
    low: Floats  # (n + p,)
    area: Floats  # (n + p,)
    swings: Floats  # (MEMORY, n) peak-to-peak of the last windows
    means: Floats  # (MEMORY, n)


@hot
def _guess(times: Floats, volts: Floats, time: float, out: Floats) -> None:
    """Quadratic through three points of the port voltages, (3,) and (3, p)."""
    for j in range(len(out)):
        out[j] = 0.0
    for i in range(3):
        weight = 1.0
        for k in range(3):
            if k != i:
                weight *= (time - times[k]) / (times[i] - times[k])
        for j in range(len(out)):
            out[j] += weight * volts[i, j]


@hot
def _local_error(
    past: Past, now: Floats, inner: Floats, end: Floats, scale: Floats, step: float
) -> float:
    """Largest estimated error of a step relative to the scales, from a third divided difference."""
    t = past.times
    a = 1.0 / ((t[1] - t[2]) * (t[1] - t[3]) * (t[1] - t[4]))
    b = 1.0 / ((t[2] - t[1]) * (t[2] - t[3]) * (t[2] - t[4]))
    c = 1.0 / ((t[3] - t[1]) * (t[3] - t[2]) * (t[3] - t[4]))
    d = 1.0 / ((t[4] - t[1]) * (t[4] - t[2]) * (t[4] - t[3]))
    worst = 0.0
    factor = LOCAL_ERROR * 6.0 * step**3
    for i in range(len(now)):
        third = a * past.x[i] + b * now[i] + c * inner[i] + d * end[i]
        worst = max(worst, abs(third) * factor / scale[i])
    return worst


@hot
def _observe(
    point: Point, time: float, step: float, unit: int, window: Window, record: Record
) -> None:
    """Extremes and integrals with a new point."""
    n = len(point.x)
    for i in range(len(window.high)):
        value = point.x[i] if i < n else point.v[i - n]
        window.area[i] += value * step
        window.high[i] = max(window.high[i], value)
        window.low[i] = min(window.low[i], value)
        if value > record.highest[unit, i]:
            record.highest[unit, i] = value
            record.highest_at[unit, i] = time
        record.lowest[unit, i] = min(record.lowest[unit, i], value)


@hot
def _add_energy(e: FlatElements, unit: int, at: Point, step: float, record: Record) -> None:
    """Energy each ramp element takes up in a step, J."""
    for row in range(e.ends[0]):
        if at.value[row] != 0.0:
            volts = 0.0
            for i in range(len(at.v)):
                volts += e.inject[i, row] * at.v[i]
            record.energy[unit, row] += step * at.value[row] * volts


@hot
def _close_window(
    task: Task, unit: int, count: int, time: float, span: float, window: Window, record: Record
) -> int:
    """Put a finished window away and say whether the unit has come to its end."""
    n = len(task.scale)
    for k in range(len(task.watch)):
        if count < record.watch_high.shape[1]:
            record.watch_high[unit, count, k] = window.high[task.watch[k]]
            record.watch_low[unit, count, k] = window.low[task.watch[k]]
    lead = task.watch[0]
    swing = window.high[lead] - window.low[lead]
    goal = task.goal[unit, lead]
    if np.isnan(record.reached[unit]) and swing >= 0.9 * goal:
        record.reached[unit] = time
    slot = count % MEMORY
    change, away = 0.0, 0.0
    for i in range(n):
        here = window.high[i] - window.low[i]
        mean = window.area[i] / span
        change = max(change, abs(here - window.swings[slot, i]) / task.scale[i])
        change = max(change, abs(mean - window.means[slot, i]) / task.scale[i])
        if task.goal[unit, i] > 0.1 * task.scale[i]:
            away = max(away, abs(here / task.goal[unit, i] - 1.0))
        window.swings[slot, i] = here
        window.means[slot, i] = mean
    for i in range(len(window.high)):
        record.last_high[unit, i] = window.high[i]
        record.last_low[unit, i] = window.low[i]
        record.last_mean[unit, i] = window.area[i] / span
        window.area[i] = 0.0
        window.high[i] = -np.inf
        window.low[i] = np.inf
    if count < FIRST_LOOK or time < task.up[unit]:
        return RUNNING
    if change < task.steady and swing > 0.5 * goal and away < task.near:
        return SETTLED
    if task.hopeless[unit] and swing < task.quiet * goal:
        return QUIET
    return RUNNING


@hot
def _take_step(
    rung: Rung,
    e: FlatElements,
    sources: Sources,
    place: Place,
    step: float,
    now: Point,
    inner: Point,
    end: Point,
    trial: Point,
    past: Past,
) -> bool:
    """One step from `now`; guesses for its ports come from the points of the past."""
    c, time = 0.5 * GAMMA * step, past.times[2]
    middle, last = time + GAMMA * step, time + step
    trapezoid_part(rung, sources, time, step, now, place.x_lin)
    _guess(past.times[:3], past.volts[:3], middle, inner.v)
    if not solve_stage(rung, c, e, place, inner, trial):
        return False
    final_part(rung, sources, last, now, inner, place.x_lin)
    past.times[3], past.times[4] = middle, last
    past.volts[3] = inner.v
    _guess(past.times[1:4], past.volts[1:4], last, end.v)
    return bool(solve_stage(rung, c, e, place, end, trial))


@hot
def _accept(now: Point, inner: Point, end: Point, past: Past) -> None:
    """The end of a step becomes the point it goes on from."""
    past.times[0], past.times[1], past.times[2] = past.times[2], past.times[3], past.times[4]
    past.volts[0] = now.v
    past.volts[1] = inner.v
    past.volts[2] = end.v
    past.x[:] = inner.x
    now.x[:] = end.x
    now.y[:] = end.y
    now.v[:] = end.v
    now.f[:] = end.f
    now.q[:] = end.q
    now.value[:] = end.value


@hot
def _begin(
    task: Task, unit: int, e: FlatElements, place: Place, rung: Rung
) -> tuple[Point, Past, Window]:
    """The first point; before it there is no past: points at equal voltages stand in for it."""
    n, p = task.x.shape[1], len(place.v0)
    now = new_point(n, p, len(e.numbers))
    now.x[:] = task.x[unit]
    now.v[:] = place.v0
    add_product(place.D, now.x, 1.0, now.v)
    evaluate(e, now)
    charge_state(rung, now)
    past = Past(np.zeros(5), np.zeros((5, p)), now.x.copy())
    for k in range(3):
        past.times[k] = task.begin[unit] - (2 - k) * task.step[unit]
        past.volts[k] = now.v
    wide = n + p
    high, low = np.full(wide, -np.inf), np.full(wide, np.inf)
    return (
        now,
        past,
        Window(high, low, np.zeros(wide), np.zeros((MEMORY, n)), np.zeros((MEMORY, n))),
    )


@hot
def _run_unit(
    unit: int,
    circuit: Circuit,
    e: FlatElements,
    sources: Sources,
    matrix: Floats,
    task: Task,
    record: Record,
) -> None:
    """Step one unit from its start to its end."""
    lowest = task.rungs - 1
    ladder = make_ladder(circuit, matrix, unit, task.step[unit], task.rungs)
    k = lowest  # begin with the shortest step
    place = new_place(circuit.D, circuit.v0[unit])
    now, past, window = _begin(task, unit, e, place, rung_of(ladder, k))
    n, p = len(now.x), len(now.v)
    inner, end = new_point(n, p, len(e.numbers)), new_point(n, p, len(e.numbers))
    trial = new_point(n, p, len(e.numbers))
    opened, windows, easy, steps, ending = past.times[2], 0, 0, 0, RUNNING
    while ending == RUNNING:
        step, rung = task.step[unit] * 0.5**k, rung_of(ladder, k)
        sound = _take_step(rung, e, sources, place, step, now, inner, end, trial, past)
        error = 0.0
        if sound and steps > 0:
            error = _local_error(past, now.x, inner.x, end.x, task.scale, step) / task.tolerance
        steps += 1
        if k < lowest and (not sound or error > 1.0):
            k, easy = k + 1, 0
            charge_state(rung_of(ladder, k), now)
            continue
        if not sound:
            ending = LOST
            break
        _accept(now, inner, end, past)
        easy = easy + 1 if error < EASY else 0
        if easy >= EASY_STEPS and k > 0:
            k, easy = k - 1, 0
            charge_state(rung_of(ladder, k), now)
        time = past.times[2]
        _observe(now, time, step, unit, window, record)
        _add_energy(e, unit, now, step, record)
        if time - opened >= task.window[unit] * (1.0 - 1e-9):
            ending = _close_window(task, unit, windows, time, time - opened, window, record)
            opened, windows = time, windows + 1
            if ending == RUNNING and time >= task.limit[unit]:
                ending = TIME_UP
    record.ending[unit] = ending
    record.time[unit] = past.times[2]
    record.x[unit] = now.x
    record.windows[unit] = windows
    record.steps[unit] = steps


@hot
def run_all(
    circuit: Circuit, e: FlatElements, table: SourceTable, task: Task, record: Record
) -> None:
    """Run unit after unit."""
    for unit in range(task.x.shape[0]):
        matrix = np.ascontiguousarray(table.matrix[unit])
        sources, own = unit_sources(table, unit), unit_elements(e, unit)
        _run_unit(unit, circuit, own, sources, matrix, task, record)
