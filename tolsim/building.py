"""Building the units of a run: shared out among worker processes, stored chunk by chunk."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pandas as pd
from joblib import Parallel, cpu_count, delayed

from tolsim.answers.unit_files import Columns, FrameColumns, UnitFiles
from tolsim.evaluation import Chunk, Plan, evaluate, evaluate_stored, store_chunk
from tolsim.workers import on_disk

BLOCK = 128  # units solved and measured side by side
TOGETHER = 4  # blocks in one task and one file, at most: a killed run loses no more per job
LAST_TASKS = 2  # per job that are made short, so that no job is left waiting for another

Progress = Callable[[int, int], None]
Task = tuple[int, int]  # first unit, number of units


def build_units(
    plan: Plan, jobs: int | None, store: UnitFiles | None, progress: Progress | None
) -> tuple[Columns, Columns]:
    """Evaluate all units that are not stored yet.

    Parameters
    ----------
    jobs : int, optional
        Worker processes; all cores if None.
    store : UnitFiles, optional
        Where finished chunks are kept; in memory if None.
    progress : callable, optional
        Called with (finished units, all units).

    Returns
    -------
    tuple of Columns
        Rows of units, factor values.
    """
    units = plan.study.run.units
    kept = {} if store is None else _kept(store, units)
    tasks = share_out(kept, units, jobs or cpu_count(), _together(plan))
    done = units - sum(count for _, count in tasks)
    if progress is not None:
        progress(done, units)
    chunks: list[Chunk] = []
    for chunk in _evaluated(plan, tasks, jobs, None if store is None else store.folder):
        if isinstance(chunk, Chunk):
            chunks.append(chunk)
        done += chunk if isinstance(chunk, int) else len(chunk.factors)
        if progress is not None:
            progress(done, units)
    if store is not None:
        store.merge()
        return store.units(), store.factors()
    chunks.sort(key=lambda chunk: chunk.first)
    rows = pd.concat([chunk.rows for chunk in chunks], ignore_index=True)
    table = pd.concat([chunk.factors for chunk in chunks], ignore_index=True)
    return FrameColumns(rows), FrameColumns(table)


def _kept(store: UnitFiles, units: int) -> dict[int, int]:
    """Finished chunks that fit this run; others, of a shorter or longer run, are removed."""
    kept: dict[int, int] = {}
    end = 0
    for first, count in store.finished().items():
        whole = count % BLOCK == 0 or first + count == units
        if whole and first % BLOCK == 0 and end <= first and first + count <= units:
            kept[first] = count
            end = first + count
        else:
            store.remove_chunk(first)
    return kept


def _together(plan: Plan) -> int:
    """Blocks worth evaluating together: shooting gains nothing by it."""
    return TOGETHER if any(choice.plan is not None for choice in plan.choices.values()) else 1


def share_out(kept: dict[int, int], units: int, jobs: int, together: int) -> list[Task]:
    """Tasks for the units that are missing, the last ones shorter if several jobs share them.

    Blocks that follow each other go together, up to `together` of them: the solver then keeps its
    slots busy, and files are fewer.
    """
    there = {place for first, count in kept.items() for place in range(first, first + count, BLOCK)}
    places = [place for place in range(0, units, BLOCK) if place not in there]
    tasks = []
    while places:
        most = together if jobs == 1 else len(places) // (LAST_TASKS * jobs)
        first = places.pop(0)
        end = first + BLOCK
        while places and places[0] == end and end - first < min(most, together) * BLOCK:
            end = places.pop(0) + BLOCK
        tasks.append((first, min(end, units) - first))
    return tasks


def _evaluated(
    plan: Plan, tasks: list[Task], jobs: int | None, folder: Path | None
) -> Iterator[Chunk | int]:
    """Chunks as they finish, or the number of their units where they went into the folder."""
    if jobs == 1 or len(tasks) <= 1:
        for first, count in tasks:
            chunk = evaluate(plan, first, count, BLOCK)
            yield chunk if folder is None else store_chunk(folder, chunk)
        return
    with on_disk(plan) as plan_file:
        work = Parallel(n_jobs=jobs or -1, return_as="generator_unordered")
        yield from work(
            delayed(evaluate_stored)(plan_file, folder, first, count, BLOCK)
            for first, count in tasks
        )
