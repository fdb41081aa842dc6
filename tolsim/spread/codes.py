"""Marking codes of the trade: tolerance letters, ceramic class codes, slopes of resistors.

Sources: IEC 60062:2016 (letters of tolerances and slopes),
EIA-198-1 / IEC 60384-21 (class 1) and EIA-198 (class 2).
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Final

from tolsim.errors import Mistake, nearest_name

_SYMMETRIC: Final = {
    "B": 0.001, "C": 0.0025, "D": 0.005, "F": 0.01, "G": 0.02, "H": 0.03,
    "J": 0.05, "K": 0.10, "M": 0.20, "N": 0.30,
}  # fmt: skip
_LOPSIDED: Final = {
    "Q": (-0.10, 0.30), "T": (-0.10, 0.50), "S": (-0.20, 0.50), "Z": (-0.20, 0.80),
}  # fmt: skip
_RESISTOR_ONLY: Final = {"W": 0.0005, "P": 0.0002, "L": 0.0001, "E": 0.00005}
_BELOW_10_PF: Final = {"B": 0.1e-12, "C": 0.25e-12, "D": 0.5e-12, "F": 1e-12, "G": 2e-12}
_ELSEWHERE: Final = {
    "A": "no meaning in the standard, 0.05 % or 0.05 pF in older lists",
    "E": "0.005 % of a resistor, but 0.25 % or 1 pF in older lists of capacitors",
    "H": "3 % from 10 pF on, but 2.5 % in older lists, and nothing below 10 pF",
    "L": "0.01 % of a resistor, but 15 % in older lists of capacitors",
    "P": "0.02 % of a resistor, but -0/+100 % or -0/+80 % in older lists of capacitors",
    "R": "no meaning in the standard, a decimal point in values, -20/+30 % in older lists",
    "V": "no meaning in the standard, -10/+50 % or -25/+50 % in older lists",
    "W": "0.05 % of a resistor, but -0/+200 % in older lists of capacitors",
    "Y": "no meaning in the standard, -0/+50 % or -20/+50 % in older lists",
}
"""Letters that mean something else elsewhere (older lists: values from memory)."""

_SWITCH: Final = 10e-12  # F; from here on the letters mean per cent (10 pF itself does)


@dataclass(frozen=True)
class Tolerance:
    """Limits of a tolerance letter as deviations from nominal; relative, or in F if `absolute`."""

    low: float
    high: float
    absolute: bool = False


def tolerance_letter(letter: str, capacitance: float | None = None) -> Tolerance:
    """Limits a tolerance letter means (IEC 60062:2016).

    Parameters
    ----------
    letter : str
        One capital letter.
    capacitance : float, optional
        Nominal capacitance in F, if the part is a capacitor: below 10 pF the letters mean
        picofarads.  Left out for resistors.

    Returns
    -------
    Tolerance

    Raises
    ------
    Mistake
        For letters the standard does not define for this part.  Older lists give E, L, P, H
        other meanings for capacitors; those are refused, not guessed.
    """
    valid = list(_SYMMETRIC)
    if capacitance is None:
        valid += _RESISTOR_ONLY
        if letter in _RESISTOR_ONLY:
            return Tolerance(-_RESISTOR_ONLY[letter], _RESISTOR_ONLY[letter])
    elif capacitance < _SWITCH * (1.0 - 1e-9):
        valid = list(_BELOW_10_PF)
        if letter in _BELOW_10_PF:
            return Tolerance(-_BELOW_10_PF[letter], _BELOW_10_PF[letter], absolute=True)
    else:
        valid += _LOPSIDED
        if letter in _LOPSIDED:
            return Tolerance(*_LOPSIDED[letter])
    if letter in valid:
        return Tolerance(-_SYMMETRIC[letter], _SYMMETRIC[letter])
    cure = "Letters below 10 pF mean picofarads, from 10 pF on per cent."
    if letter in _ELSEWHERE:
        cure = f"{letter} is not taken: {_ELSEWHERE[letter]}. Write the limits instead."
    raise Mistake("a tolerance letter of IEC 60062: " + " ".join(valid), cure, got=letter)


_FIGURE: Final = {
    "C": 0.0, "B": 0.3, "L": 0.8, "A": 0.9, "M": 1.0, "P": 1.5, "R": 2.2, "S": 3.3,
    "T": 4.7, "V": 5.6, "U": 7.5,
}  # fmt: skip
_MULTIPLIER: Final = {"0": -1.0, "1": -10.0, "2": -100.0, "3": -1000.0, "6": 10.0, "7": 100.0,
                      "8": 1000.0}  # fmt: skip
_SLOPE_TOLERANCE: Final = {
    "G": 30.0, "H": 60.0, "J": 120.0, "K": 250.0, "L": 500.0, "M": 1000.0, "N": 2500.0,
}  # fmt: skip


@dataclass(frozen=True)
class Class1:
    """Temperature coefficient of a class 1 ceramic, 1/K, about 25 degC."""

    slope: float
    tolerance: float


def class1_code(code: str) -> Class1:
    """Decode a class 1 ceramic code such as C0G or U2J (EIA-198-1)."""
    match = re.fullmatch(r"([CBLAMPRSTVU])([0-9])([GHJKLMN])", code.upper().replace("NP0", "C0G"))
    if match is None or match[2] not in _MULTIPLIER:
        known = ["C0G", "U2J", "P2H", "S2H", "T2H", "M7G", "B2G", "U1G", "P2G", "R2G", "P3K"]
        raise Mistake(
            'a class 1 code like "C0G" or "U2J"', got=code, nearest=nearest_name(code, known)
        )
    slope = _FIGURE[match[1]] * _MULTIPLIER[match[2]]
    return Class1(slope * 1e-6 + 0.0, _SLOPE_TOLERANCE[match[3]] * 1e-6)


_LOWEST: Final = {"X": -55.0, "Y": -30.0, "Z": 10.0}
_HIGHEST: Final = {"2": 45.0, "4": 65.0, "5": 85.0, "6": 105.0, "7": 125.0, "8": 150.0}
_CHANGE: Final = {
    "A": (-0.01, 0.01), "B": (-0.015, 0.015), "C": (-0.022, 0.022), "D": (-0.033, 0.033),
    "E": (-0.047, 0.047), "F": (-0.075, 0.075), "P": (-0.10, 0.10), "R": (-0.15, 0.15),
    "S": (-0.22, 0.22), "T": (-0.33, 0.22), "U": (-0.56, 0.22), "V": (-0.82, 0.22),
}  # fmt: skip


@dataclass(frozen=True)
class Class2:
    """Temperature range in degC and limits of the relative change from 25 degC in it."""

    lowest: float
    highest: float
    change_low: float
    change_high: float


def class2_code(code: str) -> Class2:
    """Decode a class 2 ceramic code such as X7R or Y5V (EIA-198)."""
    match = re.fullmatch(r"([XYZ])([245678])([ABCDEFPRSTUV])", code.upper())
    if match is None:
        known = ["X7R", "X5R", "X7T", "X7S", "X6S", "X8R", "Y5V", "Z5U", "Y5U"]
        raise Mistake(
            'a class 2 code like "X7R" or "Y5V"', got=code, nearest=nearest_name(code, known)
        )
    return Class2(_LOWEST[match[1]], _HIGHEST[match[2]], *_CHANGE[match[3]])


_SLOPES: Final = {"U": 250.0, "S": 100.0, "R": 50.0, "P": 15.0, "Q": 25.0, "K": 1.0}
_UNSURE_SLOPES: Final = {"Z": "20 or 10 ppm/K", "M": "10 or 5 ppm/K"}


def slope_letter(letter: str) -> float:
    """Largest temperature slope of a resistor, 1/K, by its letter (IEC 60062; from memory).

    Raises
    ------
    Mistake
        For letters that are not in the list, or of which lists differ.
    """
    if letter in _SLOPES:
        return _SLOPES[letter] * 1e-6
    cure = ""
    if letter in _UNSURE_SLOPES:
        cure = f"Lists differ about {letter}: {_UNSURE_SLOPES[letter]}. Write the slope instead."
    raise Mistake("a letter of a temperature slope: " + " ".join(_SLOPES), cure, got=letter)
