"""A cluster: blocks drawn by workers of dask.distributed, on this machine or at an address."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from contextlib import ExitStack
from importlib.util import find_spec
from itertools import islice
from typing import Any

from daq.errors import DaqError
from daq.scale.job import Job, code_version, drawn
from daq.scale.study import Block, Failed, Outcome, why

OUTSTANDING = 8  # blocks a worker that wait at the scheduler at any time
ANSWERS_WITHIN_S = 10.0
LOOK_EVERY_S, WITHOUT_WORKERS_S = 5.0, 60.0
KILLED = "killed:"
DEATHS = 2  # of workers of our own that one block may cause, and as many when it is tried again alone
RETRIES = 1  # of a block that raised; those that killed their worker are tried again alone


class Cluster:
    """A runner for `carry_out`; holds workers of its own, or the way to those at an address."""

    def __init__(
        self, workers: int = 0, address: str | None = None, answers_within_s: float = ANSWERS_WITHIN_S
    ) -> None:
        if find_spec("distributed") is None:
            raise DaqError(
                "workers need the package distributed",
                remedy="Install it: pip install 'tercet[scale]'; or leave it to one process: --workers 0",
            )
        self._stack = ExitStack()
        try:
            self._client = self._stack.enter_context(_client(self._stack, workers, address, answers_within_s))
        except BaseException:
            self._stack.close()
            raise

    def __call__(self, job: Job, blocks: Iterable[Block]) -> Iterator[Outcome]:
        """Yield blocks as they come home; those that kill their worker are tried once more, alone."""
        self._refuse_others(job)
        guilty = []
        for outcome in self._windowed(job, blocks, ""):
            if isinstance(outcome, Failed) and outcome.why.startswith(KILLED):
                guilty.append((outcome.first, outcome.count))
            else:
                yield outcome
        for block in guilty:
            yield from self._windowed(job, [block], "-alone")

    def close(self) -> None:
        """Let the workers go."""
        self._stack.close()

    def __enter__(self) -> Cluster:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _windowed(self, job: Job, blocks: Iterable[Block], tag: str) -> Iterator[Outcome]:
        """Yield blocks as they come home, a few for each worker out at any time."""
        waiting, going = iter(blocks), dict[Any, Block]()
        while True:
            for block in islice(waiting, max(0, OUTSTANDING * self._workers() - len(going))):
                key = f"{job.key[:16]}-{block[0]}-{block[1]}{tag}"
                going[self._client.submit(drawn, job, *block, key=key, retries=RETRIES)] = block
            if not going:
                return
            for future in self._next_home(list(going)):
                yield _home(future, going.pop(future))
                future.release()

    def _next_home(self, going: list[Any]) -> list[Any]:
        """Return the futures that are done, when there is one; patient while there are workers."""
        from distributed import CancelledError, wait

        alone_s = 0.0
        while True:
            try:
                return list(wait(going, timeout=LOOK_EVERY_S, return_when="FIRST_COMPLETED").done)
            except CancelledError as error:
                raise _gone() from error
            except TimeoutError:
                alone_s = 0.0 if self._workers(at_least=0) else alone_s + LOOK_EVERY_S
            if alone_s > WITHOUT_WORKERS_S:
                raise DaqError("no worker is left", remedy="Start workers and give the same command again")

    def _workers(self, at_least: int = 1) -> int:
        return max(at_least, len(self._client.scheduler_info(n_workers=-1)["workers"]))

    def _refuse_others(self, job: Job) -> None:
        """Refuse workers of another version: their draws would be other numbers under the same name."""
        mine = code_version(job.kernel)
        found = self._client.run(code_version, job.kernel, on_error="return")
        others = sorted(address for address, theirs in found.items() if theirs != mine)
        if others:
            raise DaqError(
                f"{len(others)} of {len(found)} workers have another version of the program, or lack it",
                where=others[0],
                remedy="Install this version there and start them again",
            )


def _home(future: Any, block: Block) -> Outcome:
    """Return what a future brought; one whose worker died with it is waited for until it is made again."""
    from distributed import CancelledError, KilledWorker

    try:
        return block, future.result()
    except KilledWorker:
        return Failed(*block, f"{KILLED} every worker that tried it died")
    except CancelledError as error:
        raise _gone() from error
    except Exception as error:  # what the kernel raised on the worker
        return Failed(*block, why(error))


def _gone() -> DaqError:
    return DaqError("the scheduler has gone", remedy="What is drawn is kept: give the same command again")


def _client(stack: ExitStack, workers: int, address: str | None, within_s: float) -> Any:
    import logging

    import dask
    from distributed import Client, LocalCluster

    for name in ("tornado.application", *logging.root.manager.loggerDict):
        if name.startswith(("distributed", "tornado")):  # some of them have levels and handlers of their own
            logging.getLogger(name).setLevel(logging.CRITICAL)
    dask.config.set({"distributed.comm.timeouts.connect": f"{within_s}s"})
    if address is None:
        dask.config.set({"distributed.scheduler.allowed-failures": DEATHS - 1})
        own = LocalCluster(
            n_workers=workers,
            threads_per_worker=1,
            host="127.0.0.1",
            dashboard_address="127.0.0.1:0",  # it listens even when told not to: here alone, on a free port
            scheduler_kwargs={"dashboard": False},
            silence_logs=logging.CRITICAL,
        )
        address = stack.enter_context(own).scheduler_address
        own.adapt(minimum=workers, maximum=workers)  # a nanny that gives up is replaced
    try:
        client = Client(address, timeout=within_s)
        client.wait_for_workers(1, timeout=within_s)
    except (OSError, TimeoutError, ValueError) as error:
        raise DaqError(
            "no cluster with workers answers here",
            where=address,
            remedy="Start `dask scheduler` and `dask worker` there, or leave --cluster out",
        ) from error
    return client
