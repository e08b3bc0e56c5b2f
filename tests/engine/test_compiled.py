"""Machine code kept on disk must never outlive the source it came from, whichever file that source stands in."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import kernelfit
from kernelfit.engine import arithmetic, compensate, links, simulate, states, sweep
from kernelfit.engine.compiled import _DIGEST

# fill_cells (links.py) calls exp_into (arithmetic.py): the caller's own file is not touched by the change.
PROGRAM = """
import numpy as np
from kernelfit.engine.links import fill_cells
out = [np.zeros(3) for _ in range(4)]
fill_cells(0, np.zeros(3), 1.0, *out)
print(out[0][0], sum(fill_cells.stats.cache_hits.values()))
"""


@pytest.fixture
def package(tmp_path):
    """A copy of the package's source without any kept machine code."""
    copy = tmp_path / "kernelfit"
    shutil.copytree(Path(kernelfit.__file__).parent, copy, ignore=shutil.ignore_patterns("__pycache__"))
    return copy


def run(package):
    """exp(0) by the copy, and how many functions came from its cache."""
    env = {**os.environ, "PYTHONPATH": str(package.parent), "PYTHONDONTWRITEBYTECODE": "1"}
    env.pop("NUMBA_CACHE_DIR", None)
    done = subprocess.run([sys.executable, "-c", PROGRAM], env=env, cwd=package.parent, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    value, hits = done.stdout.split()
    return float(value), int(hits)


def change(path, old, new):
    text = path.read_text()
    assert text.count(old) == 1
    stat = path.stat()
    path.write_text(text.replace(old, new))
    os.utime(path, ns=(stat.st_atime_ns, stat.st_mtime_ns))  # as after unpacking an archive: the time says nothing


def test_a_change_in_another_file_is_seen(package):
    first, _ = run(package)
    again, hits = run(package)
    assert (first, again) == (1.0, 1.0)
    assert hits == 1, "the second run did not use the cache, so this test would prove nothing"
    change(package / "engine" / "arithmetic.py", "out[c] = p * r + 1.0", "out[c] = p * r + 2.0")
    changed, hits = run(package)
    assert (changed, hits) == (2.0, 0)


def test_the_links_codes_are_part_of_the_key(package):
    run(package)
    change(package / "model" / "links.py", "EXP = 0  #", "EXP = 0    #")
    _, hits = run(package)
    assert hits == 0


def test_every_kept_function_carries_the_key():
    """A numba that renames its internals must not silently bring back the time stamp of one file."""
    modules = (arithmetic, compensate, links, simulate, states, sweep)
    kept = [f for m in modules for f in vars(m).values() if hasattr(f, "py_func")]
    assert len(kept) >= 15
    for function in kept:
        cache_file = getattr(function._cache, "_cache_file", None)  # None: compiled anew each time, which is safe too
        assert cache_file is None or cache_file._source_stamp == _DIGEST


def test_plain_python_gives_the_same_as_machine_code():
    """`.py_func` is the source that coverage and debuggers see; it must be the same function."""
    x = np.linspace(-30, 30, 41)
    fast, plain = np.empty(41), np.empty(41)
    arithmetic.exp_into(x, 0.5, fast, np.empty(41))
    arithmetic.exp_into.py_func(x, 0.5, plain, np.empty(41))
    np.testing.assert_allclose(fast, plain, rtol=5e-16)  # contraction of products may differ by a rounding
