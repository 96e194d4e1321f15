"""Result folders: built aside under a hidden name, put in place whole, gone on from after a stop."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from gapfit.errors import FileError, InputError
from gapfit.storage import RUN_FORMAT, read_json

__all__ = ["ResultFolder"]


class ResultFolder:
    """The folder of a run while it is being made.

    Everything is written into a hidden folder beside the final one. `finish` puts it in place of the old
    results; until then those stay as they are. Fits that are done stay in the hidden folder if the run
    stops early, so that the same command can go on from them.

    Parameters
    ----------
    path : str or Path
        The final folder; new, empty, or with results of an earlier run.

    Raises
    ------
    InputError
        If the path is a file, or a folder that holds anything but results of an earlier run.
    """

    def __init__(self, path: str | Path) -> None:
        self.path = Path(path).resolve()
        self.building = self.path.parent / f".{self.path.name}.building"
        self._retired = self.path.parent / f".{self.path.name}.old"
        if self._retired.exists() and not self.path.exists():
            os.replace(self._retired, self.path)
        if self.path.is_file():
            raise InputError(f"{path} is a file; name a folder for the results with --out")
        if self.path.is_dir() and any(self.path.iterdir()) and not _is_run(self.path):
            raise InputError(
                f"{path} holds files that are no results of gapfit; name a new or empty folder with --out"
            )

    @property
    def fits(self) -> Path:
        """Folder of the fits that are done."""
        return self.building / "fits"

    @contextmanager
    def open(self) -> Iterator[None]:
        """Make the hidden folder, keeping only fits of an earlier run that stopped.

        If the block raises, the hidden folder stays only where it holds fits.

        Raises
        ------
        InputError
            If nothing can be written there.
        """
        try:
            self.fits.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise InputError(
                f"{self.path} cannot be made ({error.strerror}); name another folder with --out"
            ) from error
        for entry in self.building.iterdir():
            if entry != self.fits:
                _remove(entry)
        try:
            yield
        except BaseException:
            if self.fits.is_dir() and not any(self.fits.glob("*.npz")):
                _remove(self.building)
            raise

    def written(self) -> list[str]:
        """Relative names of the files made so far, fits left out."""
        files = (entry for entry in self.building.rglob("*") if entry.is_file())
        return sorted(
            entry.relative_to(self.building).as_posix() for entry in files if self.fits not in entry.parents
        )

    def finish(self) -> None:
        """Put the new results in place of the old ones; files of the user's own are carried over."""
        _remove(self._retired)
        if self.path.exists():
            _carry_over(self.path, self.building)
        _remove(self.fits)
        if self.path.exists():
            os.replace(self.path, self._retired)
        os.replace(self.building, self.path)
        _remove(self._retired)


def _is_run(folder: Path) -> bool:
    """Whether a folder holds results of an earlier run."""
    try:
        record = read_json(folder / "run.json")
    except FileError:
        return False
    return isinstance(record, dict) and record.get("format") == RUN_FORMAT


def _carry_over(old: Path, new: Path) -> None:
    """Copy what the last run did not write."""
    if not _is_run(old):
        return
    own = set(read_json(old / "run.json").get("files", ()))
    for entry in sorted(old.rglob("*")):
        name = entry.relative_to(old)
        kept = entry.is_file() or entry.is_symlink()
        if kept and name.as_posix() not in own and not (new / name).exists():
            (new / name).parent.mkdir(parents=True, exist_ok=True)
            shutil.copy2(entry, new / name, follow_symlinks=False)


def _remove(entry: Path) -> None:
    if entry.is_dir() and not entry.is_symlink():
        shutil.rmtree(entry)
    elif entry.exists() or entry.is_symlink():
        entry.unlink()
