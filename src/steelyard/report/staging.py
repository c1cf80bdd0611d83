"""Write a set of files all or nothing: beside the place where they go, then renamed into it.

Knows names, bytes and the disk; refuses to know what the files say.
"""

from __future__ import annotations

import errno
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from steelyard.errors import OutputError

_MENDS = {
    errno.ENOSPC: "Free some space, or choose another place for the results.",
    errno.EDQUOT: "Free some of your quota, or choose another place for the results.",
    errno.EACCES: "Choose a folder you may write to.",
    errno.EPERM: "Choose a folder you may write to.",
    errno.EROFS: "The disk is read-only: choose another place for the results.",
    errno.ENOTDIR: "Choose a folder, not a file, for the results.",
    errno.EISDIR: "Move that folder away, or choose another place for the results.",
    errno.ENAMETOOLONG: "Choose a shorter name for the folder.",
}


class Staging:
    """A folder beside the one the files go to; ``path(name)`` is where a file is written first."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.names: list[str] = []

    def path(self, name: str) -> Path:
        """Return where to write the file ``name``, and remember it."""
        self.names.append(name)
        return self.folder / name


@contextmanager
def staged(directory: Path) -> Iterator[Staging]:
    """Give a staging folder; when the block ends well, its files replace those of ``directory``.

    Whatever goes wrong before, an interrupt included, leaves ``directory`` as it was: the files of an
    earlier run, or no folder. The files are flushed to the disk before the first is renamed, and files of
    an earlier run are kept until the last new one is in place.

    Raises
    ------
    OutputError
        The folder cannot be made or written to, or the disk is full; names what and the mend.
    """
    made: list[Path] = []
    folder: Path | None = None
    done = False
    try:
        _make(directory, made)
        folder = Path(tempfile.mkdtemp(prefix=".steelyard-", dir=directory))
        staging = Staging(folder)
        yield staging
        for name in staging.names:
            _flush(folder / name)
        _replace(folder, directory, staging.names)
        done = True
    except OSError as error:
        raise OutputError(
            f"The results cannot be written to {directory}: {error.strerror or error}.",
            mend=_MENDS.get(error.errno or 0, "Check the folder and the disk."),
        ) from error
    finally:
        if folder is not None:
            shutil.rmtree(folder, ignore_errors=True)
        if not done:
            for path in reversed(made):
                with suppress(OSError):
                    path.rmdir()


def refuse_unusable(directory: Path) -> None:
    """Refuse a folder that results could not be written to, before the work is done; leaves nothing behind.

    Raises
    ------
    OutputError
        As :func:`staged`.
    """
    with suppress(_OnlyTrying), staged(directory):
        raise _OnlyTrying


class _OnlyTrying(Exception):
    """Ends a trial of a folder."""


def _make(directory: Path, made: list[Path]) -> None:
    """Make the folder and those above it that are missing, adding what was made to ``made``."""
    if directory.exists() and not directory.is_dir():
        raise NotADirectoryError(errno.ENOTDIR, "it is a file", str(directory))
    missing = [path for path in (directory, *directory.parents) if not path.exists()]
    for path in reversed(missing):
        made.append(path)
        path.mkdir()


def _replace(folder: Path, directory: Path, names: list[str]) -> None:
    """Rename the files into place; on any failure put back those that were there before."""
    for name in names:
        if (directory / name).is_dir():
            raise IsADirectoryError(
                errno.EISDIR, f"a folder there has the name {name}", str(directory / name)
            )
    aside = folder / "before"
    aside.mkdir()
    try:
        for name in names:
            _keep(directory / name, aside / name)
        for name in names:
            os.replace(folder / name, directory / name)
    except BaseException:
        for name in names:
            if (aside / name).exists():
                os.replace(aside / name, directory / name)
            elif not (folder / name).exists():
                (directory / name).unlink(missing_ok=True)
        raise


def _keep(path: Path, aside: Path) -> None:
    """Give an existing file a second name, so that it is there all the time; or move it where that fails."""
    if not path.exists():
        return
    try:
        os.link(path, aside)
    except OSError:
        os.replace(path, aside)


def _flush(path: Path) -> None:
    with path.open("rb+") as file:
        os.fsync(file.fileno())
