"""Spreads requests over processes; with one worker everything runs here.

Every kept model (family and replica) belongs to one worker for good, so its warm basis stays where
it is, and the numbers do not depend on how many workers there are. The graph goes to each worker
once; cuts follow as they are made.
"""

from __future__ import annotations

import logging
import multiprocessing
import os
import signal
import threading
from collections.abc import Callable, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from copy import copy
from dataclasses import dataclass, replace
from itertools import chain

from xlplan.base.memory import resident_bytes
from xlplan.model.value_graph import Family, ValueGraph
from xlplan.solve.cut_pool import CutBatch, CutPool
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.node_solver import Measure, NodeRequest, NodeSolution, NodeSolver
from xlplan.solve.tables import GraphTables

_LOG = logging.getLogger(__name__)

RUN = 48
"""Requests of one kept model that are solved together: their cuts are made in one go."""

CHUNK = 48
"""Requests sent at once: long enough to outweigh the sending, short enough to be stopped."""

POLL_S = 0.2
"""Seconds between looks at whether to stop."""

Runs = list[list[int]]
"""Places of requests, those that are solved together in one list."""

_SOLVER: NodeSolver | None = None


def _start_worker(graph: ValueGraph, tables: GraphTables, cache_bytes: int) -> None:
    """Runs once in every worker."""
    global _SOLVER
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the parent decides what Ctrl-C means
    threading.Thread(target=_end_with_parent, daemon=True).start()
    _SOLVER = NodeSolver(graph, tables, MemberCache(graph.families, cache_bytes))


def _end_with_parent() -> None:
    """Ends the worker when its parent is gone: killed, it had no time to say so."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


def _solve_chunk(
    cuts: Sequence[CutBatch], runs: Sequence[Sequence[NodeRequest]], measure: Measure | None
) -> tuple[list[NodeSolution], dict[str, float]]:
    """Runs in a worker: takes the cuts in, then solves in the given order."""
    assert _SOLVER is not None
    _SOLVER.add_cuts(cuts)
    solutions: list[NodeSolution] = []
    for run in runs:
        solutions += _SOLVER.solve_run(run, measure)
    return solutions, _SOLVER.all_counts()


@dataclass
class Elsewhere(Family):
    """A family whose program another process holds."""

    name: str
    n_member: int
    is_expanded: bool


class Workers:
    """Solves batches of requests, in order, with the cuts of ``pools``.

    Parameters
    ----------
    graph, tables : what is solved
    pools : the parent's pools; what is added to them reaches the workers with the next batch
    n_worker : int, 1 runs in this process
    weights : expected work of each family and replica, to share it out evenly
    """

    def __init__(
        self,
        graph: ValueGraph,
        tables: GraphTables,
        pools: list[CutPool],
        n_worker: int,
        weights: dict[tuple[int, int], float],
        cache: MemberCache,
    ) -> None:
        self.graph, self.tables, self.pools = graph, tables, pools
        self.n_worker = max(1, n_worker)
        self._counts: list[dict[str, float]] = [{} for _ in range(self.n_worker)]
        self._known = [[0] * len(pools) for _ in range(self.n_worker)]
        self._owner = _share_out(weights, self.n_worker)
        self._wanted = [self._asked_for(i) for i in range(self.n_worker)]
        self._executors: list[ProcessPoolExecutor | None] = [None] * self.n_worker
        self._local: NodeSolver | None = None
        self._n_restart = 0
        if self.n_worker == 1:
            self._local = NodeSolver(graph, tables, cache)
        self._cache_bytes = cache.limit_bytes

    def owner(self, request: NodeRequest) -> int:
        """Worker that holds the request's model."""
        return self._owner.get((request.family, request.replica), 0)

    def solve(
        self,
        requests: Sequence[NodeRequest],
        measure: Measure | None = None,
        should_stop: Callable[[], bool] | None = None,
    ) -> list[NodeSolution | None]:
        """Solutions in the order of the requests; None for those not solved before a stop.

        The pools must not change while this runs.
        """
        if self._local is not None:
            return self._solve_here(self._local, requests, measure, should_stop)
        return self._solve_there(requests, measure, should_stop)

    def _runs(self, places: Sequence[int], requests: Sequence[NodeRequest]) -> Runs:
        """Places in runs that one kept model solves together.

        The same for any number of workers, for a model's history depends on its runs. A large
        program is solved by itself, so that a stop need not wait long.
        """
        runs: Runs = []
        last = None
        for place in places:
            request = requests[place]
            key = (request.family, request.replica)
            most = RUN if self.graph.families[request.family].is_expanded else 1
            if key != last or len(runs[-1]) >= most:
                runs.append([])
            runs[-1].append(place)
            last = key
        return runs

    def _news(self, worker: int) -> list[CutBatch]:
        """Cuts that a worker has not seen."""
        known = self._known[worker]
        wanted = self._wanted[worker]
        news = [
            pool.since(n)
            for pool, n in zip(self.pools, known, strict=True)
            if pool.n > n and pool.family in wanted
        ]
        self._known[worker] = [pool.n for pool in self.pools]
        return news

    def _solve_here(
        self,
        solver: NodeSolver,
        requests: Sequence[NodeRequest],
        measure: Measure | None,
        should_stop: Callable[[], bool] | None,
    ) -> list[NodeSolution | None]:
        solver.add_cuts(self._news(0))
        solutions: list[NodeSolution | None] = []
        for run in self._runs(range(len(requests)), requests):
            if should_stop is not None and should_stop():
                solutions += [None] * (len(requests) - len(solutions))
                break
            solutions += solver.solve_run([requests[i] for i in run], measure)
        self._counts[0] = solver.all_counts()
        return solutions

    def _solve_there(
        self,
        requests: Sequence[NodeRequest],
        measure: Measure | None,
        should_stop: Callable[[], bool] | None,
    ) -> list[NodeSolution | None]:
        places: list[list[int]] = [[] for _ in range(self.n_worker)]
        for place, request in enumerate(requests):
            places[self.owner(request)].append(place)
        pending: dict[Future[tuple[list[NodeSolution], dict[str, float]]], tuple[int, Runs]]
        pending = {}
        for worker, mine in enumerate(places):
            for chunk in _chunks(self._runs(mine, requests)):
                pending[self._submit(worker, chunk, requests, measure)] = (worker, chunk)
        solutions: list[NodeSolution | None] = [None] * len(requests)
        is_stopping = False
        broken: list[tuple[int, Runs]] = []
        while pending:
            done, _ = wait(pending, timeout=POLL_S, return_when=FIRST_COMPLETED)
            for future in done:
                worker, chunk = pending.pop(future)
                if future.cancelled():
                    continue
                try:
                    found, self._counts[worker] = future.result()
                except BrokenProcessPool:
                    broken.append((worker, chunk))
                    continue
                for place, solution in zip(chain.from_iterable(chunk), found, strict=True):
                    solutions[place] = solution
            if not is_stopping and should_stop is not None and should_stop():
                is_stopping = True
                for future in pending:
                    future.cancel()
        if broken and not is_stopping:
            self._solve_again(broken, requests, measure, solutions)
        return solutions

    def _solve_again(
        self,
        broken: list[tuple[int, Runs]],
        requests: Sequence[NodeRequest],
        measure: Measure | None,
        solutions: list[NodeSolution | None],
    ) -> None:
        """A worker died: starts it anew with all cuts and repeats its chunks, once."""
        for worker in sorted({worker for worker, _ in broken}):
            _LOG.warning("worker %d died and is started anew", worker)
            self._n_restart += 1
            executor = self._executors[worker]
            if executor is not None:
                executor.shutdown(wait=False, cancel_futures=True)
            self._executors[worker] = None
            self._known[worker] = [0] * len(self.pools)
        for worker, chunk in sorted(broken, key=lambda item: item[1][0]):
            future = self._submit(worker, chunk, requests, measure)
            found, self._counts[worker] = future.result()
            for place, solution in zip(chain.from_iterable(chunk), found, strict=True):
                solutions[place] = solution

    def _part(self, worker: int) -> ValueGraph:
        """The graph with the programs of the worker's own families only: the others are large.

        Of those a worker asks how many members they have and what the tables say.
        """
        own = self._families_of(worker)
        families = tuple(
            _without_names(family)
            if i in own
            else Elsewhere(family.name, family.n_member, family.is_expanded)
            for i, family in enumerate(self.graph.families)
        )
        return replace(self.graph, families=families)

    def _families_of(self, worker: int) -> set[int]:
        """Families of which the worker holds a model."""
        own = {family for (family, _), owner in self._owner.items() if owner == worker}
        if worker == 0:  # whatever has no owner is solved there
            named = {family for family, _ in self._owner}
            own |= set(range(len(self.graph.families))) - named
        return own

    def _asked_for(self, worker: int) -> set[int]:
        """Families whose cuts the worker needs: its own and their children."""
        own = self._families_of(worker)
        children = {child for i in own for child in self.tables.families[i].child_families}
        return own | children

    def _submit(
        self,
        worker: int,
        chunk: Runs,
        requests: Sequence[NodeRequest],
        measure: Measure | None,
    ) -> Future[tuple[list[NodeSolution], dict[str, float]]]:
        if self._executors[worker] is None:
            self._executors[worker] = ProcessPoolExecutor(
                max_workers=1,
                # A forked child would share the parent's solver threads.
                mp_context=multiprocessing.get_context("spawn"),
                initializer=_start_worker,
                initargs=(self._part(worker), self.tables, self._cache_bytes),
            )
        executor = self._executors[worker]
        assert executor is not None
        runs = [[requests[i] for i in run] for run in chunk]
        return executor.submit(_solve_chunk, self._news(worker), runs, measure)

    def counts(self) -> dict[str, float]:
        """Counted events of all workers."""
        total: dict[str, float] = {}
        for counts in self._counts:
            for name, number in counts.items():
                total[name] = total.get(name, 0.0) + number
        if self._n_restart:
            total["worker restart"] = float(self._n_restart)
        return total

    def resident_bytes(self) -> int:
        """Memory of this process and of all workers, as they last said."""
        own = resident_bytes()
        if self._local is not None:
            return own
        return own + int(sum(counts.get("resident bytes", 0.0) for counts in self._counts))

    def close(self) -> None:
        """Ends the processes."""
        for i, executor in enumerate(self._executors):
            if executor is not None:
                executor.shutdown(wait=True, cancel_futures=True)
                self._executors[i] = None


def _without_names(family: Family) -> Family:
    """The family without the names of columns and rows, which nobody reads in a worker."""
    slim = copy(family)
    slim.program = replace(family.program, col_names=(), row_names=())
    return slim


def _chunks(runs: Runs) -> list[Runs]:
    """Whole runs, put together up to the size of a chunk."""
    chunks: list[Runs] = []
    n = 0
    for run in runs:
        if not chunks or n + len(run) > CHUNK:
            chunks.append([])
            n = 0
        chunks[-1].append(run)
        n += len(run)
    return chunks


def _share_out(weights: dict[tuple[int, int], float], n_worker: int) -> dict[tuple[int, int], int]:
    """Gives each model to the worker that has least so far, heaviest first."""
    load = [0.0] * n_worker
    owner = {}
    for key in sorted(weights, key=lambda k: (-weights[k], k)):
        worker = load.index(min(load))
        owner[key] = worker
        load[worker] += weights[key]
    return owner
