"""The exceptions a user can meet; each message says what was found, where, what was expected and what to do."""


class HabitatError(Exception):
    """Base class of every error that the user's input or request can cause.

    Parameters
    ----------
    found : str
        What was met, with the offending value.
    where : str, optional
        File, column, variable or key in which it was met.
    expected : str, optional
        What would have been right.
    remedy : str, optional
        What the user can do about it.

    Examples
    --------
    >>> print(InputError("depth -5 m", where="cast.csv", expected="depths of 0 m or more", remedy="check the sign"))
    cast.csv: depth -5 m; expected depths of 0 m or more; check the sign
    """

    def __init__(self, found: str, *, where: str = "", expected: str = "", remedy: str = "") -> None:
        self.found, self.where, self.expected, self.remedy = found, where, expected, remedy
        parts = [f"{where}: {found}" if where else found]
        if expected:
            parts.append(f"expected {expected}")
        if remedy:
            parts.append(remedy)
        super().__init__("; ".join(parts))


class InputError(HabitatError, ValueError):
    """A file, table or value that the user brings cannot be used."""


class UnitError(InputError):
    """A unit is missing, unknown, or not of the kind needed."""


class OutputError(HabitatError, OSError):
    """A result cannot be written."""
