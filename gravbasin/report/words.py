"""Numbers as a reader wants them: sensible digits, true minus signs, no false precision."""

from __future__ import annotations

import math

__all__ = ["given", "number", "percent", "plus_minus", "probability", "signed"]

MINUS = "−"
UNDEFINED = "not defined"
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def number(value: float | None, digits: int = 3) -> str:
    """A number to so many significant digits; very large and very small ones with a power of ten.

    Examples
    --------
    >>> number(-1234.5), number(0.04321, 2), number(-1.52e14)
    ('−1234', '0.043', '−1.52 × 10¹⁴')
    """
    if value is None or not math.isfinite(value):
        return UNDEFINED
    if value == 0:
        return "0"
    mantissa, _, exponent = f"{value:.{digits - 1}e}".partition("e")
    power = int(exponent)
    if -5 < power < 6:
        return _fixed(value, max(digits - 1 - power, 0))
    return f"{mantissa} × 10{str(power).translate(_SUPERSCRIPT)}".replace("-", MINUS)


def given(value: float) -> str:
    """A number that somebody chose, as they would write it.

    Examples
    --------
    >>> given(0.05), given(60.0), given(0.001)
    ('0.05', '60', '0.001')
    """
    return f"{value:.6g}".replace("-", MINUS)


def signed(value: float | None, decimals: int = 1) -> str:
    """A number with its sign always shown.

    Examples
    --------
    >>> signed(3.14), signed(-0.01)
    ('+3.1', '0.0')
    """
    if value is None or not math.isfinite(value):
        return UNDEFINED
    text = _fixed(value, decimals)
    return text if text.startswith(MINUS) or float(text) == 0 else f"+{text}"


def plus_minus(value: float, error: float) -> str:
    """A value and its standard error, both to the digits the error allows (two where it starts with 1).

    Examples
    --------
    >>> plus_minus(0.5324, 0.193), plus_minus(12.34, 5.1)
    ('0.53 ± 0.19', '12 ± 5')
    """
    if not (math.isfinite(value) and math.isfinite(error)):
        return f"{number(value)} ± {number(error)}"
    if error <= 0:
        return f"{number(value)} ± 0"
    mantissa, _, exponent = f"{error:.1e}".partition("e")
    decimals = max((1 if mantissa.startswith("1") else 0) - int(exponent), 0)
    return f"{_fixed(value, decimals)} ± {_fixed(error, decimals)}"


def probability(p: float | None) -> str:
    """A probability to two digits, never as a bare 0 or 1.

    Examples
    --------
    >>> probability(0.4824), probability(4e-25), probability(0.99991)
    ('0.48', 'below 0.0001', 'above 0.999')
    """
    if p is None or not math.isfinite(p):
        return UNDEFINED
    if p < 1e-4:
        return "below 0.0001"
    if p > 0.999:
        return "above 0.999"
    return number(p, 3 if p > 0.99 else 2)


def percent(share: float, error: float) -> str:
    """A share and its error in per cent, to the first digit of the smaller: a small share never reads as none.

    Examples
    --------
    >>> percent(0.052, 0.086), percent(0.004, 0.024)
    ('5 ± 9 %', '0.4 ± 2.4 %')
    """
    sizes = [100 * abs(v) for v in (share, error) if v]
    decimals = max(-math.floor(math.log10(min(sizes))), 0) if sizes else 0
    return f"{_fixed(100 * share, decimals)} ± {_fixed(100 * error, decimals)} %"


def _fixed(value: float, decimals: int) -> str:
    text = f"{value:.{decimals}f}"
    return text.lstrip("-") if float(text) == 0 else text.replace("-", MINUS)
