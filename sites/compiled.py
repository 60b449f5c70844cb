"""The one door to numba: plain functions that also run, on single numbers, inside a compiled loop over rows.

A model marked `shared` is written once and used twice: on whole arrays by whoever calls it, and on one row's
numbers inside the loop. What is marked `inner` belongs to the loop alone. numba is imported, and anything compiled,
when a loop first runs. The compiled loop is kept beside the code, else in the user's cache, under the hash of all
the code of `sites`, so that changed code is never answered by an old loop; where neither can be written it is
compiled anew by each process.
"""

import functools
import hashlib
import os
import shutil
import sys
import tempfile
import threading
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any, Final, TypeAlias, TypeVar

import numpy as np

Function = TypeVar("Function", bound=Callable[..., Any])
Result = TypeVar("Result")
Number: TypeAlias = Any
"""What a shared model takes and gives: arrays where it is called as it is, single numbers inside a compiled loop."""

OPTIONS: Final = {"error_model": "numpy", "_nrt": False, "forceinline": True}
"""Division by zero as in numpy. No array is made inside a loop, so none needs counting of references, which would
take as long as the loop itself. One piece of code for a whole row, no calls in it. Operations keep the order they are
written in: no fast arithmetic."""

_members: list[Callable[..., Any]] = []
_lock = threading.RLock()


def shared(model: Function) -> Function:
    """Mark a model of arrays that compiled loops call on single numbers too; it stays the plain function it is."""
    _members.append(model)
    return model


def inner(part: Function) -> Function:
    """Mark a function that only compiled loops call, on the records of one row."""
    _members.append(part)
    return part


def choose(condition: Number, yes: Number, no: Number) -> Number:
    """numpy.where in a shared model: a number where it is given numbers inside a loop, an array for arrays."""
    return np.where(condition, yes, no)


def larger(a: Number, b: Number) -> Number:
    """numpy.maximum in a shared model; of two numbers inside a loop the plain larger one."""
    return np.maximum(a, b)


def smaller(a: Number, b: Number) -> Number:
    """numpy.minimum in a shared model; of two numbers inside a loop the plain smaller one."""
    return np.minimum(a, b)


def loop(function: Callable[..., None]) -> Callable[..., None]:
    """A loop over rows, compiled when it is first called; it holds no lock of Python while it runs."""
    made: list[Callable[..., Any]] = []

    @functools.wraps(function)
    def call(*arguments: Any) -> None:
        if not made:
            with _lock:
                if not made:
                    made.append(_ran(function, arguments))
                    return
        made[0](*arguments)

    return call


def is_kept() -> bool:
    """Whether this code has been compiled on this machine before."""
    return any(next((folder / _name()).rglob("*.nbi"), None) is not None for folder in _folders())


def cores() -> int:
    """Processors this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def each(work: Callable[[int], Result], count: int) -> list[Result]:
    """work(0), work(1), ... in order, on as many threads as there are processors: compiled loops run side by side."""
    if count <= 1 or cores() == 1:
        return [work(i) for i in range(count)]
    with ThreadPoolExecutor(min(cores(), count)) as pool:
        return list(pool.map(work, range(count)))


def _ran(function: Callable[..., None], arguments: tuple[Any, ...]) -> Callable[..., Any]:
    """Compile a loop by calling it for the first time, and return it as numba made it, kept where it can be."""
    import numba
    from numba.extending import overload, register_jitable

    if _members:
        overload(choose)(lambda condition, yes, no: lambda condition, yes, no: yes if condition else no)
        overload(larger)(lambda a, b: lambda a, b: a if a > b else b)
        overload(smaller)(lambda a, b: lambda a, b: a if a < b else b)
    while _members:
        register_jitable(**OPTIONS)(_members.pop())
    folder = next((one for one in _folders() if _writable(one / _name())), None)
    if folder is not None:
        _swept(folder)
        before, numba.config.CACHE_DIR = numba.config.CACHE_DIR, str(folder / _name())
        try:
            kept = numba.njit(nogil=True, cache=True, **OPTIONS)(function)
            kept(*arguments)
            return kept  # type: ignore[no-any-return]
        except OSError:  # kept nowhere: a full disk; it is raised before the loop runs
            pass
        finally:
            numba.config.CACHE_DIR = before
    alone = numba.njit(nogil=True, **OPTIONS)(function)
    alone(*arguments)
    return alone  # type: ignore[no-any-return]


def _folders() -> tuple[Path, ...]:
    """Where compiled loops may be kept, best first: beside the code, then in the user's cache."""
    own = os.environ.get("XDG_CACHE_HOME") or os.path.join(os.path.expanduser("~"), ".cache")
    return Path(__file__).parent / "__pycache__", Path(own) / "shedwright"


def _swept(folder: Path) -> None:
    """Loops that an earlier code beside this one left are of no use to anybody; a user's cache serves several codes."""
    if folder == _folders()[0]:
        for old in folder.glob(f"compiled-*-{sys.implementation.cache_tag}"):
            if old.name != _name():
                shutil.rmtree(old, ignore_errors=True)


def _writable(folder: Path) -> bool:
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            return True
    except OSError:
        return False


@functools.cache
def _name() -> str:
    """Folder name for loops compiled from this very code."""
    text = b"".join(file.read_bytes() for file in sorted(Path(__file__).parent.glob("*.py")))
    return f"compiled-{hashlib.sha256(text).hexdigest()[:16]}-{sys.implementation.cache_tag}"
