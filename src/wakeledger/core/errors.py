"""What can go wrong, in words a user can act on.

Every error that a wrong input causes is an `InputError`: it names the file, the place in it, what was found, what is
allowed and what to do, on one line. The command line prints that line and leaves with status 2.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class WakeledgerError(Exception):
    """Base of every error this package raises on purpose."""


class InputError(WakeledgerError, ValueError):
    """Something the user gave is wrong; nothing has been written.

    Parameters
    ----------
    found : str
        What was found, as a statement ("column 'Ux' is not in the file").
    file : str, optional
        The file it was found in.
    place : str, optional
        The place in the file: a key path, a line, a column.
    remedy : str, optional
        What is allowed and what to do about it.
    """

    def __init__(self, found: str, *, file: object = None, place: str | None = None, remedy: str | None = None) -> None:
        self.found = found
        self.file = None if file is None else str(file)
        self.place = place
        self.remedy = remedy
        super().__init__(self.line)

    @property
    def line(self) -> str:
        """The whole message on one line: file, place, what was found, remedy."""
        where = ", ".join(part for part in (self.file, self.place) if part)
        text = f"{where}: {self.found}" if where else self.found
        if self.remedy:
            text = f"{text.rstrip('.')}; {self.remedy}"
        return " ".join(text.split())

    def located(self, *, file: object = None, place: str | None = None) -> InputError:
        """The same error with the file or place filled in where it was still missing.

        Parameters
        ----------
        file, place : str, optional
            Used only where this error does not name its own.

        Returns
        -------
        InputError
            Of the same class as this one.
        """
        return type(self)(self.found, file=self.file or file, place=self.place or place, remedy=self.remedy)


class SurveyError(InputError):
    """The survey file itself is wrong: a key, a value, a unit."""


class DataError(InputError):
    """A data file, or what is in it, is wrong."""


class ProductExistsError(InputError):
    """A product is already there and must not be overwritten."""


class MissingPackageError(InputError):
    """The format was recognised, but the package that reads it is not installed."""


def nearest(word: str, allowed: Iterable[str]) -> str | None:
    """The allowed word closest to a mistyped one, or None.

    Parameters
    ----------
    word : str
        The word as given.
    allowed : iterable of str
        The words that would have been accepted.

    Returns
    -------
    str or None
        The closest match, None where none is close.

    Examples
    --------
    >>> nearest("sped", ["speed", "density"])
    'speed'
    """
    match = difflib.get_close_matches(word, list(allowed), n=1, cutoff=0.5)
    return match[0] if match else None
