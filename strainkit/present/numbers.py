"""Numbers with their errors as text."""

from __future__ import annotations

import math

__all__ = ["plain", "uncertain"]


def uncertain(value: float | None, error: float | None, digits: int = 2) -> str:
    """Value with its standard error in the last digits: uncertain(12.345, 0.42) is "12.35(42)".

    The error keeps two digits below 20 units of the last place and one above ("12.3(4)"); one that six decimals do not show
    is "(0)". Without an error the value is printed with `digits` decimals; unknown values are a dash.
    """
    if value is None or not math.isfinite(value):
        return "-"
    if error is None or not math.isfinite(error):
        return f"{value:.{digits}f}"
    if error <= 0:
        return f"{value:.{digits + 2}f}(0)"
    places = -math.floor(math.log10(error))
    if round(error * 10**places) < 2:
        places += 1
    if places <= 0:
        return f"{round(value, places):.0f}({round(error, places):.0f})"
    if places > 6:
        return f"{value:.6f}({round(error * 1e6)})"
    return f"{value:.{places}f}({round(error * 10**places)})"


def plain(value: float | None, digits: int = 3) -> str:
    """A number with `digits` decimals, without a negative zero; a dash when unknown."""
    if value is None or not math.isfinite(value):
        return "-"
    text = f"{value:.{digits}f}"
    return text[1:] if text.startswith("-") and not text.strip("-0.") else text
