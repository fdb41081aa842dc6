"""Where the shipped spread tables and studies are: the only module that knows folders.

In a wheel they lie inside the package (`tolsim/_data`); in a checkout, installed
editable or not at all, beside it.
"""

from __future__ import annotations

from pathlib import Path

from tolsim.errors import RequestError, nearest_name

_PACKAGE = Path(__file__).resolve().parent


def _folder(name: str) -> Path:
    for place in (_PACKAGE / "_data" / name, _PACKAGE.parent / name):
        if place.is_dir():
            return place
    raise FileNotFoundError(f"tolsim's own folder '{name}' is missing: install tolsim again.")


def distributions_folder() -> Path:
    """Folder of the shipped spread tables (TOML)."""
    return _folder("distributions")


def studies_folder() -> Path:
    """Folder of the shipped studies (TOML)."""
    return _folder("studies")


def find_study(name: str) -> Path:
    """Study file of that name: a path, or the name of a shipped study.

    Raises
    ------
    RequestError
        If there is neither.
    """
    path = Path(name)
    if path.is_file():
        return path
    shipped = shipped_studies()
    if name in shipped:
        return shipped[name]
    near = nearest_name(name, [*shipped, *(str(file) for file in Path().glob("*.toml"))])
    hint = f"Did you mean {near}?" if near else f"Shipped studies: {', '.join(shipped)}."
    raise RequestError(f"There is no study file '{name}' and no shipped study of that name. {hint}")


def shipped_studies() -> dict[str, Path]:
    """Shipped studies by name (file name without ending), in alphabetical order."""
    return {path.stem: path for path in sorted(studies_folder().glob("*.toml"))}
