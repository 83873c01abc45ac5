"""The compiler: the same bits with and without it, nothing compiled twice, a cache that never lies."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import steerkit
from robots import cart
from steerkit import Controller, Measurement, compiled
from steerkit.step import fresh_kernel, in_place_kernel, step_kernel

HERE = Path(__file__).parent
PACKAGE = Path(steerkit.__file__).parent
needs_compiler = pytest.mark.skipif(not compiled.ON, reason="the compiler is off in this lane")


def python(*arguments: str, **environment: str) -> str:
    """Return what a fresh Python prints."""
    kept = {key: value for key, value in os.environ.items() if key not in ("NUMBA_DISABLE_JIT", "STEERKIT_TEST_WITHOUT_NUMBA")}
    run = subprocess.run(
        [sys.executable, "-W", "error", *arguments],
        env=kept | environment,
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert run.returncode == 0, run.stderr
    return run.stdout.strip()


@needs_compiler
def test_compiled_and_plain_give_the_same_bits_over_ten_thousand_steps():
    with_compiler = python(str(HERE / "bits.py"))
    assert with_compiler.startswith("True ")
    without = python(str(HERE / "bits.py"), NUMBA_DISABLE_JIT="1")
    assert without == with_compiler.replace("True", "False")
    assert python(str(HERE / "bits.py"), "without-numba") == without


@needs_compiler
def test_a_second_call_compiles_nothing_whatever_comes():
    import numpy as np

    steering = Controller(cart(), capture_radius=0.2)
    memory, door = steering.start(0.0), steering.in_place(0.0)
    before = [len(one.signatures) for one in (step_kernel, in_place_kernel, fresh_kernel)]
    assert before == [1, 1, 1]
    for measurement in (
        Measurement(1, (0, 0, 0), (1, 1)),
        Measurement(np.float32(1), np.zeros(3, np.float32), [1, 2], hold=True),
        Measurement(2.0, None, None, speed_limit=3),
    ):
        memory = steering.step(memory, measurement).memory
        door.step()
    Controller(cart(dead_time=0.4), capture_radius=0.1).start(5)
    assert [len(one.signatures) for one in (step_kernel, in_place_kernel, fresh_kernel)] == before
    assert not step_kernel._can_compile


SCRIPT = """
import sys; sys.path.insert(0, sys.argv[1])
import numpy as np
from steerkit import compiled, kinematics
assert kinematics.__file__.startswith(sys.argv[1])
heading = kinematics.arc(np.zeros((2, 3)), (0.0, 1.0), 4.0)[0, 2]
stats = kinematics.arc_row_kernel.stats
print(round(heading, 6), sum(stats.cache_hits.values()), compiled.cache_folder())
"""


@needs_compiler
def test_an_edit_of_any_file_is_never_answered_from_an_old_cache(tmp_path):
    """arc_row_kernel (kinematics.py) calls wrap_kernel (angles.py): an edit there must show, though kinematics.py is the same."""
    copy = tmp_path / "steerkit"
    shutil.copytree(PACKAGE, copy, ignore=shutil.ignore_patterns("__pycache__"))
    ask = ("-c", SCRIPT, str(tmp_path))
    first, again = python(*ask).split(), python(*ask).split()
    assert first[:2] == ["-2.283185", "0"]
    assert again[:2] == ["-2.283185", "1"]  # a second process finds it
    angles = copy / "angles.py"
    text = angles.read_text()
    assert text.count("return wrapped if wrapped > -PI else PI") == 1
    angles.write_text(text.replace("return wrapped if wrapped > -PI else PI", "return wrapped + 1.0"))
    edited = python(*ask).split()
    assert edited[:2] == ["-1.283185", "0"]
    assert edited[2] != first[2]


@needs_compiler
def test_old_caches_are_removed(tmp_path):
    for i in range(8):
        folder = tmp_path / f"kernels-{i}"
        folder.mkdir()
        os.utime(folder, (i, i))
    assert compiled.prepared(tmp_path / "kernels-new")
    assert sorted(path.name for path in tmp_path.iterdir()) == ["kernels-5", "kernels-6", "kernels-7", "kernels-new"]


@needs_compiler
def test_where_nothing_can_be_written_it_runs_without_a_cache(tmp_path):
    """A read-only home and a read-only package, both made so by files where the folders would be (root may write anywhere)."""
    copy = tmp_path / "steerkit"
    shutil.copytree(PACKAGE, copy, ignore=shutil.ignore_patterns("__pycache__"))
    (copy / "__pycache__").write_text("")
    got = python("-B", "-c", SCRIPT, str(tmp_path), HOME="/dev/null", XDG_CACHE_HOME="/dev/null/cache")
    assert got.split() == ["-2.283185", "0", "None"]


@needs_compiler
def test_a_read_only_home_is_no_obstacle_where_the_package_can_be_written(tmp_path):
    copy = tmp_path / "steerkit"
    shutil.copytree(PACKAGE, copy, ignore=shutil.ignore_patterns("__pycache__"))
    got = python("-c", SCRIPT, str(tmp_path), HOME="/dev/null", XDG_CACHE_HOME="/dev/null/cache")
    assert got.split()[2].startswith(str(copy / "__pycache__"))


def test_importing_steerkit_is_light():
    loaded = python(
        "-c",
        "import sys, steerkit; print(sorted({m.split('.')[0] for m in sys.modules} & {'numba', 'numpy', 'scipy', 'hypothesis'}))",
    )
    assert loaded == "[]"


def test_stepping_a_controller_loads_neither_hypothesis_nor_matplotlib():
    code = "import sys; sys.path.insert(0, sys.argv[1]); import bits; bits.digest(1, 2); print(*sys.modules)"
    assert not {"hypothesis", "matplotlib"} & set(python("-c", code, str(HERE)).split())
