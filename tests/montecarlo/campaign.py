"""Running the campaign: flights are simulated in batches, batches of all families share the processes."""

from collections.abc import Iterable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import partial

from threadpoolctl import threadpool_limits

from tests.montecarlo.outcome import Outcome, outcome_of
from tests.synthetic.families import simulate_each, simulate_mixed

BATCH = 48
"""Flights stepped together by one process: enough to make the steps cheap, few enough to share out."""


@dataclass(frozen=True, slots=True)
class Task:
    """Flights `first` to `first + count - 1` of each of the families; of several only from the first on."""

    families: tuple[str, ...]
    first: int
    count: int


def plan_tasks(families: Sequence[str], flights: int, processes: int) -> list[Task]:
    """Batches in the order of the families; where a family has few flights, several share one."""
    if flights > BATCH // 2:
        return [
            Task((family,), first, min(BATCH, flights - first))
            for family in families
            for first in range(0, flights, BATCH)
        ]
    together = max(min(BATCH // flights, -(-len(families) // processes)), 1)
    return [Task(tuple(families[k : k + together]), 0, flights) for k in range(0, len(families), together)]


def run_task(task: Task, seed: int) -> dict[str, list[Outcome]]:
    """Outcomes by family."""
    if len(task.families) > 1:
        flown = simulate_mixed(task.families, task.count, seed)
        return {family: [outcome_of(flight) for flight in flown[family]] for family in task.families}
    (family,) = task.families
    return {family: [outcome_of(flight) for flight in simulate_each(family, task.count, seed, first=task.first)]}


def run_campaign(
    families: Sequence[str], flights: int, seed: int, processes: int
) -> Iterator[tuple[str, list[Outcome]]]:
    """Each family with its outcomes, in the order given, as soon as it is complete."""
    tasks = plan_tasks(families, flights, processes)
    run = partial(run_task, seed=seed)
    if processes == 1:
        yield from _gather(tasks, map(run, tasks), flights)
        return
    with ProcessPoolExecutor(processes, initializer=threadpool_limits, initargs=(1,)) as pool:
        try:
            yield from _gather(tasks, pool.map(run, tasks), flights)
        finally:
            # an interrupted campaign starts nothing more
            pool.shutdown(wait=False, cancel_futures=True)


def _gather(
    tasks: Iterable[Task], results: Iterable[dict[str, list[Outcome]]], flights: int
) -> Iterator[tuple[str, list[Outcome]]]:
    """Families as they become complete."""
    gathered: dict[str, list[Outcome]] = {}
    for task, result in zip(tasks, results, strict=True):
        for family in task.families:
            outcomes = gathered.setdefault(family, [])
            outcomes.extend(result[family])
            if len(outcomes) == flights:
                yield family, gathered.pop(family)
