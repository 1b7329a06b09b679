"""What can stop a fit, a comparison or a plan.

::

    CalibError
    ├── NotEnoughTurns     too few usable turns for the question asked
    └── NotIdentified      the data cannot tell (no reversal, one command, ...)
"""

from __future__ import annotations


class CalibError(Exception):
    """The question cannot be answered from these turns; the message is one line for the user."""


class NotEnoughTurns(CalibError):
    """Too few usable turns; carries how many were seen and needed.

    Parameters
    ----------
    message : str
        One line for the user.
    n_seen, n_needed : int
        Usable turns found, and the least number that would do.
    """

    def __init__(self, message: str, *, n_seen: int, n_needed: int) -> None:
        super().__init__(message)
        self.n_seen = n_seen
        self.n_needed = n_needed


class NotIdentified(CalibError):
    """The data hold no information on a quantity that was asked for."""
