"""The text of a TOML file, or one line that says why it cannot be had."""

from __future__ import annotations

from pathlib import Path

from wakeledger.core.errors import SurveyError


def read_toml_text(path: Path, what: str) -> str:
    """Read a file that a user wrote.

    Parameters
    ----------
    path : Path
        The file.
    what : str
        What it is, for messages ("survey file").

    Returns
    -------
    str

    Raises
    ------
    SurveyError
        If the file is missing, not readable, or not UTF-8 text.
    """
    try:
        content = path.read_bytes()
    except FileNotFoundError as error:
        raise SurveyError(f"the {what} does not exist", file=path, remedy="check the path") from error
    except IsADirectoryError as error:
        raise SurveyError("this is a directory", file=path, remedy=f"name the {what} in it, *.toml") from error
    except PermissionError as error:
        raise SurveyError(f"the {what} may not be read", file=path, remedy="check its permissions") from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise SurveyError(f"the {what} cannot be read ({reason})", file=path, remedy="check the path") from error
    if content[:2] in (b"\xff\xfe", b"\xfe\xff"):
        raise SurveyError("this is UTF-16 text", file=path, remedy="save it as UTF-8")
    if b"\0" in content:
        raise SurveyError("this is not a text file", file=path, remedy=f"give the {what} (TOML), not the data file")
    try:
        text = content.decode()
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise SurveyError(
            "this is not UTF-8 text", file=path, place=f"line {line}", remedy="save it as UTF-8"
        ) from error
    return text
