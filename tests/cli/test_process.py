"""The installed command as a process: start-up, signals, closed and full outputs."""

import os
import signal
import subprocess
import sys
import textwrap
from importlib import metadata
from pathlib import Path

import pytest

OAKUM = [sys.executable, "-m", "oakum"]
HEAVY = ("numpy", "numba", "llvmlite", "galois", "scipy", "rich", "xxhash", "pydantic", "matplotlib")


def loaded_after(arguments: list[str]) -> set[str]:
    """Which heavy packages are loaded when the command has run."""
    program = f"""
        import sys
        from oakum.cli.running import run
        run({arguments!r})
        print(*[name for name in {HEAVY!r} if name in sys.modules], file=sys.stderr)
    """
    done = subprocess.run(
        [sys.executable, "-c", textwrap.dedent(program)], capture_output=True, text=True, check=True
    )
    return set(done.stderr.split())


def test_help_and_version_load_nothing_heavy() -> None:
    assert loaded_after(["--help"]) == set()
    assert loaded_after(["verify", "--help"]) == set()
    assert loaded_after(["--version"]) == set()


def test_a_verify_that_finds_no_damage_loads_little(tmp_path: Path) -> None:
    (tmp_path / "a.bin").write_bytes(bytes(range(256)) * 1000)
    subprocess.run([*OAKUM, "protect", "--quiet", str(tmp_path / "a.bin")], check=True)
    assert loaded_after(["verify", "--quiet", str(tmp_path / "a.bin")]) == {"numpy", "xxhash"}


def test_version() -> None:
    done = subprocess.run([*OAKUM, "--version"], capture_output=True, text=True, check=True)
    assert done.stdout == f"oakum {metadata.version('oakum')}\n"


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs /dev/full")
def test_a_full_disk_under_the_report_is_said() -> None:
    with Path("/dev/full").open("w") as full:
        done = subprocess.run([*OAKUM, "--help"], stdout=full, stderr=subprocess.PIPE, text=True)
    assert done.returncode == 30
    assert done.stderr == "oakum: reading or writing failed: no space left on device\n"


def test_a_reader_that_has_gone_ends_it_quietly() -> None:
    read_end, write_end = os.pipe()
    os.close(read_end)
    done = subprocess.run([*OAKUM, "--help"], stdout=write_end, stderr=subprocess.PIPE, text=True)
    os.close(write_end)
    assert done.returncode == 128 + signal.SIGPIPE
    assert done.stderr == ""


# Stands in for a job: makes a file, says so, works, and tidies up whatever ends it.
SLOW_JOB = """
    import importlib, pathlib, sys, time
    from oakum.cli import main

    def job(target, **options):
        part = pathlib.Path(sys.argv[2] + ".part")
        part.touch()
        try:
            print("working", flush=True)
            time.sleep(30)
        finally:
            part.unlink()

    importlib.import_module("oakum.jobs.verify").verify = job
    main()
"""


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_signals_end_it_and_leave_nothing(tmp_path: Path, number: signal.Signals) -> None:
    process = subprocess.Popen(
        [sys.executable, "-c", textwrap.dedent(SLOW_JOB), "verify", str(tmp_path / "x")],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        preexec_fn=lambda: signal.signal(number, signal.SIG_DFL),  # The tests may run under nohup.
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "working\n"
    process.send_signal(number)
    _, errors = process.communicate(timeout=20)
    assert process.returncode == 128 + number
    assert errors == ""
    assert list(tmp_path.iterdir()) == []


def test_an_ignored_signal_stays_ignored(tmp_path: Path) -> None:
    """As under nohup: what the parent ignores is none of our business."""
    program = textwrap.dedent(SLOW_JOB).replace("time.sleep(30)", "time.sleep(1)")
    process = subprocess.Popen(
        [sys.executable, "-c", program, "verify", str(tmp_path / "x"), "--quiet"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        preexec_fn=lambda: signal.signal(signal.SIGHUP, signal.SIG_IGN),
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "working\n"
    process.send_signal(signal.SIGHUP)
    process.communicate(timeout=20)
    assert process.returncode == 1  # the stand-in returns no result, so it went on to its end


def test_a_closed_standard_output_is_borne() -> None:
    done = subprocess.run(
        ["sh", "-c", 'exec "$@" >&-', "sh", *OAKUM, "verify", "/no/such/file"], capture_output=True, text=True
    )
    assert done.returncode == 30
    assert done.stderr.startswith("oakum: ") and done.stderr.count("\n") == 1
