"""Blocks on a Dask cluster: the same work as in threads, on whichever workers the scheduler has.

Workers get the model once and the description of a scene once, through worker plugins, also workers that join later; a
block is then a number and a window. What a lost worker had not finished, the scheduler gives to another. Blocks come
back to this process, which writes them: workers need to reach the scene's files, not the output folder.
"""

# mypy: allow-untyped-calls

from __future__ import annotations

import asyncio
import time
from collections.abc import Generator, Sequence
from concurrent.futures import CancelledError
from contextlib import suppress
from itertools import islice
from typing import Any
from uuid import uuid4

import distributed
from distributed.diagnostics.plugin import WorkerPlugin
from threadpoolctl import threadpool_limits

from classify.errors import LandassayError, Problem
from classify.mapping.blocks import Block, BlockWork
from classify.models import TrainedModel
from classify.raster.grid import Window

# How long a scheduler may take to answer and, when it has, to have a first worker, in seconds.
_ANSWER_S = 10
# How long the work waits for a worker to come back when all are gone, in seconds.
_NO_WORKER_S = 60
_LOOK_UP_S = 2
_UNDER_WAY = 2
# What is raised by a client whose cluster is gone, and the work with it.
_GONE = (OSError, TimeoutError, CancelledError, RuntimeError, ValueError)
# A future of distributed, which does not say of what.
_Future = Any
# Libraries whose versions may change labels or the last digits of features.
_COMPARED = ("landassay", "numpy", "scipy", "scikit-learn", "rasterio", "numba")


class Cluster:
    """An engine on a cluster; use `connect`. Close it when done."""

    def __init__(self, client: distributed.Client, address: str, warnings: tuple[Problem, ...]) -> None:
        self._client, self._address, self.warnings = client, address, warnings
        self._models: list[_Model] = []

    def __enter__(self) -> Cluster:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Leave the cluster, which goes on for others."""
        for plugin in self._models:
            self._forget(plugin)
        self._models.clear()
        self._client.close()

    def run(self, work: BlockWork, windows: Sequence[tuple[int, Window]]) -> Generator[Block]:
        """See Engine. Raises LandassayError when the scheduler or all workers are gone."""
        if not windows:
            return
        plugin = _Work(self._send_model(work.model), work)
        self._client.register_plugin(plugin)
        under_way: set[_Future] = set()
        remaining = iter(windows)
        try:
            while True:
                room = _UNDER_WAY * max(1, sum(self._threads().values())) - len(under_way)
                for number, window in islice(remaining, max(room, 0)):
                    under_way.add(self._client.submit(_block, plugin.name, number, window, pure=False))
                if not under_way:
                    return
                for future in self._done(under_way):
                    under_way.discard(future)
                    yield self._result(future)
        finally:
            self._leave(plugin, under_way)

    def _send_model(self, model: TrainedModel) -> str:
        """The name under which workers have the model: it goes out once, however many scenes follow."""
        for sent in self._models:
            if sent.model is model:
                return sent.name
        plugin = _Model(model)
        self._client.register_plugin(plugin)
        self._models.append(plugin)
        return plugin.name

    def _threads(self) -> dict[str, int]:
        try:
            return dict(self._client.nthreads())
        except (OSError, CancelledError, RuntimeError) as error:
            raise self._gone("the scheduler no longer answers") from error

    def _done(self, futures: set[_Future]) -> set[_Future]:
        """Some that are finished; waits for them."""
        deserted_at = time.monotonic()
        while True:
            try:
                with self._client.as_current():
                    return set(distributed.wait(futures, timeout=_LOOK_UP_S, return_when="FIRST_COMPLETED").done)
            except (TimeoutError, CancelledError) as error:
                if self._threads():
                    deserted_at = time.monotonic()
                elif time.monotonic() - deserted_at > _NO_WORKER_S:
                    raise self._gone(f"it has had no worker for {_NO_WORKER_S} s") from error

    def _result(self, future: _Future) -> Block:
        try:
            result: Block | LandassayError = future.result()
        except distributed.KilledWorker as error:
            raise self._gone("several workers died over the same block, perhaps for lack of memory") from error
        except (CancelledError, OSError) as error:
            raise self._gone("the scheduler no longer answers") from error
        if isinstance(result, LandassayError):
            raise result
        return result

    def _gone(self, why: str) -> LandassayError:
        fix = "look at the cluster; the same command then goes on where it was"
        return LandassayError(f"the cluster cannot go on: {why}", where=self._address, fix=fix)

    def _leave(self, plugin: _Work, under_way: set[_Future]) -> None:
        with suppress(*_GONE):
            self._client.cancel(list(under_way))
        self._forget(plugin)

    def _forget(self, plugin: _Model | _Work) -> None:
        with suppress(*_GONE):
            self._client.unregister_worker_plugin(plugin.name)


def connect(address: str) -> Cluster:
    """A cluster by the address of its scheduler. Raises LandassayError within about 10 s if it cannot be used."""
    client = _client(address)
    try:
        client.wait_for_workers(1, timeout=_ANSWER_S)
        return Cluster(client, address, _differences(client, address))
    except TimeoutError as error:
        client.close()
        raise LandassayError("the scheduler has no workers", where=address, fix="start some and try again") from error
    except LandassayError:
        client.close()
        raise


def _client(address: str) -> distributed.Client:
    async def ask() -> None:
        async with distributed.rpc(address) as scheduler:
            await scheduler.identity()

    try:
        # Asked first in a loop of our own: against something that accepts the connection and is silent, the time limit
        # of the client itself does not hold.
        asyncio.run(asyncio.wait_for(ask(), _ANSWER_S))
        return distributed.Client(address, timeout=_ANSWER_S, set_as_default=False)
    except (OSError, TimeoutError, ValueError, CancelledError) as error:
        raise LandassayError(
            f"no scheduler answered within {_ANSWER_S} s", where=address,
            fix="check the address (like tcp://host:8786) and that the scheduler runs and can be reached from here",
        ) from error  # fmt: skip


def _differences(client: distributed.Client, address: str) -> tuple[Problem, ...]:
    """What to know of workers whose versions differ from ours. Raises LandassayError if one lacks this package."""
    versions: Any = client.get_versions(packages=list(_COMPARED))
    ours = versions["client"]["packages"]
    found = []
    for name in _COMPARED:
        theirs = {worker: facts["packages"].get(name) for worker, facts in versions["workers"].items()}
        if name == "landassay" and (without := [worker for worker, version in theirs.items() if not version]):
            raise LandassayError(
                f"{len(without)} of {len(theirs)} workers do not have landassay, the first being {without[0]}",
                where=address, fix="install the same version on every worker",
            )  # fmt: skip
        if other := sorted({str(version) for version in theirs.values() if version != ours.get(name)}):
            found.append(
                Problem(
                    f"workers have {name} {', '.join(other)}, this machine has {ours.get(name)}",
                    address,
                    "labels can differ between versions: install the same everywhere",
                    "warning",
                )
            )
    return tuple(found)


class _Model(WorkerPlugin):
    """Keeps the model on a worker, with libraries underneath at one thread each."""

    def __init__(self, model: TrainedModel) -> None:
        self.name, self.model = f"landassay-model-{uuid4().hex}", model
        self._limits: Any = None

    def setup(self, worker: Any) -> None:  # noqa: ANN401
        self._limits = threadpool_limits(1)

    def teardown(self, worker: Any) -> None:  # noqa: ANN401
        self._limits.restore_original_limits()


class _Work(WorkerPlugin):
    """Keeps on a worker what is to be done with one scene; the model is put in there."""

    def __init__(self, model_name: str, work: BlockWork) -> None:
        self.name, self._model_name = f"landassay-scene-{uuid4().hex}", model_name
        self._scene, self._layers, self._skip = work.scene, work.layers, work.skip_unreadable
        self._work: BlockWork | None = None

    def work(self, worker: Any) -> BlockWork:  # noqa: ANN401
        """The work, complete. Two threads that ask first at the same time may each make one, which does no harm."""
        if self._work is None:
            model = worker.plugins[self._model_name].model
            self._work = BlockWork(model, self._scene, self._layers, self._skip)
        return self._work

    def teardown(self, worker: Any) -> None:  # noqa: ANN401
        if self._work is not None:
            self._work.close()


def _block(name: str, number: int, window: Window) -> Block | LandassayError:
    worker = distributed.get_worker()
    plugin = worker.plugins[name]
    assert isinstance(plugin, _Work), name
    work = plugin.work(worker)
    try:
        return work.compute(number, window, work.read(window))
    except LandassayError as error:
        # As a value: what an error was raised from cannot always travel, and it would arrive without its place.
        return type(error)(error.problems)
