"""Numbers as a printed page shows them: few digits, a true minus sign, powers of ten with a raised exponent."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Final

from markupsafe import Markup

MISSING: Final = Markup("&ndash;")
"""Shown where a number does not exist."""

_PLAIN: Final = (1e-3, 1e5)
"""Magnitudes written without a power of ten."""


def number(value: float | None, digits: int = 4) -> Markup:
    """Format one number with `digits` significant digits, trailing zeros kept.

    Examples: 346.9, 0.01233, 1.234 x 10^-46.
    """
    if value is None or math.isnan(value):
        return MISSING
    if math.isinf(value):
        return Markup("&infin;") if value > 0 else Markup("&minus;&infin;")
    if value == 0.0:
        return Markup("0")
    mantissa, exponent = _split(value, digits)
    if _PLAIN[0] <= abs(value) < _PLAIN[1]:
        return _plain(value, max(0, digits - 1 - exponent))
    return _plain(mantissa, digits - 1) + _power(exponent)


def fixed(value: float | None) -> Markup:
    """Format a log-likelihood: differences count, so two decimals whatever the size."""
    if value is None or not math.isfinite(value):
        return number(value)
    return _plain(round(value, 2) + 0.0, 2)


def with_error(value: float | None, error: float | None) -> Markup:
    """Format a value with its error, both to two digits of the error."""
    if value is None or error is None or not error > 0.0 or not math.isfinite(value) or not math.isfinite(error):
        return number(value)
    _, exponent = _split(error, 2)
    if max(abs(value), error) >= _PLAIN[1] or (0.0 < max(abs(value), error) < _PLAIN[0]):
        power = _split(max(abs(value), error), 4)[1]
        decimals = max(0, 1 + power - exponent)
        text = Markup("({} &plusmn; {})").format(
            _plain(value / 10.0**power, decimals), _plain(error / 10.0**power, decimals)
        )
        return text + _power(power)
    decimals = max(0, 1 - exponent)
    return Markup("{} &plusmn; {}").format(_plain(value, decimals), _plain(error, decimals))


def intervals(found: Sequence[Sequence[float]]) -> Markup:
    """Format a union of intervals; one power of ten serves both ends where it can."""
    if not found:
        return MISSING
    return Markup(" &cup; ").join(_interval(low, high) for low, high in found)


def percent(share: float | None) -> Markup:
    """Format a share; small ones keep two digits instead of turning into zero."""
    if share is None or math.isnan(share):
        return MISSING
    if share == 0.0:
        return Markup("0&nbsp;%")
    if share < 1e-4:
        return Markup("&lt;&thinsp;0.01&nbsp;%")
    return Markup(f"{100.0 * share:.{0 if share >= 0.1 else 1 if share >= 0.01 else 2}f}&nbsp;%")


def whole(value: int | float | None) -> Markup:
    """Format a count with thin spaces between thousands."""
    return MISSING if value is None else Markup(f"{int(value):,}".replace(",", "&#8239;"))


def duration(seconds: float) -> Markup:
    """Format a time as a person would say it."""
    if seconds < 100.0:
        return number(seconds, 3) + Markup("&nbsp;s")
    minutes, rest = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    if hours:
        return Markup(f"{hours}&nbsp;h {minutes}&nbsp;min")
    return Markup(f"{minutes}&nbsp;min {rest}&nbsp;s")


def _interval(low: float, high: float) -> Markup:
    largest = max(abs(low), abs(high))
    if largest == 0.0 or (largest < _PLAIN[1] and min(abs(low), abs(high)) >= _PLAIN[0]):
        return Markup("[{}, {}]").format(number(low, 3), number(high, 3))
    exponent = _split(largest, 3)[1]
    if abs(low) >= 1e-2 * largest and abs(high) >= 1e-2 * largest and not _PLAIN[0] <= largest < _PLAIN[1]:
        low_text = number(low / 10.0**exponent, 3)
        return Markup("[{}, {}]").format(low_text, number(high / 10.0**exponent, 3)) + _power(exponent)
    return Markup("[{}, {}]").format(number(low, 3), number(high, 3))


def _split(value: float, digits: int) -> tuple[float, int]:
    """Mantissa and exponent after rounding to `digits`, so that 9.9996 becomes 1.000 of the next power."""
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    return float(mantissa), int(exponent)


def _plain(value: float, decimals: int) -> Markup:
    return Markup(f"{value:.{decimals}f}".replace("-", "&minus;"))


def _power(exponent: int) -> Markup:
    text = str(exponent).replace("-", "&minus;")
    return Markup(f"&thinsp;&times;&thinsp;10<sup>{text}</sup>")
