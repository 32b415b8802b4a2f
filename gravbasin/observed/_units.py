"""Units as files spell them, and the two conversions a reader makes."""

from __future__ import annotations

from gravbasin.errors import InputError

__all__ = ["is_degrees", "is_gravity", "length_factor", "mgal_factor"]

_GRAVITY = {
    "mgal": 1.0,
    "mgals": 1.0,
    "milligal": 1.0,
    "milligals": 1.0,
    "1e-5 m s-2": 1.0,
    "10-5 m s-2": 1.0,
    "m s-2": 1e5,
    "m/s2": 1e5,
    "m/s/s": 1e5,
    "m.s-2": 1e5,
    "metre/second2": 1e5,
    "meter/second2": 1e5,
    "um s-2": 0.1,
    "um/s2": 0.1,
    "um.s-2": 0.1,
    "gravity unit": 0.1,
    "gravity units": 0.1,
    "g.u.": 0.1,
}
_LENGTH = {
    "m": 1.0,
    "metre": 1.0,
    "metres": 1.0,
    "meter": 1.0,
    "meters": 1.0,
    "km": 1e3,
    "kilometre": 1e3,
    "kilometres": 1e3,
    "kilometer": 1e3,
    "kilometers": 1e3,
}


def _plain(units: str) -> str:
    text = units.strip().lower().replace("**", "").replace("^", "").replace("²", "2").replace("⁻", "-")
    return text.replace("µ", "u").replace("μ", "u").replace("·", " ")


def is_gravity(units: str | None) -> bool:
    """Whether the text is a unit of gravity that readers convert."""
    return units is not None and _plain(units) in _GRAVITY


def is_degrees(units: str | None) -> bool:
    """Whether the text is some spelling of degrees."""
    return units is not None and _plain(units).startswith(("degree", "deg", "°"))


def mgal_factor(units: str, *, what: str, where: str) -> float:
    """What to multiply values in these units by to have mGal."""
    if not is_gravity(units):
        raise InputError(
            what,
            units,
            "must be a unit of gravity: mGal, m s-2 or um s-2",
            "correct the file, or choose another variable",
            where,
        )
    return _GRAVITY[_plain(units)]


def length_factor(units: str, *, what: str, where: str) -> float:
    """What to multiply coordinates in these units by to have metres; degrees are refused."""
    if is_degrees(units):
        raise InputError(what, units, "must be a length, not degrees", "project the map to metres first", where)
    if _plain(units) not in _LENGTH:
        raise InputError(what, units, "must be m or km", "correct the file, or give coordinate_units", where)
    return _LENGTH[_plain(units)]
