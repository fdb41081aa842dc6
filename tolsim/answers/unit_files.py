"""Rows of units on disk: chunks that survive a killed run, merged files, one column at a time.

A results folder holds `chunks/units-0000000.parquet` and `chunks/factors-0000000.parquet`
(the number is the first unit) while a run goes on, and `units.parquet` and
`factors.parquet` when it is done.  Every file appears under its name only when complete.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from tolsim.errors import RequestError

KEY_COLUMNS = (
    *("unit", "condition", "state", "verdict", "outcome", "failed_limits", "status"),
    "power_on",
)


class Columns(Protocol):
    """A table read one column at a time, whatever its size."""

    @property
    def names(self) -> tuple[str, ...]:
        """Column names in order."""

    def column(self, name: str) -> pd.Series[Any]:
        """One whole column."""


@dataclass(frozen=True)
class FrameColumns:
    """Columns of a table in memory."""

    frame: pd.DataFrame

    @property
    def names(self) -> tuple[str, ...]:
        """Column names in order."""
        return tuple(str(name) for name in self.frame.columns)

    def column(self, name: str) -> pd.Series[Any]:
        """One whole column."""
        return self.frame[name].reset_index(drop=True)


def damaged(path: Path) -> RequestError:
    """What to say of a file of a results folder that cannot be read."""
    return RequestError(f"'{path}' is damaged. Run the study again into another folder.")


@dataclass(frozen=True)
class FileColumns:
    """Columns of one or several parquet files of the same layout, one below the other."""

    paths: tuple[Path, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """Column names in order; empty without files."""
        return tuple(pq.read_schema(self.paths[0]).names) if self.paths else ()

    def check(self) -> None:
        """Look whether every file can be read at all.

        Raises
        ------
        RequestError
            Naming the first that cannot.
        """
        for path in self.paths:
            try:
                pq.read_schema(path)
            except pa.ArrowInvalid:
                raise damaged(path) from None

    def column(self, name: str) -> pd.Series[Any]:
        """One whole column; nothing else is read."""
        parts = [pq.read_table(path, columns=[name]).column(0) for path in self.paths]
        chunks = [chunk for part in parts for chunk in part.chunks]
        series: pd.Series[Any] = pa.chunked_array(chunks).to_pandas()
        return series

    def frame(self) -> pd.DataFrame:
        """All columns of all rows at once."""
        if not self.paths:
            return pd.DataFrame()
        return pd.concat([pd.read_parquet(path) for path in self.paths], ignore_index=True)


@dataclass(frozen=True)
class UnitFiles:
    """The unit and factor files of one results folder."""

    folder: Path

    def write_chunk(self, first: int, rows: pd.DataFrame, factors: pd.DataFrame) -> None:
        """Store one finished chunk; a kill at any moment leaves it whole or absent.

        Parameters
        ----------
        first : int
            Number of the first unit of the chunk.
        rows : DataFrame
            One row per unit, condition and state.
        factors : DataFrame
            One row per unit: `unit` and the value of every factor.
        """
        (self.folder / "chunks").mkdir(parents=True, exist_ok=True)
        # Factors first: a chunk counts as finished when its units file is there.
        for name, table in (("factors", factors), ("units", rows)):
            with _Arriving(self._chunk(name, first)) as part:
                columns = pa.Table.from_pandas(table, preserve_index=False)
                pq.write_table(columns, part, use_dictionary=_repeated(columns.schema))

    def remove_chunk(self, first: int) -> None:
        """Remove a chunk, its units first: what is left of it counts as not finished."""
        for name in ("units", "factors"):
            self._chunk(name, first).unlink(missing_ok=True)

    def finished(self) -> dict[int, int]:
        """Finished chunks: first unit and number of units of each, in order."""
        found = {}
        for path in self._chunks("factors"):
            first = int(path.stem.split("-")[1])
            if (path.parent / f"units-{first:07d}.parquet").exists():
                try:
                    found[first] = pq.read_metadata(path).num_rows
                except pa.ArrowInvalid:
                    raise damaged(path) from None
        return found

    def merge(self) -> None:
        """Make `units.parquet` and `factors.parquet` from the finished chunks, one at a time."""
        for name in ("units", "factors"):
            paths = [self._chunk(name, first) for first in self.finished()]
            schema = pq.read_schema(paths[0])
            with (
                _Arriving(self.folder / f"{name}.parquet") as part,
                pq.ParquetWriter(part, schema, use_dictionary=_repeated(schema)) as writer,
            ):
                for path in paths:
                    writer.write_table(pq.read_table(path).cast(schema))

    def units(self) -> FileColumns:
        """Rows of units: the merged file if there is one, else the finished chunks."""
        return self._columns("units")

    def factors(self) -> FileColumns:
        """Factor values of units: the merged file if there is one, else the finished chunks."""
        return self._columns("factors")

    def _columns(self, name: str) -> FileColumns:
        merged = self.folder / f"{name}.parquet"
        if merged.exists():
            return FileColumns((merged,))
        finished = self.finished()
        return FileColumns(tuple(self._chunk(name, first) for first in finished))

    def _chunk(self, name: str, first: int) -> Path:
        return self.folder / "chunks" / f"{name}-{first:07d}.parquet"

    def _chunks(self, name: str) -> list[Path]:
        return sorted((self.folder / "chunks").glob(f"{name}-*.parquet"))


def _repeated(schema: pa.Schema) -> list[str] | bool:
    """Columns worth a dictionary: words; looking for repeated numbers costs half of the writing."""
    words = [field.name for field in schema if not pa.types.is_floating(field.type)]
    return words or False


class _Arriving:
    """A file written beside its place and moved there in one step when complete."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.part = path.with_name(path.name + ".part")

    def __enter__(self) -> Path:
        return self.part

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        if kind is None:
            self.part.replace(self.path)
        else:
            self.part.unlink(missing_ok=True)


def write_text(path: Path, text: str) -> None:
    """Write a text file so that it is there whole or not at all."""
    with _Arriving(path) as part:
        part.write_text(text, encoding="utf-8")


@dataclass(frozen=True)
class UnitRows:
    """Rows of results seen as (N units, cases), a case being a condition and a state.

    Attributes
    ----------
    source : Columns
        Where the columns come from; figures are read when asked for.
    unit : ndarray (N,)
        Unit numbers, ascending.
    cases : tuple of (condition, state)
        In the order in which they first appear.
    rows : ndarray (N, cases)
        Row number of each unit and case.
    """

    source: Columns
    unit: NDArray[np.int64]
    cases: tuple[tuple[str, str], ...]
    rows: NDArray[np.intp]

    @classmethod
    def of(cls, source: Columns) -> UnitRows:
        """Find the units and cases of a table.

        Raises
        ------
        ValueError
            If a unit does not have exactly one row in every case.
        """
        unit = source.column("unit").to_numpy(np.int64)
        pairs = pd.MultiIndex.from_arrays([source.column("condition"), source.column("state")])
        case, cases = pd.factorize(pairs)
        order = np.lexsort((case, unit))
        count = max(len(cases), 1)
        rectangular = order.size % count == 0
        rows = order.reshape(-1, count) if rectangular else order[:, None]
        if not (
            rectangular
            and np.all(case[rows] == np.arange(count))
            and np.all(unit[rows] == unit[rows[:, :1]])
        ):
            raise ValueError("every unit must have exactly one row per condition and state")
        names = tuple((str(condition), str(state)) for condition, state in cases)
        return cls(source, unit[rows[:, 0]], names, rows)

    @property
    def figure_columns(self) -> tuple[str, ...]:
        """Columns that hold figures."""
        return tuple(name for name in self.source.names if name not in KEY_COLUMNS)

    def figure(self, column: str) -> NDArray[np.float64]:
        """Figure values (N, cases); NaN where a unit has none."""
        return self.source.column(column).to_numpy(np.float64, na_value=np.nan)[self.rows]

    def words(self, column: str) -> tuple[NDArray[np.intp], Sequence[str]]:
        """Text column as codes (N, cases) into a list of words."""
        codes, words = pd.factorize(self.source.column(column))
        return codes[self.rows], [str(word) for word in words]
