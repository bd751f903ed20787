"""Numbers as a person reads them."""

from __future__ import annotations

import math
from collections.abc import Sequence

HECTARE = 1e4


def number(value: float, digits: int = 3) -> str:
    """A number with the digits that count, without powers of ten where that can be helped.

    Examples
    --------
    >>> number(0.55543), number(17.331), number(12345.6), number(0.0), number(3.2e-7)
    ('0.555', '17.3', '12,346', '0', '3.2 × 10⁻⁷')
    >>> number(8.0), number(float("inf")), number(float("nan"))
    ('8.00', 'without limit', 'not known')
    """
    if math.isnan(value):
        return "not known"
    if math.isinf(value):
        return "without limit"
    if value == 0:
        return "0"
    rounded = float(f"{value:.{digits - 1}e}")
    power = math.floor(math.log10(abs(rounded)))
    if power < -4:
        mantissa = f"{rounded / 10.0**power:.{digits - 1}f}".rstrip("0").rstrip(".")
        raised = str(power).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))
        return f"{mantissa} × 10{raised}"
    return f"{value:,.{max(digits - 1 - power, 0)}f}"


def whole(value: float) -> str:
    """A count: a whole number, or one digit more where it is below ten.

    Examples
    --------
    >>> whole(1234.4), whole(7.26), whole(7.0)
    ('1,234', '7.3', '7')
    """
    if not math.isfinite(value) or abs(value) >= 10 or value == round(value):
        return f"{value:,.0f}" if math.isfinite(value) else number(value)
    return f"{value:.1f}"


def between(low: float, high: float, digits: int = 3) -> str:
    """An interval in words, both ends with the same number of decimals.

    Examples
    --------
    >>> between(0.3747, 0.7414), between(9.2, 11.4), between(96.04, 104.2)
    ('0.375 to 0.741', '9.2 to 11.4', '96 to 104')
    """
    wider = max(abs(low), abs(high))
    if not (math.isfinite(low) and math.isfinite(high)) or wider == 0 or wider < 1e-4:
        return f"{number(low, digits)} to {number(high, digits)}"
    decimals = max(digits - 1 - math.floor(math.log10(wider)), 0)
    return f"{low:,.{decimals}f} to {high:,.{decimals}f}"


def interval(low: float, high: float, digits: int = 3) -> str:
    """The usual clause of a 95 % interval.

    Examples
    --------
    >>> interval(15.94, 19.94)
    '95 % interval 15.9 to 19.9'
    """
    return f"95 % interval {between(low, high, digits)}"


def distance(metres: float) -> str:
    """A distance in metres with at least two digits that count.

    Examples
    --------
    >>> distance(3.469), distance(5.0), distance(132.4)
    ('3.5', '5', '132')
    """
    return number(metres, 2).removesuffix(".0")


def counts_between(low: float, high: float) -> str:
    """An interval of counts.

    Examples
    --------
    >>> counts_between(165.0, 1188.0)
    '165 to 1,188'
    """
    return f"{whole(low)} to {whole(high)}"


def probability(value: float) -> str:
    """A p-value: two digits that count, or that it is below what was simulated.

    Examples
    --------
    >>> probability(0.001), probability(0.3456), probability(1.0)
    ('0.001', '0.35', '1')
    """
    return f"{value:.2g}" if value < 1 else "1"


def share(value: float) -> str:
    """A share in per cent.

    Examples
    --------
    >>> share(0.114), share(0.0), share(0.0004), share(1.0), share(0.999)
    ('11 %', '0 %', 'below 0.1 %', '100 %', '99.9 %')
    """
    if value == 0 or value == 1:
        return f"{100 * value:.0f} %"
    if value < 0.001:
        return "below 0.1 %"
    if value > 0.999:
        return "over 99.9 %"
    if value < 0.01 or value > 0.99:
        return f"{100 * value:.1f} %"
    return f"{100 * value:.0f} %"


def per_hectare(per_square_metre: float) -> float:
    """From m⁻² to ha⁻¹."""
    return per_square_metre * HECTARE


def listed(parts: Sequence[str]) -> str:
    """Join with commas and a last "and".

    Examples
    --------
    >>> listed(["a"]), listed(["a", "b"]), listed(["a", "b", "c"])
    ('a', 'a and b', 'a, b and c')
    """
    if len(parts) < 2:
        return "".join(parts)
    return f"{', '.join(parts[:-1])} and {parts[-1]}"


def plural(count: int, noun: str, many: str | None = None) -> str:
    """A count with its noun.

    Examples
    --------
    >>> plural(1, "cluster"), plural(2004, "cluster"), plural(0, "survey", "surveys")
    ('1 cluster', '2,004 clusters', '0 surveys')
    """
    return f"{count:,} {noun if count == 1 else many or noun + 's'}"
