"""Write maps of any size block by block, by whatever dask scheduler is active; a killed run can be continued."""

from __future__ import annotations

import functools
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .atomic import move_into_place, require_free
from .layout import Layout, describe, lay_out, write_template
from .overviews import halved
from .quantiles import BinCounts
from .stage import Stage, write_marker

__all__ = ["BlockWriteError", "Streamed", "stream_maps"]

Progress = Callable[[int, int], None]


class BlockWriteError(OSError):
    """A block of an output that cannot be written; the message names both."""


@dataclass(frozen=True)
class Streamed:
    """A finished output: where it is, and the counts of its variables' values, from the same pass."""

    path: Path
    counts: dict[str, BinCounts]


@dataclass(frozen=True)
class _Writer:
    """What a task needs to write a block, small enough to travel with every one of them."""

    path: str
    store: str
    done: str
    token: str
    names: tuple[str, ...]
    starts: tuple[tuple[int, ...], ...]
    levels: int


def stream_maps(
    maps: xr.Dataset,
    path: Path,
    finish: Callable[[Layout, Path, Path], None] | None,
    *,
    overwrite: bool = False,
    resume: bool = False,
    progress: Progress | None = None,
) -> Streamed:
    """Compute maps and write them block by block, then give them their final form and name.

    Parameters
    ----------
    maps : Dataset
        Lazy or in memory.
    path : Path
        Final name.
    finish : callable or None
        ``finish(layout, store, made)`` turns the finished Zarr store into the file `made`; None where the
        store itself is the output.
    overwrite, resume : bool
        Replace what is there; continue an unfinished run.
    progress : callable, optional
        Called from time to time with the number of finished blocks and of all.
    """
    stage = Stage(path)
    if not (resume and stage.moving.is_file()):
        require_free(path, overwrite=overwrite)
    layout = lay_out(maps, overviews=finish is not None and path.suffix.lower() in (".tif", ".tiff"))
    job = describe(layout, _computation(layout))
    stage.hold()
    try:
        with _kept_for_resume(stage, layout):
            if resume and stage.exists():
                stage.require_same(job)
            else:
                stage.clear()
                with _named(path, "its layout"):
                    write_template(layout, stage.store)
                    stage.begin(job)
            _write_blocks(layout, stage, job, progress)
            counted = [name for name in layout.gridded if layout.maps[name].dtype.kind == "f"]
            counts = stage.counts(counted)
            _finish(layout, stage, finish, overwrite or stage.moving.is_file())
        stage.remove()
    finally:
        stage.release()
    return Streamed(path, counts)


def _computation(layout: Layout) -> str:
    """Token of the whole computation: another cube, noise map or geometry gives another one."""
    from dask.base import tokenize

    names = [getattr(layout.maps[name].data, "name", name) for name in layout.gridded]
    return str(
        tokenize(
            names, [layout.maps[name].values for name in layout.maps.data_vars if name not in layout.gridded]
        )
    )


@contextmanager
def _kept_for_resume(stage: Stage, layout: Layout) -> Iterator[None]:
    """After an error say what is kept; where nothing is, leave nothing."""
    try:
        yield
    except BaseException as error:
        finished, total = stage.count_finished(), int(np.prod(layout.numblocks, dtype=int))
        if finished == 0:
            stage.remove()
        if isinstance(error, OSError) and finished:
            raise OSError(
                f"{error}; {finished} of {total} blocks are finished and kept: run the same again with --resume "
                "(resume=True)"
            ) from None
        if type(error).__name__ == "KilledWorker":
            raise OSError(
                f"{stage.path}: the workers of the cluster died again and again on one block ({error}); "
                f"{finished} of {total} blocks are finished and kept"
            ) from None
        raise


@contextmanager
def _named(path: str | Path, what: str) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        reason = error.strerror or " ".join(str(error).split())
        raise BlockWriteError(f"{path}: {what} cannot be written ({reason})") from None


def _write_blocks(layout: Layout, stage: Stage, job: dict[str, Any], progress: Progress | None) -> None:
    if not layout.gridded:
        return
    finished = stage.finished()
    todo = [place for place in np.ndindex(*layout.numblocks) if place not in finished]
    if not todo:
        return
    import dask.array as da
    from dask.base import compute_as_if_collection, tokenize

    token = tokenize(job)
    writer = _Writer(
        str(stage.path),
        str(stage.store),
        str(stage.done),
        token,
        layout.gridded,
        tuple(tuple(np.cumsum([0, *sizes]).tolist()) for sizes in layout.chunks),
        layout.levels_in_pass,
    )
    written = da.map_blocks(
        _write_block,
        *(layout.maps[name].data for name in layout.gridded),
        writer=writer,
        dtype=np.int8,
        chunks=tuple((1,) * n for n in layout.numblocks),
        meta=np.empty((0,) * len(layout.dims), np.int8),
        name=f"write-{token}",
    )
    keys = [(written.name, *place) for place in todo]
    with _watched(stage, len(finished) + len(todo), progress):
        compute_as_if_collection(_blocks(), written.__dask_graph__(), keys)


@functools.cache
def _blocks() -> Any:
    """What dask takes for the collection that is computed: an array, whose planes are not copied to be written.

    Where a slice is less than half of its block, dask copies it, so that the block may be freed. Here a block's
    planes are written together and freed together.
    """
    import operator

    import dask.array as da
    from dask._task_spec import Task
    from dask.array.chunk import getitem

    class Blocks(da.Array):
        @staticmethod
        def __dask_optimize__(graph: Any, keys: Any, **options: Any) -> Any:
            graph = dict(da.optimization.optimize(graph, keys, **options))
            for key, task in graph.items():
                if isinstance(task, Task) and task.func is getitem:
                    graph[key] = Task(key, operator.getitem, *task.args)
            return graph

    return Blocks


@contextmanager
def _watched(stage: Stage, total: int, progress: Progress | None) -> Iterator[None]:
    """Report the number of finished blocks, which the markers tell whoever makes them."""
    if progress is None:
        yield
        return
    ended = threading.Event()

    def watch() -> None:
        while not ended.wait(0.5):
            progress(stage.count_finished(), total)

    watcher = threading.Thread(target=watch, daemon=True)
    progress(stage.count_finished(), total)
    watcher.start()
    try:
        yield
    finally:
        ended.set()
        watcher.join()
        progress(stage.count_finished(), total)


@functools.lru_cache(maxsize=8)
def _arrays(store: str, token: str) -> Any:  # noqa: ARG001 (another job has another layout)
    import zarr

    # whether a block holds nothing is known from its counts, so that zarr need not compare every value
    def array_of(name: str) -> Any:
        return zarr.open_array(store, path=name, mode="r+", config={"write_empty_chunks": True})

    return functools.lru_cache(maxsize=None)(array_of)


def _write_block(*blocks: NDArray, writer: _Writer, block_id: tuple[int, ...] | None = None) -> NDArray:
    assert block_id is not None
    bounds = [(edges[k], edges[k + 1]) for edges, k in zip(writer.starts, block_id, strict=True)]
    names = ("rows", "columns") if len(bounds) == 2 else tuple(f"axis {k}" for k in range(len(bounds)))
    told = ", ".join(f"{name} {low}–{high - 1}" for name, (low, high) in zip(names, bounds, strict=True))
    counts: list[BinCounts] = []
    with _named(writer.path, f"the block of {told}"):
        array_of = _arrays(writer.store, writer.token)
        for name, block in zip(writer.names, blocks, strict=True):
            where = tuple(slice(low, high) for low, high in bounds)
            if block.dtype.kind == "f":
                counts.append(BinCounts.of(block))
            if block.dtype.kind != "f" or counts[-1].missing < block.size:
                array_of(name)[where] = block
            coarse = block
            for level in range(1, writer.levels + 1):
                coarse = halved(coarse)
                at = [low >> level for low, _ in bounds]
                part = tuple(slice(low, low + size) for low, size in zip(at, coarse.shape, strict=True))
                array_of(f"overviews/{level}/{name}")[part] = coarse
        write_marker(Path(writer.done), block_id, counts)
    return np.zeros((1,) * len(bounds), np.int8)


def _finish(
    layout: Layout, stage: Stage, finish: Callable[[Layout, Path, Path], None] | None, overwrite: bool
) -> None:
    import zarr

    if finish is None:
        if stage.moving.is_file() and not stage.store.exists():
            return
        with _named(stage.path, "its table of contents"):
            zarr.consolidate_metadata(str(stage.store), zarr_format=2)
        made = stage.store
    else:
        made = stage.folder / f"finished{stage.path.suffix}"
        if stage.moving.is_file() and not made.exists():
            return
        with _named(stage.path, "the finished file"):
            finish(layout, stage.store, made)
    stage.moving.touch()
    move_into_place(made, stage.path, overwrite=overwrite)
