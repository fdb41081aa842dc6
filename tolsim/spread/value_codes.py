"""Value codes as printed on parts: "104K", "4R7D", "4n7J"; "472J", "4k7", "R47" (IEC 60062)."""

from __future__ import annotations

import re
from typing import Final

from tolsim.errors import Mistake
from tolsim.spread.codes import Tolerance, tolerance_letter


def capacitor_code(code: str) -> tuple[float, Tolerance | None]:
    """Capacitance in F and tolerance of a mark such as "104K", "4R7D" or "5p6".

    Three digits are two figures and the number of zeros in pF; R, p or n stand for the
    decimal point (pF, pF, nF).  IEC 60062:2016.
    """
    match = re.fullmatch(r"(?:(\d\d)(\d)|(\d+)([Rpn])(\d*))([A-Z])?", code.strip())
    if match is None:
        raise Mistake('a capacitor mark like "104K" or "4R7D"', got=code)
    figures, zeros, whole, point, decimals, letter = match.groups()
    if figures:
        picofarads = int(figures) * 10.0 ** int(zeros)
    else:
        picofarads = float(f"{whole}.{decimals or 0}") * (1000.0 if point == "n" else 1.0)
    capacitance = picofarads * 1e-12
    return capacitance, tolerance_letter(letter, capacitance) if letter else None


_OHMS: Final = {"R": 1.0, "K": 1e3, "M": 1e6, "G": 1e9}


def resistor_code(code: str) -> tuple[float, Tolerance | None]:
    """Resistance in ohm and tolerance of a mark such as "472J", "4702F", "4k7J" or "R47".

    Three digits are two figures and the number of zeros, four digits three figures and the
    zeros; R, K, M or G stand for the decimal point.  IEC 60062:2016.

    Raises
    ------
    Mistake
        Also for marks that can be read in two ways: 472K is 472 kohm, or 4.7 kohm of 10 %.
    """
    text = code.strip()
    text = text[0:1] + text[1:].replace("k", "K")
    match = re.fullmatch(r"(?:(\d{2,3})(\d)|(\d*)([RKMG])(\d*))([A-Z])?", text)
    if match is None or not any(sign.isdigit() for sign in text):
        raise Mistake('a resistor mark like "472J", "4k7" or "R47"', got=code)
    figures, zeros, whole, point, decimals, letter = match.groups()
    if figures:
        ohms = float(figures) * 10.0 ** int(zeros)
        if letter in ("K", "M"):
            raise Mistake(
                "a mark that can be read in one way only",
                f"It may mean {text[:-1]} {letter.lower() if letter == 'K' else letter}ohm, or "
                f"{ohms:g} ohm of {10 if letter == 'K' else 20} %. Write value and tolerance.",
                got=code,
            )
    else:
        if not whole and not decimals:
            raise Mistake('a resistor mark like "472J", "4k7" or "R47"', got=code)
        ohms = float(f"{whole or 0}.{decimals or 0}") * _OHMS[point]
    return ohms, tolerance_letter(letter) if letter else None
