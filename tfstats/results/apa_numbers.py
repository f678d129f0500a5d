"""Numbers as a paper prints them: no leading zero for p, exact p, signs and units."""

from __future__ import annotations

import math

__all__ = ["count_text", "interval_text", "level_text", "number_text", "p_interval_text", "p_text", "span_text"]


def p_text(p: float) -> str:
    """`p = .042`; never `p = 0`: the smallest p of a permutation test is one over the number of relabellings."""
    if not math.isfinite(p):
        return "p not available"
    if p <= 0.0:
        return "p = 0"
    if p >= 0.9995:
        return "p = 1.00"
    digits = 3 if p >= 0.001 else max(3, 1 - math.floor(math.log10(p)))
    return "p = " + f"{p:.{digits}f}".lstrip("0")


def level_text(level: float) -> str:
    """A level such as alpha without its leading zero: `.05`."""
    return f"{level:g}".replace("0.", ".", 1) if level < 1 else f"{level:g}"


def count_text(number: float) -> str:
    """A count of relabellings: in full while it is short, then as a power of ten."""
    if not math.isfinite(number):
        return "more than 1e300"
    return str(int(number)) if number < 1_000_000 else f"{number:.3g}"


def number_text(value: float, digits: int = 2) -> str:
    """A number with a fixed number of digits; more where all of them would be zero."""
    if not math.isfinite(value):
        return "not available"
    if value and abs(value) < 0.5 * 10.0**-digits:
        return f"{value:.2g}"
    return f"{value:.{digits}f}"


def interval_text(low: float, high: float, digits: int = 2) -> str:
    """`95 % CI [0.70, 2.46]`."""
    return f"95 % CI [{number_text(low, digits)}, {number_text(high, digits)}]"


def p_interval_text(low: float, high: float) -> str:
    """`95 % CI [.0001, .0004]` of a p-value; a bound may be 0 although no p is."""
    bounds = (p_text(bound).removeprefix("p = ") for bound in (low, high))
    return f"95 % CI [{', '.join(bounds)}]"


def span_text(low: float, high: float, unit: str) -> str:
    """`4 to 8 Hz`, or `6 Hz` where both ends agree."""
    return f"{low:.4g} {unit}" if low == high else f"{low:.4g} to {high:.4g} {unit}"
