"""Writing a single file so that it is there whole or not at all."""

from __future__ import annotations

import os
import uuid
from pathlib import Path

from landcarbon.errors import ResultsError

__all__ = ["write_text_aside"]


def write_text_aside(path: Path, text: str) -> Path:
    """Write a text file beside its place, then put it there in one step.

    Parameters
    ----------
    path : Path
        The file; an earlier one is replaced.
    text : str
        Its content, written as UTF-8 with line feeds.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ResultsError
        If its folder does not exist, it is a folder itself, or it cannot be written.
    """
    target = Path(path).expanduser()
    if not target.absolute().parent.is_dir():
        raise ResultsError(
            f"there is no folder {str(target.absolute().parent)!r} to write to",
            where=str(path),
            remedy="Make that folder first, or name another file",
        )
    if target.is_dir():
        raise ResultsError("this is a folder, not a file", where=str(path), remedy="Name a file to write")
    unfinished = target.with_name(f".{target.name}.unfinished-{uuid.uuid4().hex}")
    try:
        unfinished.write_text(text, encoding="utf-8", errors="backslashreplace", newline="\n")
        os.replace(unfinished, target)
    except OSError as error:
        raise ResultsError(
            f"the file could not be written: {error.strerror or error}",
            where=str(path),
            remedy="See that the disk has room and that no program has the file open",
        ) from error
    finally:
        unfinished.unlink(missing_ok=True)
    return target
