"""The kernel cache: nothing that is wrong with it may change an answer or raise."""

from __future__ import annotations

import ctypes
import os
import signal
import subprocess
import sys
import tempfile
import threading
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from oakum.kernels import compiling, store, tiers
from oakum.kernels.compiling import Kernel, typed
from oakum.kernels.machine import Code


@typed("intp(intp, intp)")
def multiply_add(a: int, b: int) -> int:
    return a * b + 7


def knows_the_answer(compiled: Callable[..., Any]) -> bool:
    return bool(compiled(5, 8) == 47)


def product_kernel(self_test: Callable[[Code], bool]) -> Kernel:
    return Kernel("test_compiling.multiply_add", self_test, "a product")


class Cache:
    """A cache folder of its own, and what `on_compile` was told."""

    def __init__(self, home: Path, told: list[str]) -> None:
        self.home = home
        self.told = told

    def use(self) -> None:
        """As a new process would: a fresh kernel, compiled or loaded, then called."""
        assert product_kernel(knows_the_answer)(6, 7) == 49

    def compilations(self) -> int:
        """How many `use` needs now."""
        before = len(self.told)
        self.use()
        return len(self.told) - before

    def file(self) -> Path:
        """Where it is kept."""
        (path,) = self.home.glob("kernels-*/*.multiply_add")
        return path


@pytest.fixture
def cache(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Cache:
    told: list[str] = []
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    monkeypatch.setattr(compiling, "on_compile", told.append)
    (tmp_path / "file").touch()
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path / "file"))  # no second choice
    return Cache(tmp_path / "oakum", told)


def test_compiled_once_and_announced(cache: Cache) -> None:
    assert cache.compilations() == 1
    assert cache.told == ["compiling a product for this CPU; later runs will find it ready"]
    assert cache.compilations() == 0
    assert cache.file().stat().st_mode & 0o777 == 0o600


def test_only_the_user_can_write_the_folder(cache: Cache) -> None:
    cache.use()
    for folder in (cache.home, *cache.home.iterdir()):
        assert folder.stat().st_mode & 0o077 == 0


@pytest.mark.parametrize("damage", ["cut", "empty", "flip", "gone"])
def test_a_damaged_file_is_replaced(cache: Cache, damage: str) -> None:
    cache.use()
    path = cache.file()
    content = path.read_bytes()
    middle = len(content) // 2
    if damage == "gone":
        path.unlink()
    else:
        flipped = content[:middle] + bytes([content[middle] ^ 4]) + content[middle + 1 :]
        path.write_bytes({"cut": content[:middle], "empty": b"", "flip": flipped}[damage])
    assert cache.compilations() == 1
    assert cache.compilations() == 0


@pytest.mark.parametrize("content", [b"rubbish", b"", b"[1, 2, 3]\n"])
def test_sealed_rubbish_is_replaced(cache: Cache, content: bytes) -> None:
    """A file that is as it was written, yet no kernel: loading raises, and that is all."""
    cache.use()
    store.save(cache.file().name, content)
    assert cache.compilations() == 1
    assert cache.compilations() == 0


def test_wrong_answers_from_the_cache_are_not_used(cache: Cache) -> None:
    """A self-test that fails on what the cache gave: compiled again."""
    cache.use()
    answers = iter([False, True])
    kernel = product_kernel(lambda compiled: next(answers))
    assert kernel(6, 7) == 49
    assert len(cache.told) == 2


def test_wrong_answers_throughout_end_the_run(cache: Cache) -> None:
    kernel = product_kernel(lambda compiled: False)
    with pytest.raises(RuntimeError, match=tiers.ENVIRONMENT_VARIABLE):
        kernel(6, 7)


def test_no_place_for_a_cache(cache: Cache, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """A cache folder that cannot be made (it would lie under a file) only costs the time to compile."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file"))
    assert store.cache_home() is None
    assert cache.compilations() == 1
    assert cache.compilations() == 1
    assert cache.told[-1] == "compiling a product for this CPU; it cannot be kept for later runs"


def test_second_choice_is_the_folder_for_temporary_files(
    cache: Cache, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file"))
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    home = store.cache_home()
    assert home is not None and home.parent.parent == tmp_path


@pytest.mark.parametrize("call", ["mkstemp", "replace"])
def test_full_disk(cache: Cache, monkeypatch: pytest.MonkeyPatch, call: str) -> None:
    def full(*arguments: Any, **keywords: Any) -> str:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(*(tempfile, "mkstemp") if call == "mkstemp" else (os, "replace"), full)
    assert cache.compilations() == 1
    assert cache.compilations() == 1
    assert not [path for path in cache.home.glob("kernels-*/*") if "multiply_add" in path.name]


@pytest.mark.parametrize("which", ["parent", "home"])
def test_folders_that_others_can_write_are_passed_over(cache: Cache, which: str) -> None:
    """What lies in a cache is run when it is loaded, so nobody else may have put it there."""
    cache.use()
    home = store.cache_home()
    assert home is not None
    (home if which == "home" else home.parent).chmod(0o777)
    assert store.cache_home() is None
    assert cache.compilations() == 1


@pytest.mark.skipif(os.geteuid() != 0, reason="only root can give a folder away")
def test_nothing_is_made_in_a_folder_of_somebody_else(cache: Cache) -> None:
    cache.home.mkdir(mode=0o700)
    os.chown(cache.home, 65534, 65534)
    assert store.cache_home() is None
    assert list(cache.home.iterdir()) == []


def test_links_are_passed_over(cache: Cache) -> None:
    home = store.cache_home()
    assert home is not None
    home.rename(home.parent / "elsewhere")
    home.symlink_to(home.parent / "elsewhere")
    assert store.cache_home() is None


def test_key_depends_on_the_target(monkeypatch: pytest.MonkeyPatch) -> None:
    key = store.cache_key.__wrapped__
    before = key()
    assert before == key()
    monkeypatch.setenv("NUMBA_CPU_FEATURES", "+sse2")
    assert key() != before


def test_old_folders_are_forgotten(cache: Cache) -> None:
    for name, age in (("kernels-old", store.KEPT_DAYS + 1), ("kernels-new", store.KEPT_DAYS - 1)):
        folder = cache.home / name
        folder.mkdir(parents=True, mode=0o700)
        cache.home.chmod(0o700)
        past = folder.stat().st_mtime - age * 86400
        os.utime(folder, (past, past))
    cache.use()
    assert not (cache.home / "kernels-old").exists()
    assert (cache.home / "kernels-new").exists()


def test_processes_at_the_same_time(cache: Cache) -> None:
    """Several processes that all find nothing in the cache: all right, and the next finds a kernel."""
    code = (
        "import numpy as np; from oakum.kernels.stripmap import StripMap; out = np.empty((1, 3), np.uint8); "
        "StripMap(np.full((1, 1), 3, np.uint8)).apply(np.array([[1, 2, 128]], np.uint8), out); print(*out[0])"
    )
    run = [
        subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, text=True) for _ in range(3)
    ]
    # 3 * 128 = x^8 + x^7 = 0x11D ^ 0x180 = 157 modulo the field polynomial
    assert [process.communicate()[0].split() for process in run] == [["3", "6", "157"]] * 3
    left = sorted(path.name for path in cache.home.glob("kernels-*/*"))
    assert len(left) == 2 and left[0].startswith("stripmap_kernels.map_") and left[1] == "target"


@typed("void(uint8[:, ::1], Array(uint8, 1, 'A', True), intp)")
def add_rows(out: NDArray[np.uint8], row: NDArray[np.uint8], times: int) -> None:
    for i in range(out.shape[0]):
        for j in range(out.shape[1]):
            out[i, j] += row[j] * times


def test_arrays_of_another_kind_do_not_reach_a_kernel(cache: Cache) -> None:
    kernel = Kernel("test_compiling.add_rows", lambda compiled: True, "a sum")
    out, row = np.ones((2, 3), np.uint8), np.arange(6, dtype=np.uint8)[::2]
    row.flags.writeable = False
    assert kernel(out, row, 3) is None
    assert out.tolist() == [[1, 7, 13]] * 2
    locked = out.copy()
    locked.flags.writeable = False
    for wrong in (out[0], out.astype(np.int8), out[:, :2], locked, out.tolist()):
        with pytest.raises(TypeError, match="array"):
            kernel(wrong, row, 3)
    with pytest.raises(ValueError, match="argument"):
        kernel(out, row)


@typed("void(intp, intp)")
def tell(a: int, b: int) -> None:
    if a < b:
        raise ValueError


def test_an_error_in_a_kernel_is_one_here(cache: Cache) -> None:
    kernel = Kernel("test_compiling.tell", lambda compiled: True, "nothing")
    kernel(2, 1)
    with pytest.raises(RuntimeError):
        kernel(1, 2)


def test_loading_imports_no_compiler(cache: Cache) -> None:
    code = (
        "import sys; from oakum.kernels.words import SPREAD; from oakum.kernels import tiers; "
        "tiers.current_tier(); SPREAD.prepare(); print('numba' in sys.modules)"
    )
    command = [sys.executable, "-c", code]
    imported = [subprocess.run(command, capture_output=True, check=True).stdout for _ in range(2)]
    assert imported == [b"True\n", b"False\n"]


def test_a_signal_is_not_lost_while_it_compiles(cache: Cache, monkeypatch: pytest.MonkeyPatch) -> None:
    """LLVM calls numba back, and what a signal's handler raised in such a call would be dropped by ctypes."""
    noticed = threading.Event()

    class Stopped(BaseException):
        pass

    def stop(*_: object) -> None:
        noticed.set()
        raise Stopped

    def called_back() -> None:
        os.kill(os.getpid(), signal.SIGUSR1)
        assert noticed.wait(10)

    def compile_(kernel: Kernel) -> bytes:
        ctypes.CFUNCTYPE(None)(called_back)()
        return through(kernel)

    through = Kernel.compile
    before = signal.signal(signal.SIGUSR1, stop)
    try:
        with monkeypatch.context() as patch:
            patch.setattr(Kernel, "compile", compile_)
            with pytest.raises(Stopped):
                cache.use()
    finally:
        signal.signal(signal.SIGUSR1, before)
    assert cache.compilations() == 1
