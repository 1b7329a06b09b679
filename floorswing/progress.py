"""A progress bar for work that turns out to take a while, and only where somebody watches."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from contextlib import AbstractContextManager
from types import TracebackType
from typing import Any

import click

WAIT_S = 2.0
"""Work that is over sooner than this shows no bar."""
STEPS = 1000


class Bar(AbstractContextManager["Bar"]):
    """A bar on standard error that appears after two seconds, if standard error is a terminal.

    Parameters
    ----------
    label : str
        What is being done.
    clock : callable
        Returns seconds; for tests.
    """

    def __init__(self, label: str, clock: Callable[[], float] = time.monotonic) -> None:
        self._label = label
        self._clock = clock
        self._started_s = clock()
        self._bar: Any = None
        self._watched = sys.stderr.isatty()

    def __call__(self, fraction: float) -> None:
        """Show that `fraction` (0 to 1) of the work is done."""
        if not self._watched:
            return
        if self._bar is None:
            if self._clock() - self._started_s < WAIT_S:
                return
            self._bar = click.progressbar(length=STEPS, label=self._label, file=sys.stderr)
            self._bar.__enter__()
        self._bar.update(max(0, round(min(fraction, 1.0) * STEPS) - self._bar.pos))

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._bar is not None:
            self._bar.__exit__(kind, error, trace)
            self._bar = None


class Bars(AbstractContextManager["Bars"]):
    """One bar after the other, as work goes on from one name to the next."""

    def __init__(self) -> None:
        self._name: str | None = None
        self._bar: Bar | None = None

    def __call__(self, name: str, fraction: float) -> None:
        """Show that `fraction` (0 to 1) of the work called `name` is done."""
        if name != self._name or self._bar is None:
            self.clear()
            self._name, self._bar = name, Bar(name)
        self._bar(fraction)

    def clear(self) -> None:
        """End the bar that is shown, so that other lines can be written."""
        if self._bar is not None:
            self._bar.__exit__(None, None, None)
        self._name = self._bar = None

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.clear()
