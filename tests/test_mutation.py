"""An engine that is wrong by 2 % in one number does not get through the tests of its numbers."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

SCRIPT = Path(__file__).with_name("mutation.py")


def run(*options):
    done = subprocess.run(
        [sys.executable, str(SCRIPT), *options],
        capture_output=True,
        text=True,
        check=False,
        # A run of its own: not part of the one that starts it.
        env={k: v for k, v in os.environ.items() if not k.startswith("PYTEST_")},
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout.splitlines()


def test_a_few_mutations_are_noticed_and_the_engine_as_it_is_passes():
    lines = run("--quick")
    assert any(line.startswith("ok   no mutation") for line in lines)
    assert sum(line.startswith("ok ") for line in lines) >= 14


@pytest.mark.slow
def test_every_mutation_is_noticed():
    lines = run()
    assert sum(line.startswith("ok ") for line in lines) >= 154
