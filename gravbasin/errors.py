"""What can go wrong, as one small tree of exceptions.

* GravbasinError: everything this package raises on purpose; the command line prints it as one line.

  - InputError: a file, field or argument breaks a rule; the message says which, the value, the rule and the remedy.
  - CannotFinish: the input is sound but the work cannot be completed here (memory, disk, a failed audit).

* GravbasinWarning: the result stands, but the reader must know something about it.
"""

from __future__ import annotations

__all__ = ["CannotFinish", "GravbasinError", "GravbasinWarning", "InputError"]


class GravbasinError(Exception):
    """Base of every error gravbasin raises on purpose."""


class InputError(GravbasinError, ValueError):
    """A file, field or argument breaks a rule.

    Parameters
    ----------
    what : str
        The thing at fault: a field's dotted name, an argument, a column.
    value : object
        The value that was met; shortened in the message.
    rule : str
        What must hold, as a clause ("must be greater than 0 km").
    remedy : str
        What to do about it, as a sentence without full stop ("give metres, not degrees").
    where : str, optional
        The file or function in which it was met.

    Examples
    --------
    >>> print(InputError("history.erosion_km", -3, "must not be negative", "give the rock removed", "a.toml"))
    a.toml: history.erosion_km = -3: must not be negative; give the rock removed
    """

    def __init__(self, what: str, value: object, rule: str, remedy: str, where: str = "") -> None:
        self.what, self.value, self.rule, self.remedy, self.where = what, value, rule, remedy, where
        text = str(value)
        shown = text if len(text) <= 80 else text[:77] + "..."
        place = f"{where}: " if where else ""
        super().__init__(f"{place}{what} = {shown}: {rule}; {remedy}")


class CannotFinish(GravbasinError, RuntimeError):
    """The input is sound but the work cannot be completed on this machine or within the stated limits."""


class GravbasinWarning(UserWarning):
    """The result stands, but the reader must know something about it."""
