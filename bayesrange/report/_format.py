"""Numbers as a reader wants them: as many digits as the interval supports, and small interval bars."""

import math
from dataclasses import dataclass

_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def number(value: float | int, width: float | int) -> str:
    """A number with two significant digits of `width`, the uncertainty it is known to; "–" if it is not finite.

    >>> number(0.18234, 0.06), number(-12345.6, 300.0), number(0.0000213, 0.000004)
    ('0.182', '−12,346', '2.13 × 10⁻⁵')
    """
    if not math.isfinite(value):
        return "–"
    scale = width if math.isfinite(width) and width > 0 else abs(value) or 1.0
    first = math.floor(math.log10(scale))
    if max(abs(value), scale) < 1e-3 or abs(value) >= 1e7:
        exponent = math.floor(math.log10(abs(value))) if value else first
        digits = min(max(exponent - first + 1, 0), 6)
        mantissa = f"{value / 10.0**exponent:.{digits}f}".replace("-", "−")
        return f"{mantissa} × 10{str(exponent).translate(_SUPERSCRIPT)}"
    text = f"{value:,.{min(max(1 - first, 0), 8)}f}"
    return ("−" + text[1:] if float(text.replace(",", "")) else text[1:]) if text.startswith("-") else text


def interval(lower: float, upper: float, width: float | None = None) -> str:
    """An interval, "lower to upper", to the digits of its own width; "–" if it is not known."""
    if not (math.isfinite(lower) and math.isfinite(upper)):
        return "–"
    known = upper - lower if width is None else width
    return f"{number(lower, known)} to {number(upper, known)}"


def known_to(lower: float, median: float, upper: float) -> float:
    """The width that sets the digits of a row: twice the shorter side, so that a long tail hides no digit."""
    shorter = min(median - lower, upper - median)
    return 2 * shorter if shorter > 0 else upper - lower


def whole(value: float | int) -> str:
    """A count with thousands separated; "–" if it is not finite."""
    return f"{value:,.0f}" if math.isfinite(value) else "–"


def fixed(value: float | int, digits: int) -> str:
    """A number with a fixed count of decimals; "–" if it is not finite."""
    return f"{value:.{digits}f}".replace("-", "−") if math.isfinite(value) else "–"


def percent(share: float | int) -> str:
    """A share in percent."""
    return f"{100 * share:.3g} %"


def listed(items: list[str]) -> str:
    """Items in a sentence: "a, b and c"."""
    return items[0] if len(items) == 1 else ", ".join(items[:-1]) + " and " + items[-1] if items else "none"


@dataclass(frozen=True)
class Bar:
    """Where to draw an interval on an axis of length 100; None: not drawn."""

    lower: float
    middle: float
    upper: float
    prior_lower: float | None
    prior_upper: float | None
    zero: float | None


def bar(
    lower: float,
    middle: float,
    upper: float,
    prior: tuple[float, float] | None,
    axis: tuple[float, float] | None = None,
) -> Bar | None:
    """Place an interval, its middle and the prior's interval on an axis that holds all of them, or on the given one."""
    if not all(map(math.isfinite, (lower, middle, upper))):
        return None
    known = prior if prior is not None and all(map(math.isfinite, prior)) else None
    ends = [lower, upper, *(known or ())]
    low, high = axis if axis is not None else (min(ends), max(ends))
    if axis is None and 0 < low < 0.3 * high:
        low = 0.0
    margin = 0.04 * ((high - low) or 1.0)
    low, high = low - margin, high + margin

    def place(value: float) -> float:
        return 100 * (value - low) / (high - low)

    return Bar(
        place(lower),
        place(middle),
        place(upper),
        place(known[0]) if known else None,
        place(known[1]) if known else None,
        place(0.0) if low <= 0 <= high else None,
    )
