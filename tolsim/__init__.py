"""Yield and stress analysis of self-oscillating MOSFET RF stages over part spread.

    import tolsim

    study = tolsim.open_study("stage.toml")
    results = tolsim.run_study(study, units=500, out="results")
    results.figures  # a pandas table of percentiles against ratings and limits

Names below are loaded on first use, so that `import tolsim` costs nothing.
"""

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "RequestError": "tolsim.errors",
    "Results": "tolsim.answers.results",
    "RunError": "tolsim.errors",
    "Study": "tolsim.design",
    "StudyError": "tolsim.errors",
    "StudyFile": "tolsim.study",
    "TolsimError": "tolsim.errors",
    "load_study": "tolsim.study",
    "map_starts": "tolsim.starts.answers",
    "open_study": "tolsim.study",
    "replay_unit": "tolsim.replay",
    "run_study": "tolsim.run",
    "transitions_of": "tolsim.unit_changes",
}

__all__ = [
    "RequestError",
    "Results",
    "RunError",
    "Study",
    "StudyError",
    "StudyFile",
    "TolsimError",
    "__version__",
    "load_study",
    "map_starts",
    "open_study",
    "replay_unit",
    "run_study",
    "transitions_of",
]


def __getattr__(name: str) -> Any:  # noqa: ANN401 - any public object
    """Load a public name from its module on first use."""
    if name not in _HOMES:
        raise AttributeError(f"module 'tolsim' has no attribute '{name}'")
    return getattr(import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    """Public names, loaded or not."""
    return sorted(__all__)
