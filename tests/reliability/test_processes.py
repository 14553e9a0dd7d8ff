"""Whole processes: no room, signals in mid-run, two at once, a reader that goes away."""

from __future__ import annotations

import os
import resource
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from commands import CASES, Case, Protect, ProtectAgain, Repair, Verify
from support import content, plant, rewrite, snapshot, with_flips

from oakum import CannotCheck, OakumError, protect, repair, roll_back
from oakum.files import Lock, NewFile

OAKUM = [sys.executable, "-m", "oakum"]


# -- no room --------------------------------------------------------------------------------------


@pytest.mark.parametrize("case", [c for c in CASES if c is not Verify], ids=lambda c: c.__name__)
def test_files_may_not_grow(tmp_path: Path, long: bool, case: type[Case]) -> None:
    """RLIMIT_FSIZE in steps of 4 KiB: the command ends as one that could not, or it succeeds."""
    statuses = set()
    for limit in range(0, 128 << 10, (4 << 10) if long else (16 << 10)):
        folder = tmp_path / "run"
        this = case(folder)
        this.prepare()
        before = snapshot(folder)
        child = os.fork()
        if child == 0:
            status = 1
            try:
                resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))
                this.run()
                status = 0
            except OakumError as error:
                status = error.status
            finally:
                os._exit(status)
        status = os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])
        assert status in (0, 30), limit
        statuses.add(status)
        this.sidecar = folder / "set.oakum"
        this.check(before, status == 0)
        shutil.rmtree(folder)
    assert statuses == {0, 30}


# -- signals --------------------------------------------------------------------------------------


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
@pytest.mark.parametrize("command", ["protect", "repair", "in-place"])
def test_signals_in_mid_run(tmp_path: Path, command: str, number: signal.Signals) -> None:
    """Gone with 128 + its number, nothing on standard error, no temporary file, everything as it was."""
    data = content(24 << 20)
    plant(tmp_path, {"f": data})
    if command != "protect":
        protect([tmp_path / "f"])
        rewrite(tmp_path / "f", with_flips(data, 20_000))
    before = snapshot(tmp_path)
    part = {"protect": "f.oakum", "repair": "f.mended", "in-place": "f.oakum.journal"}[command]
    arguments = {"protect": ["protect"], "repair": ["repair"], "in-place": ["repair", "--in-place"]}[command]
    process = subprocess.Popen(
        [*OAKUM, *arguments, "f", "--quiet", "--jobs", "2"],
        cwd=tmp_path,
        stderr=subprocess.PIPE,
        preexec_fn=lambda: signal.signal(number, signal.SIG_DFL),  # The tests may run under nohup.
    )
    while not (tmp_path / f".{part}.oakum-part").exists() and process.poll() is None:
        time.sleep(0.002)
    process.send_signal(number)
    _, errors = process.communicate(timeout=30)
    assert (process.returncode, errors) == (128 + number, b"")
    assert snapshot(tmp_path) == before


def test_a_reader_that_goes_away(tmp_path: Path) -> None:
    plant(tmp_path, {"f": content(1000)})
    protect([tmp_path / "f"])
    read_end, write_end = os.pipe()
    os.close(read_end)
    done = subprocess.run([*OAKUM, "verify", "f"], cwd=tmp_path, stdout=write_end, stderr=subprocess.PIPE)
    os.close(write_end)
    assert (done.returncode, done.stderr) == (128 + signal.SIGPIPE, b"")


# -- two at once ----------------------------------------------------------------------------------


def test_a_second_repair_is_refused(tmp_path: Path) -> None:
    """Another process holds the sidecar's lock: refused, also after descriptors of the file were closed."""
    plant(tmp_path, {"f": content(100_000)})
    sidecar = protect([tmp_path / "f"]).sidecar
    rewrite(tmp_path / "f", with_flips(content(100_000), 5))
    before = snapshot(tmp_path)
    program = (
        "import sys; from pathlib import Path; from oakum.files import Lock\n"
        "lock = Lock(Path(sys.argv[1])); open(sys.argv[1]).close()\n"
        "print('locked', flush=True); sys.stdin.read()"
    )
    other = subprocess.Popen(
        [sys.executable, "-c", program, str(sidecar)], stdin=subprocess.PIPE, stdout=subprocess.PIPE
    )
    assert other.stdout is not None and other.stdout.readline() == b"locked\n"
    for job in (
        lambda: repair(tmp_path / "f"),
        lambda: repair(tmp_path / "f", in_place=True),
        lambda: repair(tmp_path / "f", output=tmp_path / "out"),
        lambda: roll_back(tmp_path / "f"),
    ):
        with pytest.raises(CannotCheck, match="another run is at work"):
            job()
    assert snapshot(tmp_path) == before
    other.communicate()
    repair(tmp_path / "f")
    assert (tmp_path / "f.mended").read_bytes() == content(100_000)


def test_repairs_race(tmp_path: Path) -> None:
    """Of eight repairs in place started together at least one does it, and none does harm."""
    data = content(200_000)
    plant(tmp_path, {"f": data})
    protect([tmp_path / "f"])
    rewrite(tmp_path / "f", with_flips(data, 50))
    command = [*OAKUM, "repair", "f", "--in-place", "--quiet"]
    racers = [subprocess.Popen(command, cwd=tmp_path, stderr=subprocess.DEVNULL) for _ in range(8)]
    statuses = [racer.wait(timeout=60) for racer in racers]
    assert 0 in statuses and set(statuses) <= {0, 30}
    assert (tmp_path / "f").read_bytes() == data
    roll_back(tmp_path / "f")
    assert (tmp_path / "f").read_bytes() == with_flips(data, 50)


def test_a_lock_follows_the_name(tmp_path: Path) -> None:
    """A file that is replaced while it is locked is locked anew under its name."""
    path = tmp_path / "f"
    path.write_bytes(b"old")
    with Lock(path) as lock:
        with NewFile(path, overwrite=True) as file:
            file.write(0, b"new")
            file.commit(3)
        with Lock(path), pytest.raises(CannotCheck, match="another run"):
            lock.renew()
    with Lock(path), pytest.raises(CannotCheck, match="another run"):
        Lock(path)


@pytest.mark.parametrize("case", [Protect, ProtectAgain, Repair], ids=lambda c: c.__name__)
def test_a_source_that_changes(tmp_path: Path, case: type[Case]) -> None:
    """A member changes while it is read: said, and nothing wrong is written."""

    class Edit:
        done = False

        def phase(self, name: str, total: int | None) -> None:
            if name in ("bringing the sidecar to the medium", "writing") and case is Repair:
                self.advance(0)

        def advance(self, nbytes: int) -> None:
            if not self.done:
                self.done = True
                (tmp_path / "set/a").write_bytes(content(70_000, 77))

        def note(self, text: str) -> None:
            pass

    this = case(tmp_path)
    this.prepare()
    before = snapshot(tmp_path)
    if case is Repair:
        result = repair(tmp_path / "set", progress=Edit())
        assert result.outcome.value == "uncorrectable"
        assert snapshot(tmp_path).keys() == before.keys()
        return
    with pytest.raises(CannotCheck, match="changed while it was read"):
        protect([tmp_path / "set"], overwrite=case is ProtectAgain, progress=Edit())
    assert {n: d for n, d in snapshot(tmp_path).items() if n != "set/a"} == {
        n: d for n, d in before.items() if n != "set/a"
    }
