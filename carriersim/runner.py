"""The whole way of one run: scenario -> problem -> kernels -> totals -> result."""

import os

from carriersim.disorder import draw_random_points


def simulate(scenario, workers=None, stop=None, progress=None):
    """Simulate a scenario; returns a Result.

    workers: threads, all cores by default; the result's numbers don't depend on it.
    stop: an engine.solve.StopRequest with which another thread can end the run early.
    progress: object with update(histories, relative_error, target, seconds), or None.
    Raises NothingDone (a RuntimeError) if the run was stopped before its first round was complete,
    ScenarioError if the random scatterers of the scenario can't be placed.
    """
    # Compiled code is loaded here, not when carriersim is imported: checking a file needs none.
    from carriersim.assemble import assemble
    from carriersim.engine.problem import build
    from carriersim.engine.solve import Goal, solve

    drawn = draw_random_points(scenario)
    asked = drawn.simulation
    problem = build(drawn)
    goal = Goal(
        asked.target_relative_error, asked.histories, asked.max_seconds, asked.heat_share_error
    )
    follow = solve
    if problem.relaxed is not None:
        from carriersim.engine.iterate import relax as follow
    workers = workers or cores()
    totals = follow(problem, goal, workers, stop, progress)
    endless = None
    if problem.space is not None:
        from carriersim.engine.endless import long_channel

        endless = long_channel(problem, stop, workers, totals.flights)
    return assemble(problem, totals, as_done(drawn, totals.all_histories), endless)


def cores():
    """Processors this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def as_done(scenario, histories):
    """The scenario that repeats a run to the same bits on a machine of any speed."""
    complete = scenario.with_defaults()
    done = {"histories": histories, "max_seconds": None}
    simulation = complete.simulation.model_copy(update=done)
    return complete.model_copy(update={"simulation": simulation})
