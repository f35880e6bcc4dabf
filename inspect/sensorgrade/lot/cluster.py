"""Devices inspected on a Dask cluster.

joblib's own Dask backend waits for ever on a device that fails inside the cluster (a worker
that dies again and again, or lacks this package), so the cluster is asked directly.
"""

from collections.abc import Generator, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from functools import partial
from itertools import islice
from pathlib import Path
from typing import Any

from sensorgrade import __version__
from sensorgrade.errors import RequestError
from sensorgrade.frames.frame import DeviceFrames, at_absolute_paths
from sensorgrade.lot.attempt import Attempt, InspectOne, attempt, last_stage, note_of

CONNECT = 10.0  # s to wait for the scheduler to answer


@dataclass(frozen=True, slots=True)
class Cluster:
    """A scheduler's address, and the number of tasks that its workers run at once."""

    address: str
    client: Any
    slots: int
    time_limit: float | None

    def attempts(
        self, devices: Mapping[int, DeviceFrames], inspect_one: InspectOne, workplace: Path
    ) -> Generator[Attempt, None, None]:
        """An answer for each device, in the order in which they are ready.

        A device whose worker dies is given to another one; after the scheduler's number of
        deaths (``distributed.scheduler.allowed-failures``) it is held to be the cause.

        Raises
        ------
        RequestError
            A worker does not see the run's folder, or has another version of this package.
        """
        from distributed import as_completed

        self._check(workplace)
        run = partial(
            attempt, inspect_one, workplace=workplace, threads=1, time_limit=self.time_limit
        )
        left = iter(devices)
        numbers: dict[Any, int] = {}
        given_up: list[int] = []

        def submitted(count: int) -> list[Any]:
            futures = []
            for number in islice(left, count):
                device = at_absolute_paths(devices[number])
                future = self.client.submit(run, device, number, pure=False)
                numbers[future] = number
                futures.append(future)
            return futures

        try:
            waiting = as_completed(submitted(2 * self.slots), loop=self.client.loop)
            for future in waiting:
                number = numbers.pop(future)
                if future.exception() is None:
                    yield future.result()
                else:
                    given_up.append(number)
                for other in submitted(1):
                    waiting.add(other)
            # A device may have been given up only because it lay with one that kills workers:
            # alone, each is to blame for itself.
            left = iter(given_up)
            for number in given_up:
                (future,) = submitted(1)
                error = future.exception()
                del numbers[future]
                if error is None:
                    yield future.result()
                    continue
                where = last_stage(note_of(workplace, number))
                reason = f"no worker of the cluster could inspect it{where}: {error}"
                yield Attempt(number, 0.0, failure=f"{reason}; look at the workers' logs")
        finally:
            self.client.cancel(list(numbers))

    def _check(self, workplace: Path) -> None:
        """Refuse workers that could not do the work, before any device is sent."""
        try:
            answers = self.client.run(_seen, str(workplace))
        except (ImportError, AttributeError) as error:
            raise RequestError(
                f"{self.address}: a worker cannot load sensorgrade ({error}); install the same"
                f" version ({__version__}) where the workers run"
            ) from error
        for worker, (version, seen) in answers.items():
            if version != __version__:
                raise RequestError(
                    f"{self.address}: worker {worker} has sensorgrade {version}, here it is"
                    f" {__version__}; install the same version"
                )
            if not seen:
                raise RequestError(
                    f"{self.address}: worker {worker} does not see {workplace.parent}; give --out"
                    " on a file system that all workers share"
                )


def _seen(place: str) -> tuple[str, bool]:
    """A worker's version of this package, and whether it sees the run's folder."""
    return __version__, Path(place).is_dir()


@contextmanager
def connected(address: str, *, time_limit: float | None) -> Iterator[Cluster]:
    """The cluster behind a scheduler's address, such as ``tcp://bench7:8786``.

    Raises
    ------
    RequestError
        Dask is not installed, nobody answers, or the scheduler has no workers.
    """
    try:
        from distributed import Client
    except ImportError:
        raise RequestError(
            "--cluster needs Dask; install it with: pip install 'sensorgrade[cluster]'"
        ) from None
    try:
        client = Client(address, timeout=CONNECT, set_as_default=False)
    except (OSError, ValueError) as error:
        raise RequestError(
            f"{address}: no Dask scheduler answers ({error}); start one, or correct --cluster"
        ) from error
    try:
        try:  # one that was just ended comes back
            client.wait_for_workers(1, timeout=CONNECT)
        except TimeoutError:
            raise RequestError(
                f"{address}: the scheduler has no workers; start them with: dask worker {address}"
            ) from None
        yield Cluster(address, client, sum(client.nthreads().values()), time_limit)
    finally:
        client.close()
