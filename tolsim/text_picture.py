"""Small pictures made of letters: a density over an axis, for screens and pipes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

BLOCKS = " ▁▂▃▄▅▆▇█"
LETTERS = " .:#"  # for screens that know no blocks


def can_show_blocks(encoding: str | None) -> bool:
    """True if text of this encoding can hold block characters."""
    try:
        BLOCKS.encode(encoding or "ascii")
    except (LookupError, UnicodeEncodeError):
        return False
    return True


def hill(heights: Floats, rows: int, *, blocks: bool) -> list[str]:
    """Columns of the given heights as lines of text, the top one first.

    Parameters
    ----------
    heights : ndarray (columns,)
        At least 0; the largest fills all rows.  Whatever is above 0 leaves a mark.
    rows : int
        Lines of the picture.
    blocks : bool
        Block characters, else ASCII.
    """
    signs = BLOCKS if blocks else LETTERS
    steps = len(signs) - 1
    top = float(np.max(heights))
    levels = np.ceil(heights / top * rows * steps - 1e-9) if top > 0.0 else np.zeros_like(heights)
    lines = []
    for row in reversed(range(rows)):
        inside = np.clip(levels - row * steps, 0, steps).astype(int)
        lines.append("".join(signs[level] for level in inside))
    return lines


def axis(low: float, high: float, columns: int, marks: dict[float, str]) -> str:
    """Line of labels under a picture, each centred below its place as far as it fits."""
    line = [" "] * columns
    for value, text in marks.items():
        if not low <= value <= high:
            continue
        place = round((value - low) / ((high - low) or 1.0) * (columns - 1)) - len(text) // 2
        place = min(max(place, 0), columns - len(text))
        around = line[max(place - 1, 0) : place + len(text) + 1]
        if place >= 0 and all(sign == " " for sign in around):
            line[place : place + len(text)] = text
    return "".join(line).rstrip()
