"""Checked access to one table of a hand-written TOML file.

Every wrong key, type or value becomes a `TrialError` that names the file, the key, what was found and what
is accepted. Asking for a key marks it as known; `Keys.finish` then reports the ones nobody asked for.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, NoReturn

from floorswing.errors import TrialError

TYPE_NAMES: dict[type, str] = {
    bool: "true/false",
    int: "a whole number",
    float: "a number",
    str: "a text",
    list: "a list",
    dict: "a table",
}


def shown(value: object, longest: int = 60) -> str:
    """Return `value` as it would be typed in TOML, cut to a readable length."""
    if isinstance(value, bool):
        text = str(value).lower()
    elif isinstance(value, str):
        text = '"' + value.encode("unicode_escape").decode("ascii") + '"'
        if value.isprintable():
            text = f'"{value}"'
    else:
        text = _shown_number(value)
    return text if len(text) <= longest else text[: longest - 3] + "..."


def _shown_number(value: object) -> str:
    """Return a non-text value as text; Python refuses to print whole numbers of thousands of digits."""
    try:
        return " ".join(str(value).split())
    except ValueError:
        return "a number with thousands of digits"


def kind_of(value: object) -> str:
    """Return what kind of value it is, in words."""
    return TYPE_NAMES.get(type(value), f"a {type(value).__name__}")


def listed(words: Sequence[str]) -> str:
    """Return the words as `a, b and c`."""
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"


class Keys:
    """One table of a trial file, read key by key.

    Parameters
    ----------
    path : Path
        The file, for the messages.
    name : str
        Name of the table without brackets; empty for the top level.
    table : mapping
        What the TOML reader returned.
    """

    def __init__(self, path: Path, name: str, table: Mapping[str, Any]) -> None:
        self._path = path
        self._name = name
        self._table = table
        self._known: list[str] = []

    def where(self, key: str) -> str:
        """Return the key as it is named in messages."""
        return f"[{self._name}] {key}" if self._name else f"[{key}]"

    def refuse(self, key: str, found: str, accepted: str) -> NoReturn:
        """Raise the error for `key`."""
        raise TrialError(self._path, self.where(key), found, accepted)

    def has(self, key: str) -> bool:
        """Return whether the key is there, and mark it as known."""
        self._known.append(key)
        return key in self._table

    def _required(self, key: str, accepted: str) -> Any:
        if not self.has(key):
            close = difflib.get_close_matches(key, [name for name in self._table if name != key], n=1)
            self.refuse(key, f"missing (found {close[0]})" if close else "missing", f"accepted: {accepted}")
        return self._table[key]

    def table(self, key: str, *, optional: bool = False) -> Keys:
        """Return the table under `key`; an empty one if it is optional and missing."""
        if optional and not self.has(key):
            return Keys(self._path, key, {})
        value = self._required(key, f"a table [{key}]")
        if not isinstance(value, dict):
            self.refuse(key, f"found {kind_of(value)}, {shown(value)}", f"accepted: a table [{key}]")
        return Keys(self._path, key, value)

    def text(self, key: str) -> str:
        """Return a text that is not blank and has no control characters."""
        accepted = 'a text in quotes, such as "cork tile"'
        value = self._required(key, accepted)
        if not isinstance(value, str):
            self.refuse(key, f"found {kind_of(value)}, {shown(value)}", f"accepted: {accepted}")
        if not value.strip() or not value.isprintable():
            self.refuse(key, f"found {shown(value)}", f"accepted: {accepted}, on one line and not blank")
        return value.strip()

    def number(self, key: str, *, above: float, most: float, unit: str) -> float:
        """Return a finite number above `above` and not above `most`."""
        accepted = f"a number above {above:g} and up to {most:g} ({unit})"
        value = self._required(key, accepted)
        number = self._as_number(key, value, accepted)
        if not above < number <= most:
            self.refuse(key, f"found {shown(value)}", f"accepted: {accepted}")
        return number

    def optional_number(self, key: str, *, above: float, most: float, unit: str) -> float | None:
        """Return the same as `number`, or None if the key is missing."""
        return self.number(key, above=above, most=most, unit=unit) if self.has(key) else None

    def whole(self, key: str, *, least: int, most: int, default: int) -> int:
        """Return a whole number from `least` to `most`, or `default` if the key is missing."""
        if not self.has(key):
            return default
        value = self._table[key]
        self._check_whole(key, value, least, most)
        return int(value)

    def _check_whole(self, key: str, value: object, least: int, most: int) -> None:
        accepted = f"accepted: a whole number from {least} to {most}"
        if isinstance(value, bool) or not isinstance(value, int):
            self.refuse(key, f"found {kind_of(value)}, {shown(value)}", accepted)
        if not least <= value <= most:
            self.refuse(key, f"found {shown(value)}", accepted)

    def whole_list(self, key: str, *, least: int, most: int) -> list[int]:
        """Return a list of whole numbers, each from `least` to `most`."""
        values = self._list(key, "a list of whole numbers")
        for value in values:
            self._check_whole(key, value, least, most)
        return values

    def number_list(self, key: str, *, most: float, unit: str) -> tuple[float, ...]:
        """Return a list of finite numbers other than 0, each between ``-most`` and ``most``."""
        accepted = f"numbers other than 0, from {-most:g} to {most:g} ({unit}), such as [190, -190]"
        values = self._list(key, accepted)
        if not values:
            self.refuse(key, "found an empty list", f"accepted: {accepted}")
        numbers = []
        for position, value in enumerate(values, start=1):
            place = f"{key}, entry {position}"
            number = self._as_number(place, value, accepted)
            if number == 0 or abs(number) > most:
                self.refuse(place, f"found {shown(value)}", f"accepted: {accepted}")
            numbers.append(number)
        return tuple(numbers)

    def _list(self, key: str, accepted: str) -> list[Any]:
        value = self._required(key, accepted)
        if not isinstance(value, list):
            self.refuse(key, f"found {kind_of(value)}, {shown(value)}", f"accepted: {accepted}")
        return value

    def _as_number(self, key: str, value: object, accepted: str) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            self.refuse(key, f"found {kind_of(value)}, {shown(value)}", f"accepted: {accepted}")
        try:
            number = float(value)
        except OverflowError:
            number = math.inf
        if not math.isfinite(number):
            self.refuse(key, f"found {shown(value)}", f"accepted: {accepted}")
        return number

    def finish(self) -> None:
        """Report the first key that nobody asked for."""
        known = list(dict.fromkeys(self._known))
        for key in self._table:
            if key in known:
                continue
            close = difflib.get_close_matches(key, known, n=1)
            hint = f"did you mean {close[0]}? " if close else ""
            place = f"[{self._name}] {shown(key).strip(chr(34))}" if self._name else shown(key).strip('"')
            raise TrialError(self._path, place, "unknown key", f"{hint}accepted here: {listed(known)}")
