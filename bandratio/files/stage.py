"""The unfinished output of a run, beside the final name: its blocks, which of them are whole, and of which job.

A block counts as finished when its marker is there; the marker is moved into place after everything else of the
block is written. So a process may be killed at any moment: what has no marker is made again.
"""

from __future__ import annotations

import fcntl
import json
import os
import shutil
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .quantiles import BinCounts

__all__ = ["Stage", "write_marker"]


class Stage:
    """Folder of an unfinished output, held by one process at a time.

    Parameters
    ----------
    path : Path
        Final name of the output.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self.folder = path.with_name(f".{path.name}.unfinished")
        self._lock: int | None = None

    @property
    def store(self) -> Path:
        """Zarr store of the blocks."""
        return self.folder / "maps.zarr"

    @property
    def done(self) -> Path:
        """Folder of the markers."""
        return self.folder / "done"

    @property
    def moving(self) -> Path:
        """File that is there from the moment the output is whole and about to be moved."""
        return self.folder / "moving"

    def exists(self) -> bool:
        """True where a run has left something."""
        return (self.folder / "job.json").is_file()

    def hold(self) -> None:
        """Claim the folder for this process, until it ends or `release` is called.

        Raises
        ------
        FileExistsError
            If another process is writing the same output.
        """
        self.folder.mkdir(exist_ok=True)
        self._lock = os.open(self.folder / "lock", os.O_CREAT | os.O_RDWR)
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            self.release()
            raise FileExistsError(f"{self.path}: another run is writing it now; wait for its end") from None
        except OSError:
            # some network file systems know no locks; the run is then on its own
            pass

    def release(self) -> None:
        """Let another process claim the folder."""
        if self._lock is not None:
            os.close(self._lock)
            self._lock = None

    def clear(self) -> None:
        """Remove everything but the claim."""
        # the job goes first: what is left after a kill in here is no job's
        for name in ("job.json", "moving"):
            (self.folder / name).unlink(missing_ok=True)
        for entry in list(self.folder.iterdir()):
            if entry.name != "lock":
                shutil.rmtree(entry) if entry.is_dir() else entry.unlink()

    def remove(self) -> None:
        """Remove the folder."""
        if self.folder.is_dir():
            self.clear()
            shutil.rmtree(self.folder)
        self.release()

    def begin(self, job: Mapping[str, Any]) -> None:
        """Write down the job, after the store has been laid out."""
        self.done.mkdir(exist_ok=True)
        unfinished = self.folder / "job.json.new"
        unfinished.write_text(json.dumps(job, indent=1))
        unfinished.replace(self.folder / "job.json")

    def require_same(self, job: Mapping[str, Any]) -> None:
        """Refuse to resume another job, and say what is different.

        Raises
        ------
        ValueError
            Naming the first difference, what it was and what it is.
        """
        before = json.loads((self.folder / "job.json").read_text())
        now = json.loads(json.dumps(job))
        for key in now:
            if before.get(key) == now[key]:
                continue
            was, is_now = _different(before.get(key), now[key])
            told = f" (was {was}, is {is_now})" if key != "computation" else ""
            raise ValueError(
                f"{self.path}: cannot be resumed, since the {key} changed{told}; give what the unfinished run had, or "
                "leave out --resume (resume=True) to begin again"
            )

    def finished(self) -> set[tuple[int, ...]]:
        """Blocks that are whole, by their place in the grid of blocks."""
        return {
            tuple(int(word) for word in marker.stem.split("-"))
            for marker in self.done.iterdir()
            if marker.suffix == ".npy"
        }

    def count_finished(self) -> int:
        """Number of blocks that are whole."""
        try:
            return sum(marker.suffix == ".npy" for marker in self.done.iterdir())
        except FileNotFoundError:
            return 0

    def counts(self, names: Sequence[str]) -> dict[str, BinCounts]:
        """Counts of the named variables, those that were counted, added up over all finished blocks."""
        parts: dict[str, list[BinCounts]] = {name: [] for name in names}
        for file in self.done.glob("*.npy"):
            marker, at = np.load(file), 0
            for of_variable in parts.values():
                missing, bins = int(marker[at]), int(marker[at + 1])
                middle, end = at + 2 + bins, at + 2 + 2 * bins
                of_variable.append(BinCounts(marker[at + 2 : middle], marker[middle:end], missing))
                at = end
        return {name: BinCounts.total(of_variable) for name, of_variable in parts.items()}


def _different(before: Any, now: Any) -> tuple[str, str]:
    """The first entry in which two descriptions differ, short enough for a message."""
    if isinstance(before, dict) and isinstance(now, dict):
        for key in sorted({*before, *now}):
            if before.get(key) != now.get(key):
                was, is_now = _different(before.get(key), now.get(key))
                return f"{key}: {was}", f"{key}: {is_now}"
    texts = []
    for value in (before, now):
        text = "none" if value is None else value if isinstance(value, str) else json.dumps(value)
        texts.append(text if len(text) <= 160 else text[:157] + "…")
    return texts[0], texts[1]


def write_marker(folder: Path, block: tuple[int, ...], counts: Iterable[BinCounts]) -> None:
    """Mark a block as whole, with the counts of its values, those of each variable after the other."""
    pieces: list[NDArray] = []
    for of_variable in counts:
        pieces += [np.array([of_variable.missing, of_variable.bins.size], np.uint32)]
        pieces += [of_variable.bins, of_variable.counts]
    place = "-".join(str(k) for k in block)
    unfinished = folder / f"{place}.{os.getpid()}.new"
    with unfinished.open("wb") as stream:
        np.save(stream, np.concatenate([*pieces, np.empty(0, np.uint32)]))
    unfinished.replace(folder / f"{place}.npy")
