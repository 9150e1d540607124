"""What second processes do beside the replay: simulate the runs ahead of it, and make half of each evening's pass.

Without them the same is done in place, and the history comes out the same. Processes are spawned, not forked: the
caller may hold threads (a progress bar) and an open database.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import replace
from datetime import datetime
from multiprocessing import get_context

from registry.jobs.fleet_pass import run_pass
from registry.services import Services, make_services
from registry.settings import Settings
from seed_demo.drives import DrivenRun, RunPlan, drive

#: Answers the simulated run of a plan. Plans are asked for in the order in which they were announced.
Take = Callable[[RunPlan], DrivenRun]
#: Makes the pass over some vehicles at the moment of the services' clock.
MakePass = Callable[[Services, list[str]], None]

_BATCH = 8
_held: dict[str, Services] = {}


def pass_here(services: Services, vehicle_ids: list[str]) -> None:
    """The pass over some vehicles, in this process."""
    run_pass(services, services.now(), vehicle_ids)


@contextmanager
def simulated_ahead(planned: list[RunPlan]) -> Iterator[Take]:
    """A process that simulates all runs in order, as fast as it can."""
    with ProcessPoolExecutor(max_workers=1, mp_context=get_context("spawn")) as pool:
        stream = pool.map(drive, planned, chunksize=_BATCH)

        def take(plan: RunPlan) -> DrivenRun:
            run = next(stream)
            if run.plan.run_key != plan.run_key:
                raise RuntimeError(f"the simulation answered {run.plan.run_key} where {plan.run_key} was due")
            return run

        try:
            yield take
        finally:
            pool.shutdown(wait=True, cancel_futures=True)


@contextmanager
def passes_shared(settings: Settings) -> Iterator[MakePass]:
    """A process that makes every other vehicle's part of each pass, at the same time as this one makes the rest."""
    context = get_context("spawn")
    with ProcessPoolExecutor(1, context, _open, (settings,)) as pool:

        def make(services: Services, vehicle_ids: list[str]) -> None:
            there = pool.submit(_pass_there, services.now(), vehicle_ids[1::2]) if len(vehicle_ids) > 1 else None
            pass_here(services, vehicle_ids[0::2])
            if there is not None:
                there.result()

        yield make


def _open(settings: Settings) -> None:
    _held["services"] = make_services(settings, durable=False)


def _pass_there(moment: datetime, vehicle_ids: list[str]) -> None:
    pass_here(replace(_held["services"], now=lambda: moment), vehicle_ids)
