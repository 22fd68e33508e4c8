"""Compiles and runs the frozen C twins."""

import json
import shutil
import subprocess
import tempfile
from functools import cache
from pathlib import Path

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
