"""Result folders: built aside under a hidden name, put in place whole, gone on from after a stop."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

from gapfit.errors import InputError
from gapfit.storage import read_json

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
        if self.path.is_dir() and any(self.path.iterdir()) and not (self.path / "run.json").is_file():
            raise InputError(
                f"{path} holds files that are no results of gapfit; name a new or empty folder with --out"
            )

    @property
    def fits(self) -> Path:
        """Folder of the fits that are done."""
        return self.building / "fits"

    def open(self) -> None:
        """Make the hidden folder, keeping only fits of an earlier run that stopped."""
        self.building.mkdir(parents=True, exist_ok=True)
        for entry in self.building.iterdir():
            if entry != self.fits:
                _remove(entry)
        self.fits.mkdir(exist_ok=True)

    def written(self) -> list[str]:
        """Relative names of the files made so far, fits left out."""
        files = (entry for entry in self.building.rglob("*") if entry.is_file())
        return sorted(
            entry.relative_to(self.building).as_posix() for entry in files if self.fits not in entry.parents
        )

    def finish(self) -> None:
        """Put the new results in place of the old ones; files of the user's own are carried over."""
        _remove(self.fits)
        _remove(self._retired)
        if self.path.exists():
            _carry_over(self.path, self.building)
            os.replace(self.path, self._retired)
        os.replace(self.building, self.path)
        _remove(self._retired)


def _carry_over(old: Path, new: Path) -> None:
    """Copy what the last run did not write."""
    if not (old / "run.json").is_file():
        return
    own = set(read_json(old / "run.json").get("files", ()))
    for entry in sorted(old.rglob("*")):
        name = entry.relative_to(old)
        if entry.is_file() and name.as_posix() not in own and not (new / name).exists():
            (new / name).parent.mkdir(parents=True, exist_ok=True)
            shutil.copy2(entry, new / name)


def _remove(entry: Path) -> None:
    if entry.is_dir() and not entry.is_symlink():
        shutil.rmtree(entry)
    elif entry.exists() or entry.is_symlink():
        entry.unlink()
