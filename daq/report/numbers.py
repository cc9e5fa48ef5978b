"""Numbers as they are printed: typographic minus, a value beside its error in one power of ten."""

from __future__ import annotations

import math

MINUS = "−"


def with_error(value: float, se: float) -> str:
    """Return a value and its error in one power of ten, the error to two decimals: "−0.05e-04 ± 1.06e-04"."""
    if not (se > 0 and math.isfinite(se) and math.isfinite(value)):
        return f"{signed(value)} ± {se:.2e}"
    power = math.floor(math.log10(se))
    scaled = number(value / 10.0**power, "+.2f")
    return f"{scaled}e{power:+03d} ± {se / 10.0**power:.2f}e{power:+03d}"


def signed(value: float) -> str:
    """Return a number with its sign: "−1.234e-05"."""
    return number(value, "+.3e")


def number(value: float, form: str) -> str:
    """Return a number in a form, a minus sign before it where it is negative."""
    return format(value, form).replace("-", MINUS, 1) if value < 0 else format(value, form)


def upwards(value: float) -> str:
    """Return a limit in three digits, rounded up: what is told is never less than what was found."""
    step = 10.0 ** (math.floor(math.log10(value)) - 2)
    return f"{math.ceil(value / step - 1e-9) * step:.3g}"
