"""Help answers at once. A ratio, because seconds depend on the machine."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from pathlib import Path

import pytest

import terrain2q

ENVIRONMENT = os.environ | {"PYTHONPATH": str(Path(terrain2q.__file__).parents[1])}


def best_of_three(*args):
    seconds = []
    for _ in range(3):
        began = time.perf_counter()
        subprocess.run([sys.executable, *args], check=True, stdout=subprocess.DEVNULL, env=ENVIRONMENT)
        seconds.append(time.perf_counter() - began)
    return min(seconds)


@pytest.mark.parametrize("args", [["--help"], ["run", "--help"]])
def test_help_takes_no_more_than_three_imports_of_numpy(args):
    assert best_of_three("-m", "terrain2q.commands", *args) <= 3 * best_of_three("-c", "import numpy")
