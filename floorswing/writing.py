"""Putting files on the disk whole or not at all.

A file is written beside its place under a hidden name, flushed to the disk, and renamed; a folder likewise.
Whatever stops the program in between (a full disk, Ctrl-C) leaves what was there before.
"""

from __future__ import annotations

import contextlib
import os
import re
import shutil
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path

from floorswing.errors import FileError, why

LONGEST_NAME_BYTES = 120
DEVICE_NAMES = {"con", "prn", "aux", "nul", *(f"{port}{n}" for port in ("com", "lpt") for n in range(1, 10))}
"""Names that one widespread operating system keeps for devices; a folder there cannot have them."""


def write_whole(path: Path | str, content: str | bytes) -> Path:
    """Write a file so that its old or its new content is there, never a part.

    Parameters
    ----------
    path : path-like
        Where to write; an existing file is replaced.
    content : str or bytes
        Text is written as UTF-8 without changing its line ends.

    Returns
    -------
    Path
        The file written.

    Raises
    ------
    FileError
        If it cannot be written, or if `path` is a link to somewhere outside its folder.
    """
    path = _through_link(Path(path), Path(path).parent)
    if path.is_dir():
        raise FileError(f"{path}: is a folder; give the name of a file to write")
    hidden = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        _write_flushed(hidden, content)
        os.replace(hidden, path)
    except OSError as error:
        raise FileError(f"{path}: cannot be written ({why(error)})") from error
    finally:
        hidden.unlink(missing_ok=True)
    return path


def _write_flushed(path: Path, content: str | bytes) -> None:
    path.unlink(missing_ok=True)  # what lies there under our hidden name is not ours to write through
    with path.open("xb") as file:
        file.write(content.encode("utf-8", "replace") if isinstance(content, str) else content)
        file.flush()
        os.fsync(file.fileno())


def _through_link(path: Path, folder: Path) -> Path:
    """Return where `path` leads; refuse a link that leads out of `folder`."""
    if not path.is_symlink():
        return path
    target = path.resolve()
    if not target.is_relative_to(folder.resolve()):
        raise FileError(f"{path}: is a link to {target}, outside its folder; remove it or choose another")
    return target


def check_output_folder(out: Path) -> None:
    """Raise `FileError` unless `out` is a writable folder or can become one.

    Worth doing before a long measurement rather than after it.
    """
    existing = next(place for place in (out, *out.absolute().parents) if place.exists() or place.is_symlink())
    if not existing.is_dir():
        raise FileError(f"{existing}: is not a folder; choose another output folder")
    if not os.access(existing, os.W_OK | os.X_OK):
        raise FileError(f"{existing}: no permission to write there; choose another output folder")


def safe_name(stem: str) -> str:
    """Return a folder name for a clip called `stem` that is safe on every system.

    Letters of any script stay; separators, control characters, characters that some systems refuse, and
    leading dots (hidden files) and dashes (options) do not.
    """
    kept = "".join(c if c.isprintable() and c not in '<>:"/\\|?*' else "_" for c in stem)
    kept = kept.encode("utf-8", "replace")[:LONGEST_NAME_BYTES].decode("utf-8", "ignore")
    kept = kept.strip(" ").lstrip(".-").rstrip(". ")
    if not kept:
        return "clip"
    return f"{kept}_" if kept.split(".")[0].casefold() in DEVICE_NAMES else kept


def distinct_names(stems: Iterable[str]) -> list[str]:
    """Return a safe name for each stem, in order, no two the same even where letter case does not count."""
    names: list[str] = []
    used: set[str] = set()
    for stem in stems:
        base = name = safe_name(stem)
        number = 1
        while name.casefold() in used:
            number += 1
            name = f"{base}-{number}"
        used.add(name.casefold())
        names.append(name)
    return names


def write_folder(out: Path, name: str, contents: Mapping[str, str], *, mark: str) -> Path:
    """Write a folder of files so that all of them appear together.

    Parameters
    ----------
    out : Path
        The folder to write into; made if it does not exist.
    name : str
        Name of the new folder.
    contents : mapping of str to str
        Text of each file.
    mark : str
        Name of the file by which an older folder of this kind is known. Only such a folder (or an empty
        one) is replaced, and files in it that are not in `contents` stay.

    Returns
    -------
    Path
        The folder written.

    Raises
    ------
    FileError
        If it cannot be written, or if something else is in its place.
    """
    hidden = out / f".{name}.{os.getpid()}"
    try:
        out.mkdir(parents=True, exist_ok=True)
        target = _replaceable(out / name, out, mark)
        _clear(hidden)
        hidden.mkdir()
        for file, content in contents.items():
            _write_flushed(hidden / file, content)
        _swap(hidden, target, list(contents))
    except OSError as error:
        raise FileError(f"{out / name}: cannot be written ({why(error)})") from error
    finally:
        shutil.rmtree(hidden, ignore_errors=True)
    return out / name


def _clear(hidden: Path) -> None:
    """Remove what lies under a hidden name: a folder with what is in it, of a link the link alone."""
    if hidden.is_symlink():
        hidden.unlink()
    shutil.rmtree(hidden, ignore_errors=True)


def clear_leftovers(out: Path, *, alive: Callable[[int], bool] | None = None) -> None:
    """Finish or remove what a process that was killed while writing left in `out`.

    A killed `write_folder` leaves a hidden folder, named after its process, with a part of the new files or, for a
    moment, with the old ones. The old ones go back to their place; a part of new ones is removed.

    Parameters
    ----------
    out : Path
        The folder that folders are written into; it need not exist.
    alive : callable, optional
        Whether the process of that number is still running; for tests.
    """
    is_alive = alive if alive is not None else _is_alive
    for hidden in sorted(out.glob(".*")) if out.is_dir() else []:
        named = _LEFTOVER.fullmatch(hidden.name)
        if named is None or not hidden.is_dir() or hidden.is_symlink() or is_alive(int(named["process"])):
            continue
        if named["old"]:
            _put_back(hidden, out / named["name"])
        else:
            shutil.rmtree(hidden, ignore_errors=True)


_LEFTOVER = re.compile(r"\.(?P<name>.+)\.(?P<process>[0-9]{1,9})(?P<old>\.old)?")


def _put_back(old: Path, target: Path) -> None:
    """Restore a folder that was to be replaced; if it has been, keep only what the new one does not hold."""
    with contextlib.suppress(OSError):
        if target.is_symlink():  # which may lead elsewhere
            return
        if not target.exists():
            os.rename(old, target)
            return
        for kept in old.iterdir():
            if not (target / kept.name).exists():
                os.rename(kept, target / kept.name)
        shutil.rmtree(old)


def _is_alive(process: int) -> bool:
    if os.name == "nt":  # there is no harmless signal to ask with; what may be in use is left alone
        return True
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except OSError:
        return True
    return True


def _replaceable(target: Path, out: Path, mark: str) -> Path:
    """Return the folder to replace, once it is known to be ours or empty or not there."""
    target = _through_link(target, out)
    if target.exists():
        if not target.is_dir():
            raise FileError(f"{target}: a file is in the way; move it or choose another output folder")
        if any(target.iterdir()) and not (target / mark).exists():
            raise FileError(f"{target}: holds other files and no {mark}; move it or choose another output folder")
    return target


def _swap(hidden: Path, target: Path, written: list[str]) -> None:
    """Put `hidden` in the place of `target`, keeping what else was in it."""
    if not target.exists():
        os.rename(hidden, target)
        return
    old = hidden.with_name(f"{hidden.name}.old")
    os.rename(target, old)
    try:
        os.rename(hidden, target)
    except BaseException:
        os.rename(old, target)
        raise
    for file in written:
        (old / file).unlink(missing_ok=True)
    for kept in old.iterdir():
        os.rename(kept, target / kept.name)
    old.rmdir()
