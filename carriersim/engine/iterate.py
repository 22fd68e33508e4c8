"""Rounds with frozen fields: from a Problem with relaxation to the totals of its batches.

What particles meet (potentials, temperatures, occupations) comes from the rounds before. Potentials
and temperatures belong to each batch, so that batches stay independent and their spread is the
whole error; occupations, which enter the phonon rates, are shared, because their noise leaves a
bias that falls with all histories.

Rounds come in windows; the histories of a round double from window to window. Fields are averages
over all rounds, weighted with histories and with the number of the round, so that the start is
forgotten. Results come from the last two windows; the drift between them tells convergence, and
the last three, whose fields are of three noise levels, tell the bias that noise leaves.
"""

import contextlib
import time
from dataclasses import dataclass, field, replace

import numpy as np
from joblib import Parallel

from carriersim.engine.deviation import FromTrial, State, Tangent, deviation_of
from carriersim.engine.observe_relaxed import heat_share
from carriersim.engine.rounds import Fields, Rounds, Window, compile_for, empty_window, first_size
from carriersim.engine.solve import Goal, NothingDone, StopRequest

ROUNDS = 6  # of each window
FIRST_WINDOWS = 3  # before a result is looked at
FEWEST_WINDOWS = 2  # that make a result at all
MAIN_SHARE = 0.65  # of max_seconds, where a run that gives dI/dV follows
STATE_WINDOWS = 4  # of a run that only finds the state about which to follow the bias
MOST_WINDOWS = 14
DRIFT_SIGMA = 3.5  # largest drift between the last two windows, in standard errors


@dataclass
class RelaxedTotals:
    """What a relaxing run found; `sums` of the last two windows, see SUMS."""

    histories: np.ndarray
    sums: dict
    field_sum: np.ndarray  # (2, B, C) deviations
    field_variance: np.ndarray  # (3, B, C) of right, left, mean of both, of the mean of the run
    strength: float  # of all that the particles stand for, in meV
    windows: list = field(default_factory=list)
    flights: int = 0
    all_histories: int = 0
    rounds: int = 0
    seconds: float = 0.0
    stopped_by: str = ""
    trouble: str = ""  # see solve.Totals
    converged: bool = False
    residual: float | None = None
    drift: str = ""  # which field drifts most and where, in words
    fields: Fields | None = None  # what the last round has left
    tangent: "RelaxedTotals | None" = None  # change with the bias, where it needs a run of its own


def merge(windows):
    """Sums of several windows as one."""
    return Window(
        sum(x.histories for x in windows),
        {key: sum(x.sums[key] for x in windows) for key in windows[0].sums},
        sum(x.field_sum for x in windows),
        sum(x.groups for x in windows),
    )


def field_variance(window):
    """Variance of the mean occupation (3, B, C): right, left, mean of both; from the groups."""
    count = len(window.groups)
    histories = np.array([window.histories[g::count].sum() for g in range(count)], float)
    total = histories.sum()
    square = np.zeros((3, *window.field_sum.shape[1:]))
    mean = window.field_sum / total
    for part, group in zip(histories, window.groups, strict=True):
        away = group / part - mean
        square[:2] += part * away**2
        square[2] += part * (0.5 * (away[0] + away[1])) ** 2
    return square / (count - 1) / total


def relax(problem, goal, workers=1, stop=None, progress=None):
    """Run until the goal is met and the fields have converged; returns RelaxedTotals.

    Arguments as for solve.solve. Raises NothingDone if no two windows were completed.
    """
    stop = stop or StopRequest()
    if problem.window.linear:
        state = None if problem.relaxed.equilibrium else _state_without_bias(problem, workers, stop)
        return _follow(problem, Tangent(problem, state), goal, workers, stop, progress)
    deviation = deviation_of(problem)
    if goal.max_seconds and not problem.relaxed.setting.exact_energy:
        goal = replace(goal, max_seconds=MAIN_SHARE * goal.max_seconds)
    totals = _follow(problem, deviation, goal, workers, stop, progress)
    # With directions the trial occupation is too rough to linearise about.
    slope = problem.space is None and not problem.relaxed.setting.exact_energy
    if slope and not stop.flag[0]:
        tangent = Tangent(problem, _state(problem, deviation, totals.fields))
        windows = max(len(totals.windows) - 1, FEWEST_WINDOWS)
        with contextlib.suppress(NothingDone):
            totals.tangent = _follow(
                problem, tangent, Goal(None, None, None), workers, stop, None, windows
            )
    return totals


def _state_without_bias(problem, workers, stop):
    """What unequal temperatures drive at bias 0, as accurate as a short run finds it."""
    deviation = FromTrial(problem)
    goal = Goal(None, None, None)
    totals = _follow(problem, deviation, goal, workers, stop, None, STATE_WINDOWS)
    return _state(problem, deviation, totals.fields)


def _state(problem, deviation, fields):
    mu, kT = deviation.mu_and_kT(fields.cells.mean(axis=0))
    return State(mu, kT, fields.probes.mean(axis=0), deviation.trial)


def _follow(problem, deviation, goal, workers, stop, progress, most=None):
    """Windows of rounds until the goal is met, or `most` of them."""
    rounds = Rounds(problem, workers, stop, deviation)
    compile_for(rounds)  # once, before threads start and the clock runs
    begin = time.perf_counter()
    windows, number, flights = [], 0, 0
    whole = None  # flights, rounds and fields when the last whole window was done
    size = first_size(problem)
    stopped_by = ""
    with Parallel(n_jobs=workers, prefer="threads", return_as="generator", batch_size=1) as pool:
        while not stopped_by:
            window = empty_window(problem, rounds.batches)
            for _ in range(ROUNDS):
                outcome = rounds.one_round(size, pool, window)
                if outcome is None:
                    stopped_by = stop.reason or "event_limit"
                    break
                late = goal.max_seconds and time.perf_counter() - begin > goal.max_seconds
                if late and len(windows) >= FIRST_WINDOWS:
                    stopped_by = "max_seconds"
                    break
                made, values, occupation = outcome
                flights += made
                number += 1
                rounds.learn(values, occupation, size * rounds.batches, number)
            if stopped_by:
                break
            windows.append(window)
            whole = flights, number, replace(rounds.fields), rounds.strength
            for old in windows[:-2]:
                old.groups = None
            totals = _totals(windows, *whole, time.perf_counter() - begin)
            _judge(problem, totals, goal, progress)
            stopped_by = totals.stopped_by
            if len(windows) == most:
                stopped_by = "windows"
            size *= 2
    if len(windows) < FEWEST_WINDOWS:
        why = rounds.trouble or stopped_by
        raise NothingDone(f"stopped before two windows were complete ({why})")
    totals = _totals(windows, *whole, time.perf_counter() - begin)
    _judge(problem, totals, goal, None)
    totals.stopped_by, totals.trouble = stopped_by, rounds.trouble
    if stopped_by == "max_seconds":  # in the middle of a window
        totals.converged = totals.residual <= DRIFT_SIGMA and not _asks_for_errors(goal)
    return totals


def _totals(windows, flights, rounds, fields, strength, seconds):
    last = merge(windows[-2:])
    return RelaxedTotals(
        histories=last.histories,
        sums=last.sums,
        field_sum=last.field_sum,
        field_variance=field_variance(last),
        strength=strength,
        windows=windows,
        flights=flights,
        all_histories=int(sum(x.histories.sum() for x in windows)),
        rounds=rounds,
        seconds=seconds,
        fields=fields,
    )


def _asks_for_errors(goal):
    return bool(goal.relative_error or goal.heat_share_error)


def _judge(problem, totals, goal, progress):
    """Set stopped_by, converged and residual."""
    if len(totals.windows) < FIRST_WINDOWS:
        return
    current = totals.sums["current"] / totals.histories
    mean = abs(current.mean())
    error = current.std(ddof=1) / np.sqrt(current.size) / mean if mean else np.inf
    totals.residual, totals.drift = drift(problem, totals.windows)
    settled = totals.residual <= DRIFT_SIGMA
    if progress is not None:
        progress.update(totals.all_histories, error, goal.relative_error, totals.seconds)
    asked = _asks_for_errors(goal)
    reached = not goal.relative_error or error <= goal.relative_error
    if goal.heat_share_error:
        share = heat_share(problem, totals)
        reached = reached and (share is None or share.error <= goal.heat_share_error)
    if asked and reached and settled:
        totals.stopped_by = "relative_error" if goal.relative_error else "heat_share_error"
        totals.converged = True
    elif goal.histories and totals.all_histories >= goal.histories:
        totals.stopped_by, totals.converged = "histories", settled and not asked
    elif goal.max_seconds and totals.seconds >= goal.max_seconds:
        totals.stopped_by, totals.converged = "max_seconds", settled and not asked
    elif len(totals.windows) >= MOST_WINDOWS:
        totals.stopped_by = "windows"


def drift(problem, windows):
    """Largest drift between the last two windows in standard errors, and what drifts, in words."""
    last, before = windows[-1], windows[-2]
    x = problem.cell_edges_nm
    centres = 0.5 * (x[1:] + x[:-1])

    def means(window):
        n = window.histories.astype(float)
        cells = window.sums["cells"] / n[:, None, None, None]
        blocks = np.array_split(np.arange(centres.size), min(8, centres.size))
        coarse = np.array([cells[:, b].mean(axis=1) for b in blocks])  # (8, batches, 2, 3)
        heat = np.array([window.sums["heat"][:, b].sum(axis=1) / n for b in blocks])
        return {
            "the current": (window.sums["current"] / n)[None],
            "mu+": coarse[..., 0, 0],
            "mu-": coarse[..., 1, 0],
            "the energy of right-moving carriers": coarse[..., 0, 1],
            "the energy of left-moving carriers": coarse[..., 1, 1],
            "the lattice power": heat,
        }, [centres[b].mean() for b in blocks]

    (new, places), (old, _) = means(last), means(before)
    worst, words = 0.0, ""
    count = sum(value.shape[0] for value in new.values())
    for name, value in new.items():
        change = value.mean(axis=1) - old[name].mean(axis=1)
        error = np.sqrt(
            (value.var(axis=1, ddof=1) + old[name].var(axis=1, ddof=1)) / value.shape[1]
        )
        size = np.abs(change) / np.maximum(error, 1e-9 * np.abs(value).max() + 1e-300)
        size = np.where(np.isfinite(size), size, np.inf)
        if size.max() > worst:
            worst = float(size.max())
            place = "" if name == "the current" else f" near {places[int(size.argmax())]:.4g} nm"
            words = f"{name}{place} (largest of {count})"
    return worst, words
