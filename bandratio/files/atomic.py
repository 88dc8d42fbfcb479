"""All or nothing: an output is made beside its final name and moved into place when it is whole."""

from __future__ import annotations

import os
import shutil
import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

__all__ = ["beside", "move_into_place", "remove", "require_free"]


def require_free(path: str | Path, *, overwrite: bool = False) -> Path:
    """Return `path` where an output may be written there, else raise and say what to do.

    Raises
    ------
    FileExistsError
        If something is there and `overwrite` is False.
    FileNotFoundError
        If the folder it is to lie in does not exist.
    """
    path = Path(path)
    if not path.parent.is_dir():
        raise FileNotFoundError(f"{path}: the folder {path.parent} does not exist; make it first")
    if os.path.lexists(path) and not overwrite:
        raise FileExistsError(f"{path} exists already; give another name, or --overwrite (overwrite=True)")
    return path


def remove(path: Path) -> None:
    """Remove a file, or a folder with all that is in it, where there is one."""
    if path.is_dir() and not path.is_symlink():
        shutil.rmtree(path)
    else:
        path.unlink(missing_ok=True)


def move_into_place(made: Path, path: Path, *, overwrite: bool = False) -> None:
    """Give a finished file or folder its final name; an older one there is removed only afterwards.

    Raises
    ------
    FileExistsError
        If something has come to be there in the meantime and `overwrite` is False.
    """
    require_free(path, overwrite=overwrite)
    if not path.is_dir() and not made.is_dir():
        made.replace(path)
        return
    older = path.with_name(f".{path.name}.{uuid.uuid4().hex[:8]}.old")
    if os.path.lexists(path):
        path.rename(older)
    made.rename(path)
    remove(older)


@contextmanager
def beside(path: str | Path, *, overwrite: bool = False) -> Iterator[Path]:
    """Name beside the final one to write to; moved into place at the end, removed after an error.

    Parameters
    ----------
    path : str or Path
        Final name.
    overwrite : bool
        Replace what is there.

    Yields
    ------
    Path
        In the same folder, with the same ending.

    Raises
    ------
    FileExistsError
        If something is there and `overwrite` is False, before anything is written.

    Examples
    --------
    >>> import tempfile
    >>> folder = Path(tempfile.mkdtemp())
    >>> with beside(folder / "page.html") as unfinished:
    ...     _ = unfinished.write_text("whole")
    >>> [file.name for file in folder.iterdir()]
    ['page.html']
    """
    path = require_free(path, overwrite=overwrite)
    made = path.with_name(f".{path.stem}.{uuid.uuid4().hex[:8]}{path.suffix}")
    try:
        yield made
        move_into_place(made, path, overwrite=overwrite)
    finally:
        remove(made)
