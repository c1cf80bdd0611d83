"""Which files a name, a list, a glob or a folder means. Knows names only, and opens no file."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from pathlib import Path

from steelyard.errors import ExtractError

GLOB_SIGNS = frozenset("*?[")


def find_files(extract: str | Path | Sequence[str | Path], folder: Path) -> list[tuple[str, Path]]:
    """Return the name to show and the path of every file, in the order in which they are read.

    Raises
    ------
    ExtractError
        Nothing matches a name, or a file is named twice.
    """
    names = [extract] if isinstance(extract, str | Path) else list(extract)
    found: list[tuple[str, Path]] = []
    for name in names:
        if not isinstance(name, str | Path):
            raise ExtractError(
                f"The list of files holds something that is no file name: {type(name).__name__}.",
                mend="List file names; put tables or frames together into one first.",
            )
        path = folder / name
        if path.is_dir():
            some = [
                p
                for p in sorted(path.rglob("*"))
                if p.is_file() and not any(q[0] in "._" for q in p.relative_to(path).parts)
            ]
        elif path.exists() or not GLOB_SIGNS & set(str(name)):
            some = [path]
        else:
            relative = Path(name)
            base = Path(relative.anchor) if relative.is_absolute() else folder
            pattern = str(relative.relative_to(relative.anchor)) if relative.is_absolute() else str(relative)
            some = sorted(p for p in base.glob(pattern) if p.is_file() and p.name[0] not in "._")
        if not some:
            raise ExtractError(
                f'No file matches "{name}".',
                mend="Check the name; relative names start at the plan's folder.",
            )
        found += [(_display(p, folder), p) for p in some]
    if not found:
        raise ExtractError("No file is named.", mend="Set data.files.")
    _refuse_repeated(found)
    return found


def _refuse_repeated(found: Sequence[tuple[str, Path]]) -> None:
    """Refuse a file that is named twice: each of its rows would count double."""
    counts = Counter(path.resolve() for _, path in found)
    for name, path in found:
        if counts[path.resolve()] > 1:
            raise ExtractError(
                f'The file "{name}" is named {counts[path.resolve()]} times.',
                mend="Name it once, by itself or through a folder or glob.",
            )


def _display(path: Path, folder: Path) -> str:
    """Return the name to show: below the plan's folder where it lies there, else the bare file name."""
    try:
        return path.resolve().relative_to(folder.resolve()).as_posix()
    except ValueError:
        return path.name
