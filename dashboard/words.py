"""Numbers and their units as a person reads them."""

from __future__ import annotations

import math

THIN = "\u202f"
MINUS = "\u2212"
NB = "\u00a0"
_UNITS = {
    0: ("ones", ""),
    -1: ("tenths", "10⁻¹"),
    -2: ("hundredths", "10⁻²"),
    -3: ("thousandths", "10⁻³"),
    -4: ("ten-thousandths", "10⁻⁴"),
    -5: ("hundred-thousandths", "10⁻⁵"),
    -6: ("millionths", "10⁻⁶"),
}
_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_SMALL = ("no", "one", "two", "three", "four", "five", "six", "seven", "eight", "nine", "ten")


def count(number: int) -> str:
    """Return a count with thin spaces between the thousands, 12464 -> "12 464"."""
    return f"{number:,}".replace(",", THIN)


def spelt(number: int, noun: str) -> str:
    """Return a count with its noun, (1, "pair") -> "one pair", (12, "pair") -> "12 pairs"."""
    word = _SMALL[number] if 0 <= number < len(_SMALL) else count(number)
    return f"{word} {noun}" if number == 1 else f"{word} {noun}s"


def fixed(value: float, decimals: int, plus: bool = False) -> str:
    """Return a number with a fixed number of decimals, a typographic minus, and a plus on request."""
    text = f"{abs(value):,.{decimals}f}".replace(",", THIN)
    if float(f"{abs(value):.{decimals}f}") == 0:
        return text
    return f"{MINUS}{text}" if value < 0 else f"+{text}" if plus else text


def general(value: float) -> str:
    """Return a reading with about four digits, 293.8806 -> "293.9", 1.2e-7 -> "1.2 × 10⁻⁷"."""
    if value and abs(value) < 1e-3:
        mantissa, exponent = f"{value:.1e}".split("e")
        return f"{fixed(float(mantissa), 1)} × 10{str(int(exponent)).translate(_RAISED)}"
    digits = math.floor(math.log10(abs(value))) + 1 if value else 1
    return fixed(value, max(0, 4 - max(digits, 0)))


def decimals_of(error: float) -> int:
    """Return how many decimals show two significant digits of an error bar (none above ten)."""
    return max(0, 1 - math.floor(math.log10(error))) if error > 0 else 1


def unit_of(error: float) -> tuple[float, str]:
    """Return the power of ten in which an error bar reads as about one, and its name.

    Returns
    -------
    tuple
        For example (1e-4, "ten-thousandths (10⁻⁴)").
    """
    exponent = math.floor(math.log10(2 * error)) if error > 0 else -3
    exponent = min(0, max(-6, exponent))
    name, power = _UNITS[exponent]
    return 10.0**exponent, f"{name} ({power})" if power else name


def capital(sentence: str) -> str:
    """Return a sentence that begins with a capital letter."""
    return sentence[:1].upper() + sentence[1:]


def stopped(sentence: str) -> str:
    """Return a sentence that ends with a stop."""
    return sentence if sentence.endswith((".", "!", "?")) else f"{sentence}."
