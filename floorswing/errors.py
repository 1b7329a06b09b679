"""What the application can tell a user went wrong.

::

    FloorswingError
    ├── TrialError         a trial file or its commands file says something unusable
    ├── FileError          a file or folder cannot be read or written, or does not hold what it should
    └── CommandsMismatch   the commands of the trial do not fit the turns seen in a clip

Each message is one line: what, where, what was found, what is accepted. Errors of the other rooms
(`vision.errors.VisionError`, `calib.errors.CalibError`) have bases of their own; the command line turns all
three families into the same one line in one place.
"""

from __future__ import annotations

from pathlib import Path


class FloorswingError(Exception):
    """Something the user can put right; the message is one line."""


class TrialError(FloorswingError):
    """A trial file, or the commands file it names, says something unusable.

    Parameters
    ----------
    path : Path
        The file at fault.
    where : str
        The key (``[robot] wheel_diameter_mm``) or the line, empty for the file as a whole.
    found : str
        What is there.
    accepted : str
        What would be accepted, or what to do.
    """

    def __init__(self, path: Path, where: str, found: str, accepted: str) -> None:
        place = f"{path}: {where}" if where else str(path)
        super().__init__(f"{place}: {found}; {accepted}")
        self.path = path
        self.where = where
        self.found = found
        self.accepted = accepted


class FileError(FloorswingError):
    """A file or folder cannot be read or written, or does not hold what it should."""


class CommandsMismatch(FloorswingError):
    """The commands of the trial do not fit the turns seen in a clip.

    Parameters
    ----------
    message : str
        One line for the user.
    n_turns, n_commands, n_matched : int
        Turns seen, commands given, and how many pairs could be made of them.
    """

    def __init__(self, message: str, *, n_turns: int, n_commands: int, n_matched: int) -> None:
        super().__init__(message)
        self.n_turns = n_turns
        self.n_commands = n_commands
        self.n_matched = n_matched


def why(error: BaseException) -> str:
    """Return the reason of an operating-system error in a few words."""
    reason = getattr(error, "strerror", None) or str(error) or type(error).__name__
    return one_line(reason).lower()


def one_line(message: object) -> str:
    """Return the text of `message` on one line, what does not print (in file names, say) by its code."""
    text = " ".join(str(message).split())
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)
