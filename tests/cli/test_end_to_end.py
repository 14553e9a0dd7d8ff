"""The whole way through the command line: protect, damage, verify, repair, describe."""

import json
import os
import re
import shutil
import subprocess
import sys
import textwrap
from pathlib import Path

import numpy as np
import pytest

from oakum.report.units import size

ROOT = Path(__file__).parents[2]
OAKUM = [sys.executable, "-m", "oakum"]


def oakum(*arguments: str, cwd: Path, stdin: bytes | None = None) -> subprocess.CompletedProcess[bytes]:
    return subprocess.run([*OAKUM, *arguments], cwd=cwd, input=stdin, capture_output=True)


@pytest.fixture(scope="module")
def original(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a protected folder in it."""
    folder = tmp_path_factory.mktemp("original")
    rng = np.random.default_rng(41)
    (folder / "plates" / "deep").mkdir(parents=True)
    for name, nbytes in {"a.tif": 90_000, "deep/b.tif": 40_000, "empty": 0, "line\nbreak": 7}.items():
        (folder / "plates" / name).write_bytes(rng.bytes(nbytes))
    oakum("protect", "plates", "--output", "unused.oakum", cwd=folder)  # What must be compiled now is.
    (folder / "unused.oakum").unlink()
    done = oakum("protect", "plates", cwd=folder)
    assert (done.returncode, done.stderr) == (0, b"")
    assert (folder / "plates.oakum").is_file()
    return folder


@pytest.fixture
def shelf(original: Path, tmp_path: Path) -> Path:
    """A copy of it to damage."""
    return Path(shutil.copytree(original, tmp_path / "shelf"))


def flip(path: Path, *bits: int) -> None:
    content = bytearray(path.read_bytes())
    for bit in bits:
        content[bit // 8] ^= 1 << bit % 8
    path.write_bytes(content)


def test_damage_is_counted_and_put_right(shelf: Path) -> None:
    plates = shelf / "plates"
    before = {p.relative_to(plates): p.read_bytes() for p in plates.rglob("*") if p.is_file()}
    flip(plates / "a.tif", 3, 70_001, 70_002, 400_000)
    (plates / "line\nbreak").unlink()

    found = oakum("verify", "plates", "--json", cwd=shelf)
    document = json.loads(found.stdout)
    assert found.returncode == 10
    assert document["outcome"] == "correctable"
    assert document["totals"]["bits_flipped"] == 4
    assert document["totals"]["bytes_erased"] == 7
    states = {member["path"]: member["state"] for member in document["members"]}
    assert states["plates/a.tif"] == "altered"
    assert states["plates/line\nbreak"] == "absent"
    assert states["plates/deep/b.tif"] == "intact"

    assert oakum("repair", "plates", "--output", "mended", "--quiet", cwd=shelf).returncode == 0
    after = {p.relative_to(shelf / "mended/plates"): p for p in (shelf / "mended").rglob("*") if p.is_file()}
    assert {name: path.read_bytes() for name, path in after.items()} == before
    flip(plates / "a.tif", 3, 70_001, 70_002, 400_000)  # the damaged file itself was left as it was
    assert (plates / "a.tif").read_bytes() == before[Path("a.tif")]


def test_what_is_beyond_the_parity_ends_with_20_and_writes_nothing(shelf: Path) -> None:
    rng = np.random.default_rng(42)
    (shelf / "plates" / "a.tif").write_bytes(rng.bytes(90_000))
    assert oakum("verify", "plates", cwd=shelf).returncode == 20
    before = sorted(shelf.rglob("*"))
    assert oakum("repair", "plates", cwd=shelf).returncode == 20
    assert sorted(shelf.rglob("*")) == before


def test_what_cannot_be_checked_ends_with_30(shelf: Path) -> None:
    (shelf / "plain.txt").write_text("no sidecar")
    (shelf / "odd.oakum").write_bytes(bytes(5_000))
    for arguments in (
        ["verify", "plain.txt"],
        ["verify", "gone"],
        ["repair", "gone"],
        ["describe", "odd.oakum"],
    ):
        done = oakum(*arguments, cwd=shelf)
        assert done.returncode == 30, arguments
        assert done.stdout == b""
        assert done.stderr.startswith(b"oakum: ") and done.stderr.count(b"\n") == 1


@pytest.mark.parametrize(
    "arguments",
    [
        "plates",  # its sidecar exists
        "plates --output other.oakum --code none-such",
        "plates --output other.oakum --depth 0",
        "plates --output plates/inside.oakum",
        "plates plates.oakum",
    ],
)
def test_wrong_usage_leaves_everything_as_it_was(shelf: Path, arguments: str) -> None:
    before = {p: p.read_bytes() for p in shelf.rglob("*") if p.is_file()}
    done = oakum("protect", *arguments.split(), cwd=shelf)
    assert done.returncode == 2
    assert done.stderr.startswith(b"oakum: ") and done.stderr.count(b"\n") == 1
    assert {p: p.read_bytes() for p in shelf.rglob("*") if p.is_file()} == before


def test_a_pipe_and_a_file_for_its_sidecar_are_the_same(tmp_path: Path) -> None:
    content = np.random.default_rng(43).bytes(300_000)
    to_file = oakum("protect", "-", "--name", "x.bin", cwd=tmp_path, stdin=content)
    to_stdout = oakum("protect", "-", "--name", "x.bin", "--output", "-", cwd=tmp_path, stdin=content)
    assert (to_file.returncode, to_stdout.returncode) == (0, 0)
    assert (tmp_path / "x.bin.oakum").read_bytes() == to_stdout.stdout
    (tmp_path / "x.bin").write_bytes(content)
    assert oakum("verify", "x.bin", cwd=tmp_path).returncode == 0


SIZES = re.findall(
    r"^(\d+) (B|KiB|MiB)\|([0-9.]+ k?B)\|", (ROOT / "man/oakum-protect.1").read_text(), re.MULTILINE
)


@pytest.mark.parametrize(("number", "unit", "sidecar"), SIZES)
def test_the_manual_tells_the_size_of_a_sidecar(tmp_path: Path, number: str, unit: str, sidecar: str) -> None:
    (tmp_path / "f").write_bytes(bytes(int(number) * {"B": 1, "KiB": 1 << 10, "MiB": 1 << 20}[unit]))
    assert oakum("protect", "f", "--quiet", cwd=tmp_path).returncode == 0
    assert size((tmp_path / "f.oakum").stat().st_size) == sidecar


def test_the_table_of_sizes_was_read() -> None:
    assert len(SIZES) == 4


@pytest.mark.skipif(shutil.which("sha256sum") is None, reason="needs sha256sum")
def test_sha256sum_reads_the_digests(shelf: Path) -> None:
    lines = oakum("describe", "plates.oakum", "--digests", cwd=shelf).stdout
    assert lines.count(b"\n") == 4
    subprocess.run(["sha256sum", "--check", "--strict", "--quiet"], input=lines, cwd=shelf, check=True)


@pytest.mark.parametrize("arguments", [["describe", "plates.oakum"], ["verify", "plates"]])
def test_nothing_is_compiled_where_nothing_is_damaged(shelf: Path, arguments: list[str]) -> None:
    program = f"""
        import sys
        from oakum.cli.running import run
        assert run({arguments!r}) == 0
        print(*[name for name in ("numba", "llvmlite", "galois") if name in sys.modules], file=sys.stderr)
    """
    done = subprocess.run(
        [sys.executable, "-c", textwrap.dedent(program)],
        cwd=shelf,
        capture_output=True,
        text=True,
        check=True,
    )
    assert done.stderr.split() == []


def test_a_full_disk_under_the_report_is_not_a_verdict(shelf: Path) -> None:
    if not os.path.exists("/dev/full"):
        pytest.skip("needs /dev/full")
    with Path("/dev/full").open("w") as full:
        done = subprocess.run([*OAKUM, "verify", "plates"], cwd=shelf, stdout=full, stderr=subprocess.PIPE)
    assert done.returncode == 30
    assert b"could not be written to standard output" in done.stderr
