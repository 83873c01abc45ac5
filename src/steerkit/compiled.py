"""The compiler: its options, its cache and its switch. No other file names numba.

Every law is written once, as a *kernel*: a plain Python function on floats, tuples and arrays, without checks. `kernel` hands it
to the compiler; where numba is missing, or NUMBA_DISABLE_JIT=1, it stays the plain function and gives the same bits, only slower.

The cache never lies: its folder is chosen by a hash of all the package's sources, so that an edit in any file misses the old
cache (numba alone looks only at the file of the function itself, not at those of the functions that it calls).
"""

from __future__ import annotations

import functools
import hashlib
import os
import shutil
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from importlib import import_module
from pathlib import Path
from typing import Any, TypeVar, cast

numba: Any
try:
    numba = import_module("numba")
except ImportError:  # a small board: everything below runs as plain Python
    numba = None

Function = TypeVar("Function", bound=Callable[..., Any])

ON: bool = numba is not None and not numba.config.DISABLE_JIT
PACKAGE = Path(__file__).parent
KEPT_CACHES = 4  # older ones are removed: each edit of the package makes a new one of a few megabytes


def hash_of_sources(package: Path) -> str:
    """Return a short hash of every Python file below `package`, names included."""
    digest = hashlib.sha256()
    for path in sorted(package.rglob("*.py")):
        digest.update(path.relative_to(package).as_posix().encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()[:16]


def cache_homes() -> list[Path]:
    """Return the folders that may hold the cache, the wanted one first.

    STEERKIT_CACHE where it is set; else beside the package, as Python's own byte code; else the user's cache folder.
    """
    told = os.environ.get("STEERKIT_CACHE")
    user = os.environ.get("XDG_CACHE_HOME") or os.path.join(os.path.expanduser("~"), ".cache")
    return [Path(told)] if told else [PACKAGE / "__pycache__", Path(user) / "steerkit"]


def prepared(folder: Path) -> bool:
    """Make `folder` and say whether files can be written in it; drop the oldest of its siblings."""
    probe = folder / f"probe-{os.getpid()}"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        probe.touch()
        probe.unlink()
        siblings = sorted(folder.parent.glob("kernels-*"), key=lambda path: path.stat().st_mtime, reverse=True)
    except OSError:
        return False
    for old in [path for path in siblings if path != folder][KEPT_CACHES - 1 :]:
        shutil.rmtree(old, ignore_errors=True)
    return True


@functools.cache
def cache_folder() -> Path | None:
    """Return the folder of this package's compiled kernels, or None where nothing can be written."""
    name = "kernels-" + hash_of_sources(PACKAGE)
    return next((home / name for home in cache_homes() if prepared(home / name)), None)


@contextmanager
def cache_set_to(folder: Path | None) -> Iterator[None]:
    """Point numba's cache at `folder` while a kernel is being decorated, and at nothing else."""
    before = numba.config.CACHE_DIR
    numba.config.CACHE_DIR = str(folder or "")
    try:
        yield
    finally:
        numba.config.CACHE_DIR = before


def kernel(function: Function) -> Function:
    """Return `function` compiled at its first call (not at import), or as it is where there is no compiler.

    No fast-math: a NaN must stay a NaN, and the bits must be those of plain Python. `nogil` lets a control loop run beside
    other threads. `error_model="numpy"`: no hidden test at each division; a kernel guards its own divisors.
    """
    if not ON:
        return function
    folder = cache_folder()
    with cache_set_to(folder):
        return cast(Function, numba.njit(cache=folder is not None, nogil=True, error_model="numpy")(function))


def compile_once(function: Callable[..., Any], *examples: object) -> None:
    """Compile a kernel for the types of `examples`, and then for no others: a step must never stop to compile."""
    dispatcher = cast(Any, function)
    if ON and not dispatcher.signatures:
        dispatcher.compile(tuple(numba.typeof(example) for example in examples))
        dispatcher.disable_compile()
