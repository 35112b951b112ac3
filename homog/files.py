"""Files and folders that appear whole or not at all.

A file is written under another name beside its place and renamed at the end. A folder grows as `NAME.partial` (inside
the folder, as `.partial`, if that is there already: it may be a mount) and is renamed, or its contents moved up, at the
end; what is worth going on with is left when it fails. Results that are there are never overwritten unasked.
"""

from __future__ import annotations

import errno
import os
import shutil
import tempfile
from collections.abc import Callable, Collection, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from homog.errors import InputError

FULL = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG)
PARTIAL, WHOLE = ".partial", ".whole"


@contextmanager
def writing(place: Path, only: Collection[int] = ()) -> Iterator[None]:
    """Turn the system's word that a place cannot be written to (only these error numbers) into an InputError."""
    try:
        yield
    except OSError as error:
        if only and error.errno not in only:
            raise
        reason = error.strerror or str(error)
        raise InputError(f"Cannot write '{place}': {reason}; choose another place or make room") from error


def check_free(path: Path, *, overwrite: bool = False) -> None:
    """Raise InputError where a file may not go: it is there (unless `overwrite`), is a folder, or has no folder."""
    with writing(path):
        if path.is_dir():
            raise InputError(f"'{path}' is a folder; give the name of a file")
        if path.exists() and not overwrite:
            raise InputError(f"File '{path}' is there already; choose another name or add --overwrite")
        if not os.access(path.parent, os.W_OK):
            raise InputError(f"Cannot write '{path}': no folder '{path.parent}' that may be written to; make it first")


@contextmanager
def whole_file(path: Path, *, overwrite: bool = False) -> Iterator[Path]:
    """Yield a temporary path beside `path`, renamed to it if the block succeeds and removed if not.

    Raises
    ------
    InputError
        As `check_free`, and for a folder that cannot be written to or is full.
    """
    check_free(path, overwrite=overwrite)
    with writing(path):
        handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.stem}.", suffix=path.suffix)
        os.close(handle)
    temporary = Path(name)
    try:
        with writing(path, FULL):
            yield temporary
        with writing(path):
            temporary.chmod(0o666 & ~_umask())
            os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def partial(folder: Path) -> Path:
    """Return where a folder grows: where one stopped growing, else inside it if it is there, else beside it."""
    inside, beside = folder / PARTIAL, folder.with_name(folder.name + PARTIAL)
    return inside if inside.exists() or (folder.exists() and not beside.exists()) else beside


@contextmanager
def whole_folder(
    folder: Path, *, resume: bool = False, worth: Callable[[Path], bool] = lambda place: False
) -> Iterator[Path]:
    """Yield a folder whose contents become those of `folder` if the block succeeds.

    If it does not, they are removed, or left to be gone on with (`resume`) where `worth(place)` says so. A new folder
    appears by one renaming; into one that is there and empty the contents are moved.

    Raises
    ------
    InputError
        For a folder that already holds something, one that stopped growing (unless `resume`), or a place that cannot
        be written to or is full.
    """
    name, folder = str(folder), Path(os.path.abspath(folder))
    with writing(folder):
        if (folder / WHOLE).is_dir():  # killed while it moved
            _move_up(folder)
        place = partial(folder)
        there = folder.exists()
        files = [path for path in (folder, *folder.parents) if path.is_file()]
        if files:
            raise InputError(f"Cannot write to '{name}': '{files[0]}' is a file; give the name of a new folder")
        if there and any(entry != place for entry in folder.iterdir()):
            raise InputError(f"Folder '{name}' already holds results; choose another name or remove it first")
        if place.exists() and not resume:
            raise InputError(f"A run into '{name}' has stopped; go on with --resume, or remove '{place}' first")
        made = [parent for parent in folder.parents if not parent.exists()]
        place.mkdir(parents=True, exist_ok=True)
    try:
        with writing(folder, FULL):
            yield place
        with writing(folder):
            if place.parent == folder:
                os.replace(place, folder / WHOLE)
                _move_up(folder)
            else:
                if there:  # made and left empty since the run stopped
                    folder.rmdir()
                os.replace(place, folder)
    except BaseException:
        if not worth(place):
            shutil.rmtree(place, ignore_errors=True)
        raise
    finally:
        for parent in made:  # innermost first; one that holds something stays
            with suppress(OSError):
                parent.rmdir()


def _move_up(folder: Path) -> None:
    for entry in list((folder / WHOLE).iterdir()):
        os.replace(entry, folder / entry.name)
    (folder / WHOLE).rmdir()
