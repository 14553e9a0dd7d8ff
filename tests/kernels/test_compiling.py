"""The kernel cache: nothing that is wrong with it may change an answer or raise."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from oakum.kernels import compiling, tiers
from oakum.kernels.compiling import Kernel


def multiply_add(a: int, b: int) -> int:
    return a * b + 7


def knows_the_answer(compiled: Callable[..., Any]) -> bool:
    return bool(compiled(5, 8) == 47)


class Cache:
    """A cache folder of its own, and what `on_compile` was told."""

    def __init__(self, home: Path, told: list[str]) -> None:
        self.home = home
        self.told = told

    def use(self) -> None:
        """As a new process would: a fresh kernel, compiled or loaded, then called."""
        assert Kernel(multiply_add, "intp(intp, intp)", knows_the_answer, "a product")(6, 7) == 49

    def compilations(self) -> int:
        """How many `use` needs now."""
        before = len(self.told)
        self.use()
        return len(self.told) - before

    def files(self, pattern: str) -> list[Path]:
        return sorted(self.home.glob(f"kernels-*/*.multiply_add/**/{pattern}"))


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
    assert cache.files("*.nbc") and cache.files("*.nbi")


def test_only_the_user_can_write_the_folder(cache: Cache) -> None:
    cache.use()
    for folder in (cache.home, *cache.home.iterdir()):
        assert folder.stat().st_mode & 0o077 == 0


@pytest.mark.parametrize("pattern", ["*.nbc", "*.nbi", "seal"])
@pytest.mark.parametrize("damage", ["cut", "empty", "flip", "gone"])
def test_damaged_files_are_replaced(cache: Cache, pattern: str, damage: str) -> None:
    cache.use()
    (path,) = cache.files(pattern)
    content = path.read_bytes()
    middle = len(content) // 2
    if damage == "gone":
        path.unlink()
    else:
        flipped = content[:middle] + bytes([content[middle] ^ 4]) + content[middle + 1 :]
        path.write_bytes({"cut": content[:middle], "empty": b"", "flip": flipped}[damage])
    assert cache.compilations() == 1
    assert cache.compilations() == 0


def test_sealed_rubbish_is_replaced(cache: Cache) -> None:
    """Files that are as they were written, yet no kernel: loading raises, and that is all."""
    cache.use()
    (path,) = cache.files("*.nbc")
    path.write_bytes(b"rubbish")
    (seal,) = cache.files("seal")
    seal.write_text(compiling._digests(seal.parent))
    assert cache.compilations() == 1
    assert cache.compilations() == 1  # the folder was emptied, and is filled only now
    assert cache.compilations() == 0


def test_wrong_answers_from_the_cache_are_not_used(cache: Cache) -> None:
    """A self-test that fails on what the cache gave: compiled again, past the cache."""
    cache.use()
    answers = iter([False, True])
    kernel = Kernel(multiply_add, "intp(intp, intp)", lambda compiled: next(answers), "a product")
    assert kernel(6, 7) == 49
    assert len(cache.told) == 2


def test_wrong_answers_throughout_end_the_run(cache: Cache) -> None:
    kernel = Kernel(multiply_add, "intp(intp, intp)", lambda compiled: False, "a product")
    with pytest.raises(RuntimeError, match=tiers.ENVIRONMENT_VARIABLE):
        kernel(6, 7)


def test_no_place_for_a_cache(cache: Cache, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """A cache folder that cannot be made (it would lie under a file) only costs the time to compile."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file"))
    assert compiling.cache_home() is None
    assert cache.compilations() == 1
    assert cache.compilations() == 1
    assert cache.told[-1] == "compiling a product for this CPU; it cannot be kept for later runs"


def test_second_choice_is_the_folder_for_temporary_files(
    cache: Cache, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file"))
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    home = compiling.cache_home()
    assert home is not None and home.parent.parent == tmp_path


def test_full_disk(cache: Cache, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(*arguments: Any, **keywords: Any) -> str:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(tempfile, "mkdtemp", full)
    assert cache.compilations() == 1


@pytest.mark.parametrize("which", ["parent", "home"])
def test_folders_that_others_can_write_are_passed_over(cache: Cache, which: str) -> None:
    """What lies in a cache is run when it is loaded, so nobody else may have put it there."""
    cache.use()
    home = compiling.cache_home()
    assert home is not None
    (home if which == "home" else home.parent).chmod(0o777)
    assert compiling.cache_home() is None
    assert cache.compilations() == 1


@pytest.mark.skipif(os.geteuid() != 0, reason="only root can give a folder away")
def test_nothing_is_made_in_a_folder_of_somebody_else(cache: Cache) -> None:
    cache.home.mkdir(mode=0o700)
    os.chown(cache.home, 65534, 65534)
    assert compiling.cache_home() is None
    assert list(cache.home.iterdir()) == []


def test_links_are_passed_over(cache: Cache) -> None:
    home = compiling.cache_home()
    assert home is not None
    home.rename(home.parent / "elsewhere")
    home.symlink_to(home.parent / "elsewhere")
    assert compiling.cache_home() is None


def test_key_depends_on_the_target(monkeypatch: pytest.MonkeyPatch) -> None:
    key = compiling.cache_key.__wrapped__
    before = key()
    assert before == key()
    monkeypatch.setattr(tiers, "target", lambda: ("x86_64-unknown-linux-gnu", "generic", "+sse2"))
    assert key() != before


def test_old_folders_are_forgotten(cache: Cache) -> None:
    for name, age in (("kernels-old", compiling.KEPT_DAYS + 1), ("kernels-new", compiling.KEPT_DAYS - 1)):
        folder = cache.home / name
        folder.mkdir(parents=True, mode=0o700)
        cache.home.chmod(0o700)
        past = folder.stat().st_mtime - age * 86400
        os.utime(folder, (past, past))
    assert compiling.cache_home() is not None
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
    left = [path.name for path in cache.home.glob("kernels-*/*")]
    assert len(left) == 1 and left[0].startswith("stripmap_kernels.map_")
