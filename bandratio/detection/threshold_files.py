"""Thresholds in a small JSON file: made once from a laboratory, used on every scene of that camera."""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path

from .._checks import suggestion
from .threshold import Threshold

__all__ = ["read_thresholds", "write_thresholds"]


def write_thresholds(
    thresholds: Mapping[str, Threshold], path: str | Path, *, overwrite: bool = False
) -> Path:
    """Write thresholds and what they rest on to a JSON file.

    Parameters
    ----------
    thresholds : dict of str to Threshold
        As :func:`bandratio.thresholds` gives them.
    path : path
        File to write.
    overwrite : bool
        Replace what is there.

    Returns
    -------
    Path

    Raises
    ------
    FileExistsError
        If the file exists and `overwrite` is False.

    See Also
    --------
    read_thresholds : the way back.
    """
    path = Path(path)
    if path.exists() and not overwrite:
        raise FileExistsError(f"{path} exists already; give another name, or overwrite=True")
    told = {name: each.describe() for name, each in thresholds.items()}
    unfinished = path.with_name(f".{path.stem}.unfinished{path.suffix}")
    try:
        unfinished.write_text(json.dumps(told, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
        unfinished.replace(path)
    finally:
        unfinished.unlink(missing_ok=True)
    return path


def read_thresholds(path: str | Path, name: str | None = None) -> dict[str, Threshold]:
    """Read thresholds from a JSON file that `write_thresholds` made.

    Parameters
    ----------
    path : path
        The file.
    name : str, optional
        Only this parameter's threshold.

    Returns
    -------
    dict of str to Threshold
        As they were written, but for the curve of their separation.

    Raises
    ------
    ValueError
        If the file is no such file, or holds no threshold of `name`.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     file = write_thresholds({"red_slope": Threshold(9.0, 0.5)}, Path(folder) / "thresholds.json")
    ...     read_thresholds(file)["red_slope"].value
    9.0
    """
    path = Path(path)
    try:
        told = json.loads(path.read_text(encoding="utf-8"))
        found = {str(key): Threshold.from_description(each) for key, each in told.items()}
    except (AttributeError, TypeError, ValueError, UnicodeDecodeError) as error:
        raise ValueError(
            f"{path}: not a file of thresholds ({error}); br.write_thresholds makes one"
        ) from None
    if name is None:
        return found
    if name not in found:
        raise ValueError(f"{path}: holds no threshold of {name!r}{suggestion(name, found)}")
    return {name: found[name]}
