"""Files named in the settings: where they are, whether they may be read, and their checksums."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from pathlib import Path

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from landcarbon.errors import InputFileError, SettingsError
from landcarbon.inventory.nearest import suggestion

__all__ = ["FileLog", "Source", "find_source", "has_geometry"]


@dataclass(frozen=True)
class Source:
    """One file to read.

    Attributes
    ----------
    name : str
        As written in the settings; used in messages and findings.
    path : Path
        Where it is.
    part : str
        Sheet of a workbook or member of an archive, the part behind ``#``; blank for the first.
    role : str
        What it holds, e.g. ``trees 2014``.
    """

    name: str
    path: Path
    part: str
    role: str

    @property
    def file(self) -> str:
        """Name without the part behind ``#``: that of the file on the disk."""
        return self.name[: -len(self.part) - 1] if self.part else self.name

    @property
    def suffix(self) -> str:
        """Ending that tells the kind of file, in lower case and without ``.gz``."""
        name = self.path.name.lower()
        return Path(name.removesuffix(".gz")).suffix

    def data(self) -> bytes:
        """Return the bytes of the file.

        Raises
        ------
        InputFileError
            If it cannot be read.
        """
        try:
            return self.path.read_bytes()
        except OSError as error:
            raise InputFileError(f"cannot be read ({error.strerror})", where=self.name) from error


def find_source(written: str, folder: Path, role: str, *, allow_outside: bool = False) -> Source:
    """Resolve a file name of the settings.

    Parameters
    ----------
    written : str
        As in the settings, e.g. ``plots.csv`` or ``field.xlsx#Trees``.
    folder : Path
        Folder of the project file.
    role : str
        What the file holds.
    allow_outside : bool
        Whether the file may lie outside ``folder``.

    Raises
    ------
    SettingsError
        If the file lies outside the folder, links and ``..`` followed.
    InputFileError
        If it is missing, a folder, or empty.
    """
    name, part = _parted(written, folder)
    try:
        path = (folder / name).resolve()
        inside = path.is_relative_to(folder.resolve())
        kind = _kind(path)
    except (OSError, ValueError, RuntimeError) as error:  # NUL in the name, a loop of links, no right to look
        raise InputFileError(f"not a usable file name ({error})", where=repr(written)) from error
    if not allow_outside and not inside:
        raise SettingsError(
            f"the file of {role} lies outside the folder of the project file",
            where=written,
            remedy="Move it there, or set allow_outside = true under [inventory].",
        )
    if kind == "missing":
        raise InputFileError(f"no such file ({role})", where=name, remedy=_others(path, folder))
    if kind == "folder":
        raise InputFileError(f"this is a folder, but a file of {role} is wanted", where=name)
    if kind == "other":
        raise InputFileError("this is neither a file nor a folder", where=name)
    if kind == "empty":
        raise InputFileError(f"the file of {role} is empty (0 bytes)", where=name)
    return Source(written, path, part, role)


def _parted(written: str, folder: Path) -> tuple[str, str]:
    """Split off the sheet or member behind ``#``, unless the sign belongs to the name of a file that is there."""
    try:
        whole = (folder / written).exists()
    except (OSError, ValueError):
        whole = False
    if whole:
        return written, ""
    name, _, part = written.partition("#")
    return name, part


def _kind(path: Path) -> str:
    if path.is_dir():
        return "folder"
    if path.is_file():
        return "file" if path.stat().st_size else "empty"
    return "other" if path.exists() else "missing"


def _others(path: Path, folder: Path) -> str:
    if not path.parent.is_dir():
        return f"There is no folder {path.parent.name!r}."
    names = sorted(entry.name for entry in path.parent.iterdir() if entry.is_file())
    return suggestion(path.name, names) or f"Paths are relative to {folder.name or folder}/."


@dataclass
class FileLog:
    """Files read so far."""

    rows: list[dict[str, object]] = field(default_factory=list)

    def add(self, source: Source, rows: int, *, columns: str = "", unused: str = "") -> None:
        """Note a file with the number of its rows, the columns used and those left aside."""
        for path in _members(source.path):
            name = source.file if path == source.path else str(Path(source.file).with_name(path.name))
            with path.open("rb") as opened:  # piece by piece: a raster may be larger than memory
                digest = hashlib.file_digest(opened, "sha256").hexdigest()
            self.rows.append(
                {
                    "file": name,
                    "sheet": source.part,
                    "sha256": digest,
                    "bytes": path.stat().st_size,
                    "rows": rows if path == source.path else 0,
                    "role": source.role,
                    "columns": columns,
                    "unused": unused,
                }
            )

    def frame(self) -> pd.DataFrame:
        """Return the files as a table."""
        names = ["file", "sheet", "sha256", "bytes", "rows", "role", "columns", "unused"]
        frame = pd.DataFrame(self.rows, columns=names)
        return frame.astype({"bytes": "int64", "rows": "int64"})


def _members(path: Path) -> list[Path]:
    """Return the file and, for a Shapefile, the files beside it that belong to it."""
    if path.suffix.lower() != ".shp":
        return [path]
    endings = (".dbf", ".shx", ".prj", ".cpg")
    beside = [entry for entry in sorted(path.parent.glob(f"{path.stem}.*")) if entry.suffix.lower() in endings]
    return [path, *beside]


_VECTOR_SUFFIXES = (".gpkg", ".geojson", ".json", ".shp", ".zip", ".geoparquet")


def has_geometry(source: Source) -> bool:
    """Tell whether a file holds geometries, by its ending or, for Parquet, by its metadata."""
    if source.suffix in _VECTOR_SUFFIXES:
        return True
    if source.suffix != ".parquet":
        return False
    try:
        return b"geo" in (pq.read_schema(source.path).metadata or {})
    except (pa.ArrowInvalid, OSError):
        return False  # the reader of tables will say what is wrong
