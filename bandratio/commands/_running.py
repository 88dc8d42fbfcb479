"""Where the blocks of a long job are computed, and the progress bar that tells how far it is."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

import click

__all__ = ["progress_bar", "run_options", "scheduled"]


def run_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Put on how a long job is run and continued."""
    for option in (
        click.option(
            "--scheduler",
            metavar="ADDRESS",
            help="Run on the dask cluster with this scheduler, such as tcp://host:8786; its workers must see the "
            "files under the same names.",
        ),
        click.option(
            "--workers", type=click.IntRange(min=1), help="Threads at work; all cores unless given."
        ),
        click.option(
            "--resume",
            is_flag=True,
            help="Continue a run that was killed or failed; refused where input, noise or parameters changed.",
        ),
    ):
        command = option(command)
    return command


@contextmanager
def scheduled(address: str | None, workers: int | None) -> Iterator[None]:
    """Compute on a dask cluster, or with threads of this process.

    Raises
    ------
    ValueError
        If both a cluster and a number of threads are given.
    OSError
        If no scheduler answers at the address.
    """
    if address is None:
        import dask

        from ..kernel import cores

        with dask.config.set(scheduler="threads", num_workers=workers or cores()):
            yield
        return
    if workers is not None:
        raise ValueError("give either --scheduler ADDRESS or --workers N: a cluster has its own workers")
    from distributed import Client

    try:
        client = Client(address, timeout="5s")
    except (OSError, ValueError, ImportError) as error:
        raise OSError(
            f"no dask scheduler answers at {address} ({' '.join(str(error).split())}); start one with "
            "`dask scheduler` and workers with `dask worker ADDRESS`"
        ) from None
    with client:
        yield


@contextmanager
def progress_bar(what: str) -> Iterator[Callable[[int, int], None] | None]:
    """What to call with the number of finished blocks and of all; None where nobody looks at a terminal."""
    from rich.console import Console

    console = Console(stderr=True)
    if not console.is_terminal:
        yield None
        return
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    with Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("blocks"),
        TimeRemainingColumn(),
        console=console,
        transient=True,
    ) as bar:
        task = bar.add_task(what, total=None)
        yield lambda finished, total: bar.update(task, completed=finished, total=total)
