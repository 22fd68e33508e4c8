"""Compiles and runs the frozen C twins."""

import json
import shutil
import subprocess
import tempfile
from functools import cache
from pathlib import Path

import numpy as np

HERE = Path(__file__).parent
FLAGS = ("-O3", "-march=native")


class NoCompilerError(Exception):
    """There is no gcc on this machine."""


@cache
def _folder() -> tempfile.TemporaryDirectory:
    return tempfile.TemporaryDirectory(prefix="carriersim-bench-")


@cache
def compiled(name: str) -> str:
    """Path of the program made from `name`.c for this machine; kept as long as the bench runs."""
    if shutil.which("gcc") is None:
        raise NoCompilerError("gcc was not found")
    program = Path(_folder().name) / name
    subprocess.run(["gcc", *FLAGS, "-o", program, HERE / f"{name}.c", "-lm"], check=True)
    return str(program)


def elastic(length, path, cells, histories, seed, points=()) -> dict:
    """Run the elastic twin. Arguments as of `numpy_elastic.simulate`; returns what it printed."""
    arguments = [repr(length), repr(path), cells, histories, seed]
    arguments += [f"{position!r}:{transmission!r}" for position, transmission in points]
    done = subprocess.run(
        [compiled("twin_elastic"), *map(str, arguments)], stdout=subprocess.PIPE, check=True
    )
    return json.loads(done.stdout)


def space(length, path, cells, histories, seed, side=0.0, specularity=0.0, planes=()) -> dict:
    """Run the twin of d = 3; returns what it printed.

    side: of a square cross-section, 0 for no walls; planes: (position, transmission, tunnel).
    """
    arguments = [repr(length), repr(path), cells, histories, seed, side, side, specularity]
    arguments += [f"{x!r}:{t!r}" + ":tunnel" * tunnel for x, t, tunnel in planes]
    done = subprocess.run(
        [compiled("twin_space"), *map(str, arguments)], stdout=subprocess.PIPE, check=True
    )
    return json.loads(done.stdout)


def problem_file(problem: dict) -> str:
    """Write a relaxing problem for the twin; kept as long as the bench runs.

    problem: numbers and arrays in the order in which twin_relaxing.c reads them.
    """
    handle, name = tempfile.mkstemp(dir=_folder().name)
    with open(handle, "wb") as file:
        np.concatenate([np.ravel(value) for value in problem.values()]).astype(float).tofile(file)
    return name


def relaxing(problem: str, histories: int, seed: int) -> dict:
    """Run the relaxing twin on the problem in that file; returns what it printed."""
    arguments = [compiled("twin_relaxing"), problem, str(histories), str(seed)]
    done = subprocess.run(arguments, stdout=subprocess.PIPE, check=True)
    return json.loads(done.stdout)
