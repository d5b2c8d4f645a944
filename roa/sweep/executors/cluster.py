"""Workers of a Dask cluster, through distributed's own futures: joblib's way to it waits for ever for a dead worker.

The task goes to every worker once, also to those that come later; then only the index of a block goes out and its
rows come back.
"""

from __future__ import annotations

import logging
import signal
from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack, contextmanager, suppress
from typing import Any

from roa.errors import MachineError, UserError
from roa.sweep.block import Block
from roa.sweep.executors import Result, SchedulerLost, Task, never
from roa.sweep.origin import differences, our_versions, processor
from roa.sweep.window import Future, windowed

try:
    import cloudpickle
    import dask
    from distributed import Client, LocalCluster, WorkerPlugin
    from distributed.scheduler import KilledWorker
except ImportError as error:
    raise UserError(
        f"--cluster: needs the package distributed ({error.name} is missing); install it with "
        "`python -m pip install 'roa[cluster]'`, in a clone with `.venv/bin/python -m pip install distributed`"
    ) from None

LOCAL = "local"
# What a scheduler has to answer in, s.
PATIENCE = 10
# A worker that died takes its block down at once: whoever calls runs it again, alone.
SETTINGS = {"distributed.scheduler.allowed-failures": 0, "distributed.admin.tick.limit": "1h"}

_tasks: dict[str, Task] = {}
_expected: dict[str, dict[str, str]] = {}


def run(
    task: Task, blocks: Iterable[Block], jobs: int, given_up: Callable[[], bool] = never, address: str = LOCAL,
    say: Callable[[str], None] = lambda sentence: None,
) -> Iterator[tuple[Block, Result]]:  # fmt: skip
    """Yield every block with its result, as they finish.

    Parameters
    ----------
    address : of a scheduler, such as tcp://host:8786; "local" for a cluster of `jobs` workers on this machine
    say : is told of workers whose results agree within tolerance only, because their processor is another

    Raises
    ------
    UserError
        No scheduler answers at the address, it has no workers, or their versions differ.
    SchedulerLost
        The scheduler does not answer any more.
    """
    with ExitStack() as stack:
        stack.enter_context(dask.config.set(SETTINGS))
        stack.enter_context(_quiet())
        client = _connect(stack, address, jobs)
        pool = _Cluster(client, task, address)
        for sentence in pool.introduced():
            say(sentence)
        yield from windowed(pool, blocks, pool.jobs, given_up)


def _connect(stack: ExitStack, address: str, jobs: int) -> Any:
    place: Any = address
    if address == LOCAL:
        workers = {"n_workers": jobs, "threads_per_worker": 1, "processes": True}
        local: Any = LocalCluster
        place = stack.enter_context(local(**workers, dashboard_address=None, silence_logs=logging.CRITICAL))
    try:
        client: Any = Client
        return stack.enter_context(client(place, timeout=PATIENCE, set_as_default=False, name="roa"))
    except (OSError, ValueError, TimeoutError) as error:
        raise UserError(
            f"--cluster {address}: no scheduler answers there within {PATIENCE} s ({_first_line(error)}); start one "
            "with `dask scheduler`, check address and port, or use --cluster local"
        ) from None


class _Cluster:
    """The workers of one scheduler.

    Attributes
    ----------
    jobs : threads of all workers together
    """

    def __init__(self, client: Any, task: Task, address: str) -> None:
        self._client, self._address = client, address
        self._key = f"roa-{id(task):x}"
        self._attempts = 0
        self._wait_for_workers()
        self._client.register_plugin(_Installs(self._key, cloudpickle.dumps(task), our_versions()), name=self._key)
        self.jobs = sum(self._client.nthreads().values())

    def _wait_for_workers(self) -> None:
        try:
            self._client.wait_for_workers(1, timeout=PATIENCE)
        except TimeoutError:
            raise UserError(
                f"--cluster {self._address}: has no workers; start some with `dask worker {self._address}`"
            ) from None

    def introduced(self) -> Iterator[str]:
        """Refuse workers with other versions; yield a sentence for each kind of processor that is not ours.

        Raises
        ------
        UserError
            One sentence for each worker whose versions would give other results.
        """
        faults, others = [], set()
        for worker, (found, their_processor) in self._client.run(_introduce).items():
            if differing := differences(found, our_versions()):
                faults.append(f"--cluster {self._address}: worker {worker} has {differing}; install the same versions")
            if their_processor != processor():
                others.add(their_processor)
        if faults:
            raise UserError(faults)
        for other in sorted(others):
            yield (
                f"some workers have another processor ({other}, here {processor()}): their results agree with those of "
                "this one within tolerance, not bit for bit"
            )

    def submit(self, block: Block) -> Future:
        self._attempts += 1
        future: Future = self._client.submit(
            _work, self._key, block, key=f"{self._key}-{block.index}-{self._attempts}", pure=False, retries=0
        )
        return future

    def is_loss(self, error: BaseException) -> bool:
        return isinstance(error, KilledWorker)

    def renew(self) -> None:
        """Wait until there are workers again: a nanny starts one in the place of each that died."""
        self.check()
        self._wait_for_workers()

    def check(self) -> None:
        if self._client.status not in ("running", "newly-created"):
            raise SchedulerLost(f"the scheduler at {self._address} is lost")


class _Installs(WorkerPlugin):
    """Brings the task to a worker, once."""

    def __init__(self, key: str, content: bytes, expected: dict[str, str]) -> None:
        self._key, self._content, self._wanted = key, content, expected

    def setup(self, worker: Any) -> None:
        """Keep the task, and leave Ctrl-C, which reaches the whole group, to the one who asked for the work."""
        with suppress(ValueError):  # where the worker is a thread
            signal.signal(signal.SIGINT, signal.SIG_IGN)
        _tasks[self._key], _expected[self._key] = cloudpickle.loads(self._content), self._wanted


def _work(key: str, block: Block) -> Any:
    # Once more here, for a worker that came when the work had begun.
    if differing := differences(our_versions(), _expected[key]):
        raise MachineError(f"a worker has {differing}; install the same versions")
    return _tasks[key](block)


def _introduce() -> tuple[dict[str, str], str]:
    return our_versions(), processor()


@contextmanager
def _quiet() -> Iterator[None]:
    """Keep what distributed logs of workers that come and go out of our progress; losses come back as errors."""
    names = ("distributed", "distributed.client", "distributed.scheduler", "distributed.nanny", "tornado")
    before = [(logging.getLogger(name), logging.getLogger(name).level) for name in names]
    for logger, _ in before:
        logger.setLevel(logging.CRITICAL)
    try:
        yield
    finally:
        for logger, level in before:
            logger.setLevel(level)


def _first_line(error: BaseException) -> str:
    return (str(error) or type(error).__name__).splitlines()[0]
