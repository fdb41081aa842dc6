"""Numbers of chance: share number k of a stream, the same whoever asks for it, and when.

Every stream is keyed by the seed and its name and comes from the counter-based generator Philox
(Salmon et al., SC'11), which can start anywhere.  Three methods turn streams into the shares that
units take:

random            every share for itself
latin-hypercube   in blocks of 50 shares, one in each fiftieth of the law, in random order
                  (McKay, Beckman, Conover, Technometrics 21 (1979) 239-245)
sobol             points of Sobol's sequence, scrambled (scipy.stats.qmc; Owen, Ann. Stat. 25
                  (1997) 1541-1562): share k is number k of the sequence, one axis per factor

With the last two, means of smooth figures come out closer.  Shares, percentiles and their
intervals are computed as for random units.  That is on the safe side: a Latin hypercube of n units
is never worse than n - 1 random ones (Owen, SIAM J. Numer. Anal. 34 (1997) 1884-1910), and
scrambled points are at worst a small factor worse, which smooth circuits do not come near.
"""

from __future__ import annotations

import hashlib
import warnings
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.random import Generator, Philox
from numpy.typing import NDArray
from scipy.stats import qmc

Floats = NDArray[np.float64]
Method = Literal["random", "latin-hypercube", "sobol"]

LATIN_BLOCK = 50
_OUTPUTS_PER_STEP = 4  # numbers Philox makes per step of its counter
_HIGHEST = 1.0 - 2.0**-53
_SOBOL_BITS = 30


@dataclass(frozen=True)
class Scheme:
    """How the shares of one factor are drawn: method, and axis of the sequence it takes."""

    method: Method = "random"
    axis: int = 0
    axes: int = 1


RANDOM = Scheme()


def shares(scheme: Scheme, seed: int, name: str, first: int, count: int) -> Floats:
    """Shares `first` ... `first + count - 1` of a stream, in the open interval (0, 1).

    Parameters
    ----------
    scheme : Scheme
    seed : int
        Of the study.
    name : str
        Of the stream.
    """
    if scheme.method == "latin-hypercube":
        return latin(seed, name, first, count)
    if scheme.method == "sobol":
        return _sobol(seed, scheme.axes, first, count)[:, scheme.axis]
    return random(seed, name, first, count)


def random(seed: int, name: str, first: int, count: int) -> Floats:
    """Independent shares: the top 52 bits, moved to the middle of their cell.

    So neither 0 nor 1 can occur.
    """
    generator = Philox(key=_key(seed, name))
    steps, skipped = divmod(first, _OUTPUTS_PER_STEP)
    generator.advance(steps)
    raw = generator.random_raw(skipped + count)[skipped:]
    return ((raw >> np.uint64(12)).astype(np.float64) + 0.5) * 2.0**-52


def latin(seed: int, name: str, first: int, count: int, block: int = LATIN_BLOCK) -> Floats:
    """Shares of which each full block has one in every stratum, in an order of its own."""
    start = first // block
    whole = (-(-(first + count) // block) - start) * block
    keys = random(seed, f"{name}\nstratum", start * block, whole).reshape(-1, block)
    stratum = np.argsort(keys, axis=1).ravel()[first - start * block :][:count]
    within = random(seed, name, first, count)
    return np.minimum((stratum + within) / block, _HIGHEST)


@lru_cache(maxsize=8)
def _sobol(seed: int, axes: int, first: int, count: int) -> Floats:
    """Points of the scrambled sequence (count, axes), moved to the middle of their cells."""
    chance = Generator(Philox(_key(seed, "sobol")))
    sequence = qmc.Sobol(axes, scramble=True, bits=_SOBOL_BITS, seed=chance)
    if first:
        sequence.fast_forward(first)
    with warnings.catch_warnings():  # balance holds for powers of 2; other counts come as near
        warnings.simplefilter("ignore", UserWarning)
        points = sequence.random(count) + 2.0 ** -(_SOBOL_BITS + 1)
    points.setflags(write=False)
    return points


def _key(seed: int, name: str) -> int:
    digest = hashlib.blake2b(f"{seed}\n{name}".encode(), digest_size=16).digest()
    return int.from_bytes(digest, "little")
