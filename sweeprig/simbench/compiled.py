"""Compiling the simulated bench's kernels where the optional extra `fast` is installed; without it they run as written.

How a kernel is made quick lives here, nothing of what it computes. A kernel is a plain function of floats, integers,
named tuples and arrays that gives the same either way.
"""

from __future__ import annotations

import functools
import hashlib
import importlib.util
import math
import os
from collections.abc import Callable
from pathlib import Path
from types import FunctionType
from typing import Any, Generic, ParamSpec, TypeVar, cast

P = ParamSpec("P")
R = TypeVar("R")

SWITCHED_OFF_BY = "SWEEPRIG_PLAIN"
"""Environment variable: set to anything but "" and "0" before the start, and nothing is compiled."""


def compiled(function: Callable[P, R]) -> Callable[P, R]:
    """The function, to be compiled at its first call (kept on disk from then on); without the extra, the function.

    Functions of this package that it calls, by global names of its module, are compiled with it. A kernel must be given
    the same types at every call: each new combination is compiled anew. Plain tuples and arrays are handed over in a
    fraction of a microsecond; named tuples take ten.
    """
    return _kernel(cast(FunctionType, function)) if available() else function


@functools.cache
def available() -> bool:
    """The extra is installed and not switched off. Does not import it: that takes longer than a short job's physics."""
    return os.environ.get(SWITCHED_OFF_BY, "") in ("", "0") and importlib.util.find_spec("numba") is not None


class Kernel(Generic[P, R]):
    """A function that is compiled when it is first called, or when its `ready` is asked for.

    function   as it was written
    """

    def __init__(self, function: Callable[P, R]) -> None:
        self.function = cast(FunctionType, function)
        functools.update_wrapper(self, function)

    def __call__(self, *args: P.args, **kwargs: P.kwargs) -> R:
        return self.ready(*args, **kwargs)

    @functools.cached_property
    def ready(self) -> Callable[P, R]:
        """What to call in an inner loop: the compiled function itself; as written where its cache cannot be kept."""
        try:
            digest = self._digest()
        except OSError:  # a source that lies in no file cannot be told from its next version
            return cast(Callable[P, R], self.function)
        callees = {name: kernel.ready for name, kernel in self.callees().items()}
        made = self.function
        bound = FunctionType(
            made.__code__, made.__globals__ | callees, made.__name__, made.__defaults__, made.__closure__
        )
        bound.__module__, bound.__kwdefaults__ = made.__module__, made.__kwdefaults__
        # the compiler's own look at what is stale knows the kernel's file, but not those of its callees
        bound.__qualname__ = f"{made.__qualname__}_{digest}"
        return _jit(bound)

    def callees(self) -> dict[str, Kernel[..., Any]]:
        """The kernels that it calls, by the names it calls them."""
        known = self.function.__globals__
        found = {name: known[name] for name in self.function.__code__.co_names if name in known}
        kernels = {name: _kernel(value) for name, value in found.items() if _is_ours(value)}
        return kernels | {name: value for name, value in found.items() if isinstance(value, Kernel)}

    def sources(self) -> set[Path]:
        """The files of it and of all that it calls."""
        own = {Path(self.function.__code__.co_filename)}
        return own.union(*(kernel.sources() for kernel in self.callees().values()))

    def constants(self) -> set[str]:
        """The numbers that it and all that it calls know by name, wherever they are from."""
        made = self.function
        values = {name: made.__globals__.get(name) for name in made.__code__.co_names}
        own = {f"{name}={value!r}" for name, value in values.items() if isinstance(value, int | float | tuple)}
        return own.union(*(kernel.constants() for kernel in self.callees().values()))

    def _digest(self) -> str:
        text = [path.read_bytes() for path in sorted(self.sources())]
        text += [constant.encode() for constant in sorted(self.constants())]
        return hashlib.sha256(b"\n".join(text)).hexdigest()[:12]


class Deferred(Generic[P, R]):
    """A function that runs as written until so much has been asked of it that compiling pays: short jobs never wait.

    run        the function to call now; `quick` tells whether it is the compiled one
    asked      how much was asked of it so far, in units of its own
    """

    def __init__(self, function: Callable[P, R], worth: int) -> None:
        self.run, self.quick, self.asked = function, False, 0
        self._kernel = compiled(function)
        self._worth: float = worth

    def did(self, units: int) -> None:
        """So much more was asked of it."""
        self.asked += units
        if self.asked >= self._worth:
            self.hasten()

    def hasten(self) -> None:
        """Compile now, if it can be."""
        self._worth = math.inf
        if isinstance(self._kernel, Kernel):
            self.run = self._kernel.ready
            self.quick = not isinstance(self.run, FunctionType)


@functools.cache
def _kernel(function: FunctionType) -> Kernel[..., Any]:
    return Kernel(function)


def _is_ours(value: object) -> bool:
    return isinstance(value, FunctionType) and value.__module__.partition(".")[0] == __name__.partition(".")[0]


def _jit(function: Callable[P, R]) -> Callable[P, R]:
    try:
        from numba import njit
    except ImportError:  # there, but not for this numpy or machine
        return function
    try:
        return cast(Callable[P, R], njit(cache=True)(function))
    except RuntimeError:  # no folder for the cache: compiling in every process would cost more than it brings
        return function
