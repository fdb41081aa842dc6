"""Yield and stress analysis of self-oscillating MOSFET RF stages over part spread.

    import tolsim

    study = tolsim.load_study("stage.toml")
    results = tolsim.run_study(study, out="results")

Names below are loaded on first use, so that `import tolsim` costs nothing.
"""

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "Study": "tolsim.design",
    "StudyError": "tolsim.errors",
    "TolsimError": "tolsim.errors",
    "load_study": "tolsim.study",
    "read_study": "tolsim.study",
    "run_study": "tolsim.run",
    "replay_unit": "tolsim.replay",
}

__all__ = [
    "Study",
    "StudyError",
    "TolsimError",
    "__version__",
    "load_study",
    "read_study",
    "replay_unit",
    "run_study",
]


def __getattr__(name: str) -> Any:  # noqa: ANN401 - any public object
    """Load a public name from its module on first use."""
    if name not in _HOMES:
        raise AttributeError(f"module 'tolsim' has no attribute '{name}'")
    return getattr(import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    """Public names, loaded or not."""
    return sorted(__all__)
