"""The trial file: which robot, which markers, which floor, which commands.

Hand-written TOML. Anything that cannot be right is refused with a `TrialError`: a silent guess here would
become a wrong number at the end.
"""

from __future__ import annotations

import difflib
import functools
import tomllib
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from floorswing.columns import TURN_COLUMNS
from floorswing.commands_file import MOST_WHEEL_DEG, Commands, read_commands_file
from floorswing.errors import TrialError, one_line, why
from floorswing.keys import Keys, listed, shown
from floorswing.small_file import read_small_text
from vision.records import MarkerSetup

DEFAULT_DICTIONARY = "APRILTAG_36h11"
DEFAULT_FORE = 0
DEFAULT_AFT = 1
DEFAULT_CARDS = (10, 29)
MOST_MM = 5_000.0
"""Nothing on a small robot or its floor is larger; a slip of the decimal point is."""

MOST_DELAY_US = 200.0
"""No camera takes longer from row to row; 0 is a global shutter, and less one that takes its rows upwards."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Robot:
    """The robot: its wheels, and the size of the markers on it."""

    name: str
    wheel_diameter_mm: float
    marker_side_mm: float
    inner_track_mm: float | None = None
    tyre_width_mm: float | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Markers:
    """The codes: dictionary, ids of the two robot markers, first and last id of the floor cards."""

    dictionary: str = DEFAULT_DICTIONARY
    fore: int = DEFAULT_FORE
    aft: int = DEFAULT_AFT
    cards: tuple[int, int] | None = DEFAULT_CARDS


@dataclass(frozen=True, kw_only=True, slots=True)
class Floor:
    """The floor: what it is, and the size of the cards on it (None for no cards)."""

    surface: str
    card_side_mm: float | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Camera:
    """The camera: the time from one row of its picture to the next (None to estimate it, 0 for a global shutter)."""

    line_delay_us: float | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Trial:
    """One filmed run of commands with one robot set-up on one surface.

    Parameters
    ----------
    path : Path
        The trial file.
    robot, markers, floor, commands, camera
        Its tables.
    """

    path: Path
    robot: Robot
    markers: Markers
    floor: Floor
    commands: Commands
    camera: Camera = Camera()

    def marker_setup(self) -> MarkerSetup:
        """Return what has to be looked for in the pictures."""
        first_last = self.markers.cards if self.floor.card_side_mm is not None else None
        return MarkerSetup(
            dictionary=self.markers.dictionary,
            fore_id=self.markers.fore,
            aft_id=self.markers.aft,
            card_ids=tuple(range(first_last[0], first_last[1] + 1)) if first_last else (),
            marker_side_mm=self.robot.marker_side_mm,
            card_side_mm=self.floor.card_side_mm,
            line_delay_s=None if self.camera.line_delay_us is None else 1e-6 * self.camera.line_delay_us,
        )

    def as_dict(self) -> dict[str, Any]:
        """Return the trial as plain values, ready for JSON; `trial_from_dict` is the way back."""
        plain = asdict(self)
        plain["path"] = str(self.path)
        plain["commands"]["factors"] = {name: list(values) for name, values in self.commands.factors}
        return plain


def trial_from_dict(plain: dict[str, Any]) -> Trial:
    """Return the trial that `Trial.as_dict` described.

    Raises
    ------
    KeyError, TypeError, ValueError
        If `plain` is not such a description.
    """
    cards = plain["markers"]["cards"]
    commands = plain["commands"]
    return Trial(
        path=Path(plain["path"]),
        robot=Robot(**plain["robot"]),
        markers=Markers(**{**plain["markers"], "cards": tuple(cards) if cards is not None else None}),
        floor=Floor(**plain["floor"]),
        commands=Commands(
            wheel_deg=tuple(float(value) for value in commands["wheel_deg"]),
            factors=tuple((name, tuple(values)) for name, values in commands["factors"].items()),
            file=commands["file"],
        ),
        camera=Camera(**plain.get("camera", {})),
    )


def read_trial(path: Path | str) -> Trial:
    """Read a trial file.

    Parameters
    ----------
    path : path-like
        The TOML file. A commands file it names is looked for beside it.

    Raises
    ------
    TrialError
        If anything in it cannot be used; the message names file, key, what was found, what is accepted.
    """
    path = Path(path)
    return trial_from_text(_text_of(path), path)


def trial_from_text(text: str, path: Path) -> Trial:
    """Return the trial that a text describes.

    Parameters
    ----------
    text : str
        TOML.
    path : Path
        The file it comes from or will go to, for the messages and to find a commands file beside it.

    Raises
    ------
    TrialError
        The same as `read_trial`.
    """
    top = Keys(path, "", _tables_of(text, path))
    robot, markers, floor, commands, camera = (
        top.table("robot"),
        top.table("markers", optional=True),
        top.table("floor"),
        top.table("commands"),
        top.table("camera", optional=True),
    )
    top.finish()
    read_floor = _floor(floor)
    return Trial(
        path=path,
        robot=_robot(robot),
        markers=_markers(markers, with_cards=read_floor.card_side_mm is not None),
        floor=read_floor,
        commands=_commands(commands, path),
        camera=_camera(camera),
    )


def _text_of(path: Path) -> str:
    """Return the file's text; a byte order mark, as some editors leave it, is not held against it."""
    try:
        return read_small_text(path)
    except UnicodeDecodeError:
        raise TrialError(path, "", "not UTF-8 text", "a trial file is TOML, saved as UTF-8") from None
    except (OSError, ValueError) as error:
        raise TrialError(path, "", f"cannot be read ({why(error)})", "expected a trial file (TOML)") from None


def _tables_of(text: str, path: Path) -> dict[str, Any]:
    start = "see `floorswing new` for a file to start from"
    try:
        return tomllib.loads(text)
    except RecursionError:
        raise TrialError(path, "", "nested too deeply", start) from None
    except ValueError as error:  # also the limit on the digits of a whole number
        raise TrialError(path, "", f"not TOML ({one_line(error)})", start) from None


def _robot(keys: Keys) -> Robot:
    robot = Robot(
        name=keys.text("name"),
        wheel_diameter_mm=keys.number("wheel_diameter_mm", above=0, most=MOST_MM, unit="mm"),
        inner_track_mm=keys.optional_number("inner_track_mm", above=0, most=MOST_MM, unit="mm"),
        tyre_width_mm=keys.optional_number("tyre_width_mm", above=0, most=MOST_MM, unit="mm"),
        marker_side_mm=keys.number("marker_side_mm", above=0, most=MOST_MM, unit="mm"),
    )
    keys.finish()
    return robot


def _floor(keys: Keys) -> Floor:
    floor = Floor(
        surface=keys.text("surface"),
        card_side_mm=keys.optional_number("card_side_mm", above=0, most=MOST_MM, unit="mm"),
    )
    keys.finish()
    return floor


def _camera(keys: Keys) -> Camera:
    camera = Camera(
        line_delay_us=keys.optional_number(
            "line_delay_us", above=-MOST_DELAY_US, most=MOST_DELAY_US, unit="microseconds"
        )
    )
    keys.finish()
    return camera


def _markers(keys: Keys, *, with_cards: bool) -> Markers:
    dictionary = _dictionary(keys)
    last_id = dictionary_sizes()[dictionary] - 1
    fore = keys.whole("fore", least=0, most=last_id, default=DEFAULT_FORE)
    aft = keys.whole("aft", least=0, most=last_id, default=DEFAULT_AFT)
    if fore == aft:
        keys.refuse("aft", f"found {aft}, the same as fore", "accepted: two different ids")
    cards = _cards(keys, last_id)
    if cards and (with_cards or keys.has("cards")):
        for name, marker in (("fore", fore), ("aft", aft)):
            if cards[0] <= marker <= cards[1]:
                found = f"the ids {cards[0]} to {cards[1]} include {marker}, the {name} marker's"
                keys.refuse(
                    "cards", found, "accepted: [first, last] without the robot's ids, or [] for no cards"
                )
    keys.finish()
    return Markers(dictionary=dictionary, fore=fore, aft=aft, cards=cards)


def _cards(keys: Keys, last_id: int) -> tuple[int, int] | None:
    if not keys.has("cards"):
        return DEFAULT_CARDS
    ids = keys.whole_list("cards", least=0, most=last_id)
    if not ids:
        return None
    if len(ids) != 2 or ids[0] > ids[1]:
        keys.refuse("cards", f"found {shown(ids)}", "accepted: [first id, last id], or [] for no cards")
    return ids[0], ids[1]


def _dictionary(keys: Keys) -> str:
    if not keys.has("dictionary"):
        return DEFAULT_DICTIONARY
    name = keys.text("dictionary")
    known = dictionary_sizes()
    if name not in known:
        plain = {other.casefold(): other for other in known}
        close = difflib.get_close_matches(name.casefold().removeprefix("dict_"), plain, n=1)
        hint = f"did you mean {plain[close[0]]}? " if close else ""
        keys.refuse("dictionary", f"found {shown(name)}", f"{hint}accepted: {listed(list(known))}")
    return name


@functools.cache
def dictionary_sizes() -> dict[str, int]:
    """Return how many codes each of OpenCV's predefined dictionaries has, by name without ``DICT_``."""
    import cv2  # here, because it takes longer to load than everything else that reads a trial file

    names = [name for name in dir(cv2.aruco) if name.startswith("DICT_")]
    return {
        name.removeprefix("DICT_"): len(cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, name)).bytesList)
        for name in names
    }


def _commands(keys: Keys, path: Path) -> Commands:
    has_list, has_file = keys.has("wheel_deg"), keys.has("file")
    if has_list and has_file:
        keys.refuse("file", "found beside wheel_deg", "accepted: one of the two")
    if has_file:
        name = keys.text("file")
        keys.finish()
        return read_commands_file(path.parent / name, TURN_COLUMNS, name)
    commands = Commands(wheel_deg=keys.number_list("wheel_deg", most=MOST_WHEEL_DEG, unit="wheel degrees"))
    keys.finish()
    return commands
