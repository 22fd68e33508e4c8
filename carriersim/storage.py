"""A result directory: written as a whole or not at all, read back to an equal Result."""

import contextlib
import ctypes
import json
import os
import shutil
import tempfile
from dataclasses import asdict
from pathlib import Path

import numpy as np

from carriersim.result import (
    FORMAT,
    Estimate,
    FourPoint,
    Heat,
    LimitRow,
    LongChannel,
    Noise,
    Part,
    PartSum,
    ProbeReading,
    Result,
    Thermal,
    Trajectory,
)
from carriersim.scenario import load, to_yaml

SCENARIO, SUMMARY, FIELDS, PROFILE = "scenario.yaml", "summary.json", "fields.npz", "profile.csv"
FIGURES = (
    "profile", "occupation", "resistance", "departure", "temperatures", "heat", "directions",
    "trajectories",
)  # fmt: skip
OURS = {SCENARIO, SUMMARY, FIELDS, PROFILE}
OURS |= {f"{name}.{kind}" for name in FIGURES for kind in ("png", "svg")}

ENERGY_ARRAYS = ("f_plus", "f_minus")
CELL_ARRAYS = (
    "mu_plus_meV",
    "mu_minus_meV",
    "mu_meV",
    "carrier_temperature_plus_K",
    "carrier_temperature_minus_K",
    "carrier_temperature_K",
    "departure",
    "lattice_power_W_per_nm",
)
DIRECTION_AXES = ("view_nm", "direction_deg")  # only in two and three dimensions, like the next
DIRECTION_ARRAYS = ("current_by_direction",)
AXES = ("x_nm", "cell_edges_nm", "energy_meV", "energy_edges_meV")
ESTIMATES = (
    "transmission",
    "current_A",
    "conductance_S",
    "resistance_ohm",
    "resistance_width_ohm_um",
    "differential_resistance_ohm",
)
COUNTERS = (
    "histories",
    "events",
    "seconds",
    "iterations",
    "converged",
    "residual",
    "drift",
    "drift_sigma",
    "stopped_by",
)


class PlaceError(OSError):
    """A directory that can't take a result; the message says what to do."""


def check_place(directory):
    """Raise PlaceError unless a result may be written to this directory."""
    directory = Path(directory)
    if directory.is_symlink() or (directory.exists() and not directory.is_dir()):
        raise PlaceError(f"{directory}: not a directory; choose another place with --out")
    if directory.exists():
        if directory.samefile(os.curdir):
            raise PlaceError(
                f"{directory}: the working directory can't be replaced; "
                "choose another place with --out"
            )
        _check_ours(directory)
    parent = directory.absolute().parent
    while not parent.exists():
        parent = parent.parent
    if not parent.is_dir():
        raise PlaceError(f"{parent}: not a directory; choose another place with --out")
    if not os.access(parent, os.W_OK | os.X_OK):
        raise PlaceError(f"{parent}: not writable; choose another place with --out")


def _check_ours(directory):
    try:
        names = sorted(os.listdir(directory))
    except OSError as error:
        raise PlaceError(f"{directory}: {error.strerror}; choose another place") from error
    foreign = [name for name in names if name not in OURS]
    if foreign:
        shown = ", ".join(foreign[:3]) + (", ..." if len(foreign) > 3 else "")
        raise PlaceError(
            f"{directory}: holds what is not a result of carriersim ({shown}); "
            "nothing was written; choose another place with --out"
        )
    if names and not is_result(directory):
        raise PlaceError(
            f"{directory}: its {SUMMARY} is not one of carriersim's; nothing was written; "
            "choose another place with --out"
        )


def is_result(directory):
    """Whether a directory holds a result of ours."""
    try:
        summary = json.loads((Path(directory) / SUMMARY).read_text("utf-8"))
    except (OSError, ValueError):
        return False
    return isinstance(summary, dict) and summary.get("program") == "carriersim"


def save(result, directory, figures=False):
    """Write all files of a result and put them in place at once; returns the directory's Path."""
    check_place(directory)
    directory = Path(directory)
    parent = directory.absolute().parent
    try:
        parent.mkdir(parents=True, exist_ok=True)
        work = Path(tempfile.mkdtemp(prefix=f".{directory.name}-", dir=parent))
    except OSError as error:
        raise PlaceError(f"{parent}: {error.strerror}; choose another place with --out") from error
    try:
        os.chmod(work, 0o777 & ~_umask())
        _write_files(result, work)
        if figures:
            from carriersim.figures import save_all

            save_all(result, work)
        _put_in_place(work, directory)
    except OSError as error:
        if isinstance(error, PlaceError):
            raise
        raise PlaceError(f"{directory}: {error.strerror or error}") from error
    finally:
        shutil.rmtree(work, ignore_errors=True)
    return directory


def _umask():
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _put_in_place(work, directory):
    """Swap the finished directory with the old one in a single step where the system can."""
    if not directory.exists():
        os.rename(work, directory)
        return
    _check_ours(directory)
    if not _exchange(work, directory):
        aside = work.with_name(f"{work.name}.old")
        os.rename(directory, aside)
        try:
            os.rename(work, directory)
        except OSError:
            os.rename(aside, directory)
            raise
        shutil.rmtree(aside, ignore_errors=True)


def _exchange(first, second):
    """Linux's atomic exchange of two paths; False where there is none."""
    with contextlib.suppress(OSError, AttributeError):
        at_cwd, exchange = -100, 2  # AT_FDCWD, RENAME_EXCHANGE of linux/fs.h
        call = ctypes.CDLL(None, use_errno=True).renameat2
        return call(at_cwd, os.fsencode(first), at_cwd, os.fsencode(second), exchange) == 0
    return False


def _write_files(result, work):
    (work / SCENARIO).write_text(to_yaml(result.scenario), "utf-8")
    text = json.dumps(summary(result), indent=2, allow_nan=False, ensure_ascii=False)
    (work / SUMMARY).write_text(text + "\n", "utf-8")
    arrays = {name: getattr(result, name) for name in (*AXES, *CELL_ARRAYS, *ENERGY_ARRAYS)}
    if result.current_by_direction is not None:
        arrays |= {name: getattr(result, name) for name in (*DIRECTION_AXES, *DIRECTION_ARRAYS)}
    arrays |= {f"{name}_error": value for name, value in result.errors.items()}
    arrays |= _trajectory_arrays(result.trajectories)
    np.savez(work / FIELDS, **arrays)
    _write_profile(result, work / PROFILE)


def _trajectory_arrays(trajectories):
    """Trajectories one after the other: places, kinds, and the number of places of each."""
    if not trajectories:
        return {}
    return {
        "trajectory_places_nm": np.concatenate([t.places_nm for t in trajectories]),
        "trajectory_kinds": np.concatenate([t.kinds for t in trajectories]),
        "trajectory_sizes": np.array([t.kinds.size for t in trajectories]),
    }


def _read_trajectories(arrays):
    if "trajectory_sizes" not in arrays:
        return ()
    ends = np.cumsum(arrays["trajectory_sizes"])[:-1]
    places = np.split(arrays["trajectory_places_nm"], ends)
    kinds = np.split(arrays["trajectory_kinds"], ends)
    return tuple(Trajectory(p, k) for p, k in zip(places, kinds, strict=True))


def _write_profile(result, path):
    """One line a cell: x and every profile with its error."""
    suffix = "_per_eV" if result.linear_response else "_meV"
    columns = {"x_nm": result.x_nm}
    for name in CELL_ARRAYS:
        shown = name.replace("_meV", suffix)
        columns[shown] = getattr(result, name)
        columns[f"{shown}_error"] = result.errors[name]
    rows = np.column_stack(list(columns.values()))
    np.savetxt(path, rows, fmt="%.9g", delimiter=",", header=",".join(columns), comments="")


def _plain(value):
    """Dataclasses of estimates as JSON values; an Estimate without systematic has none."""
    if isinstance(value, Estimate):
        plain = {"value": value.value, "error": value.error}
        return plain if value.systematic is None else plain | {"systematic": value.systematic}
    if isinstance(value, tuple | list):
        return [_plain(item) for item in value]
    return value


def summary(result):
    """Content of summary.json, a dict of JSON values. Keys and meanings: the README."""
    window = result.scenario.contacts.bias_mV
    data = {
        "program": "carriersim",
        "format": FORMAT,
        "scenario": result.scenario.name,
        "version": result.version,
        "seed": result.scenario.simulation.seed,
        "bias_mV": window,
        "linear_response": result.linear_response,
        "potential_unit": "bias" if result.linear_response else "mV",
    }
    data |= {name: getattr(result, name) for name in COUNTERS}
    data |= {name: _plain(getattr(result, name)) for name in ESTIMATES}
    data["ballistic_resistance_ohm"] = result.ballistic_resistance_ohm
    data["breakdown"] = (
        None if result.breakdown is None else [_part(part) for part in result.breakdown]
    )
    if result.breakdown_sums is not None:
        data["breakdown_sums"] = [
            {"kind": s.kind, "mechanism": s.mechanism, "count": s.count}
            | {"resistance_ohm": _plain(s.resistance_ohm)}
            for s in result.breakdown_sums
        ]
    data["four_point"] = (
        None
        if result.four_point is None
        else [
            {"from_nm": f.from_nm, "to_nm": f.to_nm, "resistance_ohm": _plain(f.resistance_ohm)}
            for f in result.four_point
        ]
    )
    data["probes"] = [
        {"position_nm": p.position_nm, "potential_mV": _plain(p.potential)} for p in result.probes
    ]
    for name in ("heat_W", "thermal", "noise", "long_channel"):
        group = getattr(result, name)
        data[name] = (
            None if group is None else {key: _plain(value) for key, value in vars(group).items()}
        )
    data["limits"] = [asdict(row) for row in result.limits]
    data["why"] = result.why
    if result.trouble:
        data["trouble"] = result.trouble
    return data


def _part(part):
    data = {"part": part.name, "kind": part.kind}
    if part.kind == "piece":
        data |= {"from_nm": part.from_nm, "to_nm": part.to_nm, "mechanism": part.mechanism}
    else:
        data["position_nm"] = part.position_nm
    return data | {"resistance_ohm": _plain(part.resistance_ohm)}


def open_result(directory):
    """Read a result directory back; returns a Result.

    Raises PlaceError if there is none, or if it was written in a newer format.
    """
    directory = Path(directory)
    if not is_result(directory):
        raise PlaceError(f"{directory}: no result of carriersim here")
    data = json.loads((directory / SUMMARY).read_text("utf-8"))
    if data["format"] > FORMAT:
        raise PlaceError(
            f"{directory}: written in format {data['format']}, this version reads up to {FORMAT}"
        )
    with np.load(directory / FIELDS, allow_pickle=False) as archive:
        arrays = dict(archive)
    names = (*AXES, *CELL_ARRAYS, *ENERGY_ARRAYS)
    return Result(
        scenario=load(directory / SCENARIO),
        version=data["version"],
        linear_response=data["linear_response"],
        ballistic_resistance_ohm=data["ballistic_resistance_ohm"],
        why=data["why"],
        trouble=data.get("trouble"),
        breakdown=_read_list(data["breakdown"], _read_part),
        breakdown_sums=_read_list(data.get("breakdown_sums"), _read_sum),
        four_point=_read_list(
            data["four_point"],
            lambda f: FourPoint(f["from_nm"], f["to_nm"], _read_estimate(f["resistance_ohm"])),
        ),
        probes=_read_list(
            data["probes"],
            lambda p: ProbeReading(p["position_nm"], _read_estimate(p["potential_mV"])),
        ),
        heat_W=_read_group(Heat, data["heat_W"]),
        thermal=_read_group(Thermal, data["thermal"]),
        noise=_read_group(Noise, data["noise"]),
        limits=tuple(LimitRow(**row) for row in data["limits"]),
        long_channel=_read_group(LongChannel, data["long_channel"]),
        errors={
            name: arrays[f"{name}_error"]
            for name in (*CELL_ARRAYS, *ENERGY_ARRAYS, *DIRECTION_ARRAYS)
            if f"{name}_error" in arrays
        },
        trajectories=_read_trajectories(arrays),
        **{n: arrays[n] for n in (*DIRECTION_AXES, *DIRECTION_ARRAYS) if n in arrays},
        **{name: data[name] for name in COUNTERS},
        **{name: _read_estimate(data[name]) for name in ESTIMATES},
        **{name: arrays[name] for name in names},
    )


def _read_estimate(data):
    return Estimate(**data) if isinstance(data, dict) else data


def _read_list(data, read):
    return None if data is None else tuple(read(item) for item in data)


def _read_part(data):
    data = dict(data)
    estimate = _read_estimate(data.pop("resistance_ohm"))
    return Part(name=data.pop("part"), resistance_ohm=estimate, **data)


def _read_sum(data):
    return PartSum(**(data | {"resistance_ohm": _read_estimate(data["resistance_ohm"])}))


def _read_group(kind, data):
    if data is None:
        return None
    return kind(
        **{
            key: tuple(_read_estimate(v) for v in value)
            if isinstance(value, list)
            else _read_estimate(value)
            for key, value in data.items()
        }
    )
