"""Hands the units of an archive to Dask workers: processes of this machine, or a cluster that is already there.

A unit whose worker dies is given to another one; after three deaths it is reported and the others go on.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from tieline.archive.find import Unit
from tieline.archive.unit import Outcome, failed, reduce_unit
from tieline.errors import InputError, Problem

if TYPE_CHECKING:
    from distributed import Client

CONNECT_TIMEOUT_S = 10
INSTALL = 'Install it in the folder of tieline with: pip install ".[archive]"'


def reduce_all(
    units: Sequence[Unit],
    dataset: Path,
    *,
    scheduler: str | None,
    workers: int,
    finished: Callable[[Outcome], None] = lambda outcome: None,
) -> list[Outcome]:
    """The outcome of every unit, in their order; `finished` is told each as it comes.

    scheduler: address of a running cluster, whose workers must see the same folders; without one so many worker
    processes are started here. Raises InputError where Dask is not installed or the address does not answer.
    """
    outcomes: dict[str, Outcome] = {}
    with _client(scheduler, workers) as client:
        from distributed import as_completed

        futures = {
            client.submit(reduce_unit, unit, dataset, pure=False, key=f"tieline-{number}-{unit.name}"): unit
            for number, unit in enumerate(units)
        }
        for future in as_completed(futures):
            unit = futures[future]
            outcome = _outcome(future, unit)
            future.release()  # what is done need not be remembered by the scheduler
            outcomes[unit.name] = outcome
            finished(outcome)
    return [outcomes[unit.name] for unit in units]


def _outcome(future: Any, unit: Unit) -> Outcome:
    if future.status == "finished":
        outcome: Outcome = future.result()
        return outcome
    error = future.exception() if future.status == "error" else None
    if type(error).__name__ == "KilledWorker":
        return failed(unit, "the worker died each time it was tried; memory may be too small for it")
    return failed(unit, f"{future.status}: {error}" if error is not None else str(future.status))


@contextmanager
def _client(scheduler: str | None, workers: int) -> Iterator[Client]:
    try:
        import distributed
    except ImportError:
        raise InputError(
            Problem("an archive needs the package distributed, which is not installed.", remedy=INSTALL)
        ) from None
    if scheduler is not None:
        try:
            client = distributed.Client(scheduler, timeout=CONNECT_TIMEOUT_S)
        except (OSError, ValueError, TypeError) as error:
            raise InputError(
                Problem(
                    f"no scheduler answers at {scheduler}: {error}.",
                    column="--scheduler",
                    remedy="Write its address as it tells it, such as tcp://10.0.0.5:8786.",
                )
            ) from None
        with client:
            yield client
        return
    with (
        distributed.LocalCluster(
            n_workers=workers,
            threads_per_worker=1,
            processes=True,
            host="127.0.0.1",
            dashboard_address="127.0.0.1:0",  # any free port
            memory_limit=0,  # the system's own limits hold; a session is not split, so pausing would not help
            silence_logs=50,
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        yield client
