"""What a run must remember so that it can be repeated bit for bit."""

from __future__ import annotations

import hashlib
import platform
from importlib.metadata import PackageNotFoundError, version
from typing import Any

from tolsim import __version__
from tolsim.design import Study
from tolsim.spread.sampling import tables_of
from tolsim.study import StudyFile

WATCHED = ("numpy", "scipy", "pandas", "pyarrow")


def provenance_of(opened: StudyFile) -> dict[str, Any]:
    """Seed, hashes of study and tables, versions of what computed them."""
    versions = {"tolsim": __version__, "python": platform.python_version()}
    for name in WATCHED:
        try:
            versions[name] = version(name)
        except PackageNotFoundError:  # run from a bundle without package records
            versions[name] = "unknown"
    record = {
        "seed": opened.study.run.seed,
        "units": opened.study.run.units,
        "study_sha256": hashlib.sha256(opened.text.encode()).hexdigest(),
        "tables": {name: opened.tables[name].sha256 for name in used_tables(opened.study)},
        "versions": versions,
    }
    if opened.recordings:
        record["recordings"] = {
            path: hashlib.sha256(recording.text.encode()).hexdigest()
            for path, recording in opened.recordings.items()
        }
    return record


def used_tables(study: Study) -> tuple[str, ...]:
    """Names of the spread tables a study uses, in alphabetical order."""
    design = study.design
    names = {name for ref in (*design.parts, *design.rails) for name in tables_of(study, ref)}
    return tuple(sorted(names))
