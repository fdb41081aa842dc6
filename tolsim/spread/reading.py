"""Spread tables from TOML files: found, read, checked.

A file holds any number of entries `[table.NAME]` (see `tolsim.spread.entry`).  Every mistake of
every entry is told at once; entries that nobody uses may have mistakes without harm.
"""

from __future__ import annotations

import hashlib
import re
import tomllib
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final

from tolsim.errors import Problem
from tolsim.library import distributions_folder
from tolsim.spread.entry import QUANTITIES, UNITS, Entry
from tolsim.spread.table import SpreadTable

__all__ = ["QUANTITIES", "UNITS", "Shelf", "read_shelf", "read_tables"]

_ENTRY: Final = re.compile(rb"^\s*\[\s*table\s*\.", re.MULTILINE)
_NAME: Final = re.compile(rb"^\s*\[\s*table\s*\.\s*\"?([A-Za-z0-9_-]+)\"?\s*[.\]]", re.MULTILINE)


@dataclass
class Shelf:
    """All spread tables within reach, sound or not.

    Attributes
    ----------
    tables : dict
        Sound ones by name, in alphabetical order.
    broken : dict
        Mistakes of each entry that has some, by its name.
    loose : list of Problem
        Mistakes that belong to no entry: files that cannot be read, keys outside entries.
    in_study : list of Problem
        The mistake of writing entries into the study file.
    """

    tables: dict[str, SpreadTable] = field(default_factory=dict)
    broken: dict[str, list[Problem]] = field(default_factory=dict)
    loose: list[Problem] = field(default_factory=list)
    in_study: list[Problem] = field(default_factory=list)

    def problems(self, used: Collection[str] | None = None) -> list[Problem]:
        """Mistakes of the entries `used`, each once; of everything if None."""
        names = self.broken if used is None else [name for name in self.broken if name in used]
        found = [problem for name in names for problem in self.broken[name]]
        return list(dict.fromkeys([*found, *(self.loose if used is None else ())]))

    def unused(self, used: Collection[str]) -> list[Problem]:
        """Mistakes that harm nobody who uses only the entries `used`."""
        harm = set(self.problems(used))
        return [problem for problem in self.problems() if problem not in harm]


def read_shelf(study_path: Path | None, tables_dir: Path | None) -> Shelf:
    """All spread tables a study can name.

    A name is looked up beside the study file, then in `tables_dir`, then among the shipped
    tables; the first place that has it wins, even if the entry there has mistakes.

    Parameters
    ----------
    study_path : Path or None
        The study file; TOML files beside it that hold `[table.NAME]` entries are read.
    tables_dir : Path or None
        Folder given by the user.
    """
    places = [distributions_folder()]
    if tables_dir is not None:
        places.append(tables_dir)
    if study_path is not None:
        places.append(study_path.resolve().parent)
    shelf = Shelf()
    for place in places:
        _read_folder(place, shelf, study_path)
    shelf.tables = dict(sorted(shelf.tables.items()))
    return shelf


def _read_folder(folder: Path, shelf: Shelf, study: Path | None) -> None:
    """Put the tables of one folder on the shelf, in place of those of the same name."""
    seen: dict[str, str] = {}
    for path in sorted(folder.glob("*.toml")):
        if not path.is_file():
            continue
        try:
            data = path.read_bytes()
        except OSError as error:
            got = error.strerror or str(error)
            cure = "Give yourself the right to read it, or move it away."
            want = "a file that can be read"
            shelf.loose.append(Problem(path.name, "", "", got, want, cure=cure))
            continue
        if not _ENTRY.search(data):  # a study, or anything else that happens to lie here
            continue
        if study is not None and path.resolve() == study.resolve():
            cure = "Move the entries [table.NAME] to another file beside the study."
            want = "spread tables in a file of their own"
            got = "some in the study"
            shelf.in_study.append(Problem(path.name, "table", "", got, want, "", cure))
            continue
        file = _read_file(data, path)
        for name in (*file.tables, *file.broken):
            shelf.tables.pop(name, None)
            earlier = shelf.broken.pop(name, [])
            if name in seen:
                want = f"a name not used in {seen[name]}"
                got = f"a second entry {name}"
                twice = Problem(
                    path.name, f"table.{name}", "", got, want, "", "Rename one of them."
                )
                file.broken.setdefault(name, []).extend([*earlier, twice])
            seen[name] = path.name
        shelf.tables |= {n: table for n, table in file.tables.items() if n not in file.broken}
        shelf.broken |= file.broken
        shelf.loose += file.loose


def read_tables(
    data: bytes, file: str, problems: list[Problem], folder: Path | None = None
) -> dict[str, SpreadTable]:
    """Sound tables in the bytes of one file; mistakes are appended to `problems`.

    `folder` is where files of readings lie; without it none can be read.
    """
    shelf = _read_bytes(data, file, folder)
    problems += shelf.problems()
    return shelf.tables


def _read_file(data: bytes, path: Path) -> Shelf:
    return _read_bytes(data, path.name, path.parent)


def _read_bytes(data: bytes, file: str, folder: Path | None) -> Shelf:
    """The entries of one file, each with its own mistakes."""
    try:
        text = data.decode("utf-8-sig")  # some editors write a mark before the first letter
        content = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        unread = Problem(file, "", "", str(error), "a valid TOML file in UTF-8")
        return Shelf({}, {name: [unread] for name in _names(data)}, [unread])
    shelf = Shelf()
    shelf.loose += [
        Problem(file, "", key, f'"{key}"', "only entries [table.NAME] in a table file")
        for key in content
        if key != "table"
    ]
    digest = hashlib.sha256(data).hexdigest()
    entries = content.get("table", {})
    for name, entry in (entries if isinstance(entries, Mapping) else {}).items():
        found: list[Problem] = []
        table = Entry(file, f"table.{name}", found, text, folder).read(name, entry, digest)
        if table is not None and not found:
            shelf.tables[name] = table
        else:
            shelf.broken[name] = found
    return shelf


def _names(data: bytes) -> Iterator[str]:
    """Names of the entries a file seems to hold, though it cannot be read."""
    yield from dict.fromkeys(name.decode() for name in _NAME.findall(data))
