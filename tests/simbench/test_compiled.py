"""Compiling kernels: only where the extra is there and wanted, never with an error, and never a stale one."""

import importlib.util
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from types import ModuleType

import pytest

from sweeprig.simbench import rotor
from sweeprig.simbench.compiled import SWITCHED_OFF_BY, Deferred, Kernel, available, compiled

needs_extra = pytest.mark.skipif(importlib.util.find_spec("numba") is None, reason="the extra `fast` is not installed")
START = (30.0, -4.0, -9.0, 0.1, -0.002)


@pytest.fixture
def wanted(monkeypatch: pytest.MonkeyPatch) -> Iterator[Callable[[str], None]]:
    """Sets the environment variable; what `available` remembers is forgotten before and after."""

    def want(value: str) -> None:
        monkeypatch.setenv(SWITCHED_OFF_BY, value)
        available.cache_clear()

    yield want
    available.cache_clear()


def module_of(path: Path, text: str) -> ModuleType:
    """A module of its own, as if it were of this package; imported from `path`."""
    path.write_text(text, encoding="utf-8")
    spec = importlib.util.spec_from_file_location("sweeprig.made_for_a_test", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_switched_off_gives_the_function_itself(wanted: Callable[[str], None]) -> None:
    """With the variable set nothing is compiled and nothing wrapped, also for work that would pay."""
    wanted("1")
    assert compiled(rotor.after) is rotor.after
    deferred = Deferred(rotor.after, 1)
    deferred.did(5)
    assert deferred.run is rotor.after
    assert not deferred.quick


def test_without_the_extra_gives_the_function_itself(
    wanted: Callable[[str], None], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Where the compiler is not installed the function stays what it is."""
    wanted("")
    monkeypatch.setattr(importlib.util, "find_spec", lambda _: None)
    assert compiled(rotor.after) is rotor.after


@needs_extra
def test_a_broken_extra_is_no_error(wanted: Callable[[str], None], monkeypatch: pytest.MonkeyPatch) -> None:
    """A compiler that is there but cannot be imported leaves the function as written."""
    wanted("0")
    monkeypatch.setitem(sys.modules, "numba", None)
    kernel = Kernel(rotor.after)
    assert kernel.ready.__code__ is rotor.after.__code__
    assert kernel(START, 0.02) == rotor.after(START, 0.02)


@needs_extra
def test_compiled_gives_the_same_and_takes_its_callees_along(wanted: Callable[[str], None], tmp_path: Path) -> None:
    """A kernel is compiled when first called, with the functions and constants that it names; to 1e-12 the same."""
    wanted("")
    module = module_of(
        tmp_path / "first.py",
        "import math\nHALF = 0.5\n"
        "def inner(x):\n    return math.expm1(HALF * x)\n"
        "def outer(x, y):\n    return inner(x) + inner(y), 3.0 * x\n",
    )
    kernel = compiled(module.outer)
    assert isinstance(kernel, Kernel)
    assert "ready" not in vars(kernel)
    assert kernel(0.3, -0.7) == pytest.approx(module.outer(0.3, -0.7), rel=1e-12)
    assert kernel.ready is not module.outer
    assert set(kernel.callees()) == {"inner"}
    assert kernel.constants() == {"HALF=0.5"}


@needs_extra
def test_a_changed_callee_in_another_file_is_compiled_anew(wanted: Callable[[str], None], tmp_path: Path) -> None:
    """What is kept on disk goes by the files of all that a kernel calls, not by its own file alone."""
    wanted("")
    inner = tmp_path / "inner.py"
    outer = "def outer(x):\n    return inner(x) + 1.0\n"

    def answer(text: str) -> tuple[float, str]:
        module = module_of(tmp_path / "outer.py", outer)
        module.inner = module_of(inner, text).inner  # type: ignore[attr-defined]
        kernel = Kernel(module.outer)
        return kernel(2.0), kernel.ready.__qualname__

    first, name = answer("def inner(x):\n    return 2.0 * x\n")
    again, same = answer("def inner(x):\n    return 2.0 * x\n")
    other, another = answer("def inner(x):\n    return 3.0 * x\n")
    assert (first, again, other) == (5.0, 5.0, 7.0)
    assert name == same != another


@needs_extra
def test_no_folder_for_the_cache_is_no_error(
    wanted: Callable[[str], None], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Where nothing can be kept on disk, beside the file or for the user, the function runs as written."""
    wanted("")
    (tmp_path / "__pycache__").write_text("a file where the folder should be", encoding="utf-8")
    for name in ("XDG_CACHE_HOME", "HOME", "LOCALAPPDATA"):
        monkeypatch.setenv(name, str(tmp_path / "__pycache__"))
    monkeypatch.setattr(sys, "dont_write_bytecode", True)
    module = module_of(tmp_path / "kernel.py", "def twice(x):\n    return 2.0 * x\n")
    kernel = Kernel(module.twice)
    assert kernel(4.0) == 8.0
    assert kernel.ready.__code__ is module.twice.__code__
    deferred = Deferred(module.twice, 1)
    deferred.hasten()
    assert (deferred.run(4.0), deferred.quick) == (8.0, False)


@needs_extra
def test_a_function_from_no_file_runs_as_written(wanted: Callable[[str], None]) -> None:
    """A source that cannot be read cannot be told from its next version, so nothing is kept of it."""
    wanted("")
    made: dict[str, Callable[[float], float]] = {"__name__": "sweeprig.nowhere"}  # type: ignore[dict-item]
    exec("def twice(x):\n    return 2.0 * x\n", made)
    kernel = Kernel(made["twice"])
    assert kernel.ready is made["twice"]


@needs_extra
def test_deferred_compiles_once_enough_was_asked(wanted: Callable[[str], None]) -> None:
    """As written up to the amount of work that pays, compiled from there on; at once if told so."""
    wanted("")
    deferred = Deferred(rotor.after, 100)
    deferred.did(99)
    assert deferred.run is rotor.after
    assert not deferred.quick
    deferred.did(1)
    assert deferred.quick
    assert deferred.run is not rotor.after
    assert deferred.run(START, 0.02) == pytest.approx(rotor.after(START, 0.02), rel=1e-12)
    hastened = Deferred(rotor.after, 10**9)
    hastened.hasten()
    assert hastened.quick


@needs_extra
def test_the_compiler_is_not_imported_before_it_is_needed() -> None:
    """Neither this room nor its kernels import the compiler by being imported: a short job would pay for it."""

    words = "import sys, sweeprig.simbench.plant, sweeprig.simbench.detailed; print('numba' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", words], check=True, capture_output=True, text=True)
    assert done.stdout.split() == ["False"]
