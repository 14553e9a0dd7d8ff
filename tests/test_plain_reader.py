"""The slow reader against the program: sets made by one, damaged, and read by both with equal results."""

import ast
import hashlib
import os
import random
import re
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from oakum import plain_reader, protect, protect_pipe, repair
from oakum.algebra.naming import NAMED, resolve_code
from oakum.errors import FormatError
from oakum.geometry import LARGE, SMALL, Geometry, whole_depth
from oakum.results import MemberState
from oakum.sidecar.layout import MANY, Layout

READER = Path(plain_reader.__file__)


# -- making and damaging sets ----------------------------------------------------------------------------


def make_folder(base: Path, rng: random.Random) -> Path:
    """A small set of every kind of member, under 64 KiB, so that cells have no digests."""
    folder = base / "ledger"
    (folder / "empty").mkdir(parents=True)
    for number, size in enumerate((5000, 0, 1, 20_000, 777)):
        (folder / f"page {number}.txt").write_bytes(rng.randbytes(size))
    (folder / os.fsdecode(b"\xff\x1b odd")).write_bytes(b"a name that is not UTF-8")
    (folder / "link").symlink_to("page 0.txt")
    os.chmod(folder / "page 3.txt", 0o640)
    os.utime(folder / "page 3.txt", ns=(1_700_000_000_123_456_789,) * 2)
    return folder


def make_file(base: Path, size: int, rng: random.Random) -> Path:
    path = base / "reel.tar"
    path.write_bytes(rng.randbytes(size))
    return path


def flip(path: Path, count: int, rng: random.Random, start: int = 0) -> None:
    """Flip `count` bits anywhere from byte `start` on."""
    data = bytearray(path.read_bytes())
    for place in rng.sample(range(8 * start, 8 * len(data)), count):
        data[place // 8] ^= 1 << place % 8
    path.write_bytes(data)


def overwrite(path: Path, start: int, length: int, rng: random.Random) -> None:
    data = bytearray(path.read_bytes())
    data[start : start + length] = rng.randbytes(length)
    path.write_bytes(data)


def tree(folder: Path) -> dict[str, tuple[str, int, int]]:
    """Content, permission bits and time of everything below a folder but sidecars."""
    found = {}
    for path in sorted(folder.rglob("*")):
        status = path.lstat()
        if path.is_symlink():
            found[str(path.relative_to(folder))] = (os.readlink(path), 0, 0)
        elif path.suffix != ".oakum":
            content = hashlib.sha256(path.read_bytes()).hexdigest() if path.is_file() else ""
            found[str(path.relative_to(folder))] = (content, status.st_mode, status.st_mtime_ns)
    return found


def plain(sidecar: Path, output: Path) -> tuple[int, dict[str, tuple[str, int, int]]]:
    status = plain_reader.main([str(sidecar), "--output", str(output)])
    return status, tree(output)


def assert_both_restore(sidecar: Path, tmp_path: Path, right: dict[str, tuple[str, int, int]]) -> None:
    """Both give back the set as it was."""
    assert plain(sidecar, tmp_path / "slow") == (0, right)
    (tmp_path / "fast").mkdir()
    repair(sidecar, output=tmp_path / "fast")
    assert tree(tmp_path / "fast") == right


# -- what it is made of ----------------------------------------------------------------------------------


def test_it_imports_only_the_standard_library() -> None:
    modules = set()
    for node in ast.walk(ast.parse(READER.read_text())):
        if isinstance(node, ast.Import):
            modules |= {alias.name.partition(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0
            modules.add(str(node.module).partition(".")[0])
    assert {"hashlib", "struct"} <= modules <= set(sys.stdlib_module_names)


def test_it_runs_alone(tmp_path: Path) -> None:
    """Copied beside a sidecar, without the package, site packages or the environment."""
    rng = random.Random(1)
    folder = make_folder(tmp_path, rng)
    protect([folder])
    flip(folder / "page 3.txt", 30, rng)
    copy = shutil.copy(READER, tmp_path)
    command = [sys.executable, "-I", "-S", copy, str(tmp_path / "ledger.oakum")]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (10, "")
    assert "altered ledger/page 3.txt" in done.stdout
    assert "intact  ledger/\\xff\\x1b odd" in done.stdout


def test_xxh3_vectors() -> None:
    """xxHash's own sanity check (seen, computed); its other lengths against the library."""
    import xxhash

    generator, buffer = 2654435761, bytearray()
    for _ in range(2367):
        buffer.append(generator >> 56)
        generator = generator * 11400714785074694797 % 2**64
    published = {
        0: 0x2D06800538D394C2,
        1: 0xC44BDFF4074EECDB,
        403: 0xCDEB804D65C6DEA4,
        2367: 0xCB37AEB9E5D361ED,
    }
    for length, digest in published.items():
        assert plain_reader.xxh3(bytes(buffer[:length])) == digest
    for length in (*range(300), 1023, 1024, 1025, 2048):
        data = bytes(buffer[:length])
        assert plain_reader.xxh3(data) == xxhash.xxh3_64_intdigest(data)


@pytest.mark.parametrize(
    ("n", "k", "polynomial", "first", "spacing"),
    [(255, 223, 0x11D, 0, 1), (240, 120, 0x11D, 0, 1), (255, 223, 0x187, 112, 11), (30, 20, 0x12D, 1, 1)],
)
def test_reed_solomon_up_to_capacity(n: int, k: int, polynomial: int, first: int, spacing: int) -> None:
    """Any s erasures and e errors with 2e + s <= r come back; one error more never gives the codeword."""
    from oakum.algebra.outer import OuterCode

    rng = random.Random(2)
    code = plain_reader.ReedSolomon(n, k, polynomial, first, spacing)
    data = rng.randbytes(k)
    parity = OuterCode(n, k, polynomial, first, spacing).encode(list(data)).tobytes()
    codeword = data + parity
    for s in (0, 1, code.r // 2, code.r - 1, code.r):
        for e in ((code.r - s) // 2, (code.r - s) // 2 + 1):
            places = rng.sample(range(n), s + e)
            received = bytearray(codeword)
            for i in places:
                received[i] ^= rng.randrange(1, 256)
            syndromes = b"".join(code.syndromes([bytes([c]) for c in received]))
            added = code.decode(syndromes, places[:s])
            for i, value in (added or {}).items():
                received[i] ^= value
            assert (bytes(received) == codeword) == (2 * e + s <= code.r)


@pytest.mark.parametrize("name", NAMED)
@pytest.mark.parametrize("each", [1, 2, 3, 4])
def test_the_guaranteed_number_of_flips(name: str, each: int) -> None:
    """floor((D*d - 1)/2) flips in the words through one column, `each` in a word, in the zero codeword.

    Forney 1966 (common practice). Three flips in a word of distance 4 are always corrected wrongly.
    """
    rng = random.Random(14)
    parameters = NAMED[name]
    inner = plain_reader.InnerCode(("none", "EH", "EB").index(parameters.inner.family), *inner_bytes(name))
    outer = plain_reader.ReedSolomon(parameters.outer.n, parameters.outer.k)
    flips = (parameters.outer.distance * parameters.inner.d - 1) // 2
    column, width = 20, 64
    cells = []
    for strip in range(outer.n):
        received, places = bytearray(width), [column]
        if inner.m:
            first = (column - strip % inner.m) % width // inner.m * inner.m
            places = [(strip % inner.m + first + c) % width for c in range(min(inner.m, width - first))]
        size = min(each, flips)
        flips -= size
        for bit in rng.sample(range(8 * len(places)), size):
            received[places[bit // 8]] ^= 1 << bit % 8
        group = bytes(inner.p * -(-width // inner.m)) if inner.m else b""
        cell = plain_reader.Cell(strip, bytes(received), bytes(width), bytearray(width))
        cell.group = plain_reader.Received(group, bytes(len(group)))
        cells.append(cell)
    assert flips == 0
    plain_reader.decode_block(plain_reader.ConcatenatedCode(outer, inner), cells)
    assert all(cell.finished and not any(cell.value) for cell in cells)


def inner_bytes(name: str) -> tuple[int, int]:
    return NAMED[name].inner.m, NAMED[name].inner.p


@pytest.mark.parametrize("name", [*NAMED, "RS(40,30)+EB(128,104)"])
def test_layouts_agree(name: str) -> None:
    """Both find the same places in sections of every size, those too large to be decoded here included."""
    code = resolve_code(name)
    parameters = (code.outer.n, code.outer.k, code.inner.m, code.inner.p)
    k = code.outer.k
    steps = [step + more for step in (0, 64 * k, SMALL, 4096 * k, LARGE, MANY) for more in (0, 1, 12_345)]
    for length in [*steps, SMALL - 1, LARGE - 1, MANY - 1, 400_000_000]:
        right = Geometry(*parameters, length, whole_depth(length, k))
        mine = plain_reader.Geometry(*parameters, length, right.depth)
        assert mine.sound
        assert not mine._replace(depth=right.depth + unit_of(length)).sound
        assert (mine.blocks, mine.data_cells, mine.body) == (right.blocks, right.data_cells, right.body)
        for block in {0, right.blocks // 2, right.blocks - 1} if right.blocks else ():
            assert mine.group(block) == right.group(block)
            for j in (0, right.r - 1):
                place = right.parity_bytes + right.data_inner + right.parity_inner_start(j, block)
                assert mine.group_place(k + j, block) == place
            for strip in (0, k - 1):
                assert mine.group_place(strip, block) == right.parity_bytes + right.inner_start(strip, block)
        for table_length in (0, 84, 1_000_000):
            ours, other = plain_reader.Layout(mine, table_length), Layout(right, table_length)
            assert [ours.stretches, ours.places[-1], ours.prefix, ours.piece, ours.size] == [
                other.stretches, other.slice_bytes, other.prefix, other.piece, other.size,
            ]  # fmt: skip
            frames = [tuple(frame) for track in range(1, 7) for frame in ours.frames(track)]
            assert frames == [(f.track, f.number, f.content, f.width, f.place) for f in other.frames()]


def unit_of(length: int) -> int:
    return 4096 if length >= LARGE else 64


# -- small sets: no digests of cells ---------------------------------------------------------------------


@pytest.mark.parametrize("code", [*NAMED, "RS(40,30)+EB(128,104)"])
def test_a_folder(code: str, tmp_path: Path) -> None:
    """Flips everywhere, one member gone, one cut short, one longer; the sidecar is damaged too."""
    rng = random.Random(3)
    folder = make_folder(tmp_path, rng)
    right = tree(tmp_path)
    sidecar = protect([folder], code=code).sidecar
    flip(folder / "page 0.txt", 12, rng)
    (folder / "page 4.txt").unlink()
    (folder / "link").unlink()
    (folder / "empty").rmdir()
    with (folder / "page 3.txt").open("r+b") as file:
        file.truncate(19_500)
    with (folder / "page 2.txt").open("ab") as file:
        file.write(b"more")
    flip(sidecar, 40, rng)
    assert_both_restore(sidecar, tmp_path, right)


@pytest.mark.parametrize(
    "content", [b"", b"x", b"just sixty-four bytes: one strip, nothing virtual in it at all.\n"]
)
def test_tiny_files(content: bytes, tmp_path: Path) -> None:
    path = tmp_path / "note"
    path.write_bytes(content)
    right = tree(tmp_path)
    sidecar = protect([path]).sidecar
    path.unlink()
    assert_both_restore(sidecar, tmp_path, right)


def test_beyond_capacity_both_say_so(tmp_path: Path) -> None:
    rng = random.Random(4)
    folder = make_folder(tmp_path, rng)
    sidecar = protect([folder]).sidecar
    overwrite(folder / "page 3.txt", 0, 12_000, rng)
    status, written = plain(sidecar, tmp_path / "slow")
    result = repair(sidecar, output=tmp_path / "fast", accept_loss=True)
    lost = {m.path for m in result.members if m.state is MemberState.UNCORRECTABLE}
    assert status == 20
    assert lost == {"ledger/page 3.txt"}
    assert "ledger/page 3.txt" not in written
    assert set(tree(tmp_path / "fast")) - set(written) == lost


# -- whole sets with digests -----------------------------------------------------------------------------


@pytest.mark.parametrize("code", NAMED)
@pytest.mark.parametrize("damage", ["scattered", "run", "absent tail", "both"])
def test_whole(code: str, damage: str, tmp_path: Path) -> None:
    rng = random.Random(5)
    path = make_file(tmp_path, 150_000, rng)
    right = tree(tmp_path)
    sidecar = protect([path], code=code).sidecar
    if damage in ("scattered", "both"):
        flip(path, 60 if code == "plain" else 1000, rng)
    if damage in ("run", "both"):
        overwrite(path, 71_717, 1500, rng)
    if damage == "absent tail":
        os.truncate(path, 143_210)
    assert_both_restore(sidecar, tmp_path, right)


def test_more_than_a_cell_deep(tmp_path: Path) -> None:
    """Strips of several cells: blocks, the last of which is narrower, and the order of the inner parity."""
    rng = random.Random(6)
    path = make_file(tmp_path, 61_000, rng)
    other = tmp_path / "second.tar"
    other.write_bytes(rng.randbytes(30_000))
    right = tree(tmp_path)
    sidecar = protect([path, other], output=tmp_path / "set.oakum", code="RS(12,8)+EB(128,112)").sidecar
    other.unlink()
    flip(path, 150, rng)
    flip(sidecar, 300, rng, start=8192)
    assert_both_restore(sidecar, tmp_path, right)


@pytest.mark.parametrize("lost", ["start", "end", "middle"])
def test_a_third_of_the_sidecar_is_gone(lost: str, tmp_path: Path) -> None:
    """The records survive it, and the members come back as far as the parity that is left goes."""
    rng = random.Random(7)
    path = make_file(tmp_path, 70_000, rng)
    right = tree(tmp_path)
    sidecar = protect([path]).sidecar
    data = sidecar.read_bytes()
    third = len(data) * 30 // 100
    flip(path, 40, rng)
    pieces = {
        "start": data[third:],
        "end": data[:-third],
        "middle": data[:5000] + rng.randbytes(third) + data[5000 + third :],
    }
    sidecar.write_bytes(pieces[lost])
    assert_both_restore(sidecar, tmp_path, right)


def test_a_sidecar_with_every_head_damaged(tmp_path: Path) -> None:
    """Flips in every marker and every copy of the bootstrap record, within what both stand."""
    rng = random.Random(8)
    path = make_file(tmp_path, 2_000, rng)
    right = tree(tmp_path)
    sidecar = protect([path]).sidecar
    data = bytearray(sidecar.read_bytes())
    marker = plain_reader.MARKER
    heads = [found.start() for found in re.finditer(re.escape(marker), data)]
    assert len(heads) == 4
    for head in heads:
        for place in rng.sample(range(64), 10):
            data[head + place // 8] ^= 1 << place % 8
        for turn in range(2):
            for symbol in rng.sample(range(255), 77):
                data[head + 8 + 2 * symbol + turn] ^= rng.randrange(1, 256)
    sidecar.write_bytes(data)
    path.unlink()
    assert_both_restore(sidecar, tmp_path, right)


# -- windows ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("code", NAMED)
def test_windows(code: str, tmp_path: Path) -> None:
    """Two windows of one block each; flips in both, and a run over the boundary between them."""
    rng = random.Random(9)
    path = make_file(tmp_path, 1_010_000, rng)
    right = tree(tmp_path)
    result = protect([path], code=code, depth=4096)
    assert result.windows == 2
    first_window = 4096 * NAMED[code].outer.k
    overwrite(path, first_window - 3000, 4000, rng)
    flip(path, 30, rng)
    flip(result.sidecar, 100, rng)
    assert_both_restore(result.sidecar, tmp_path, right)


def test_a_pipe_in_many_windows(tmp_path: Path) -> None:
    rng = random.Random(10)
    path = make_file(tmp_path, 150_001, rng)
    with path.open("rb") as stream:
        result = protect_pipe(
            stream, name="reel.tar", output=tmp_path / "reel.oakum", code="RS(14,10)+EH(128,120)", depth=4096
        )
    assert result.windows == 4
    content = path.read_bytes()
    flip(path, 100, rng)
    overwrite(path, 44_000, 5000, rng)
    status, written = plain(tmp_path / "reel.oakum", tmp_path / "slow")
    repair(tmp_path / "reel.oakum", output=tmp_path / "fast" / "reel.tar")
    assert status == 0
    assert written["reel.tar"][0] == hashlib.sha256(content).hexdigest()
    assert (tmp_path / "fast" / "reel.tar").read_bytes() == content


# -- what is refused -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "content",
    [b"", b"not a sidecar", bytes(20_000), random.Random(11).randbytes(40_000)],
    ids=["empty", "text", "zeros", "noise"],
)
def test_no_sidecar(content: bytes, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "x.oakum").write_bytes(content)
    assert plain_reader.main([str(tmp_path / "x.oakum")]) == 30
    assert "no oakum sidecar" in capsys.readouterr().err


def patched(sidecar: Path, patch: Callable[[bytearray], None]) -> None:
    """Alter the bootstrap record of every stretch and give it a checksum that agrees."""
    data = bytearray(sidecar.read_bytes())
    for found in list(re.finditer(re.escape(plain_reader.MARKER), data)):
        record = data[found.end() : found.end() + 200]
        patch(record)
        record[192:] = plain_reader.xxh3(bytes(record[:192])).to_bytes(8, "little")
        data[found.end() : found.end() + 200] = record
    sidecar.write_bytes(data)


@pytest.mark.parametrize(
    ("offset", "size", "value"),
    [(6, 2, 2), (80, 8, 1 << 50), (88, 8, 100), (12, 1, 0), (120, 8, 1 << 40), (24, 8, 5), (136, 4, 9)],
    ids=["version", "length", "depth", "n", "table", "matrix", "entries"],
)
def test_hostile_records_are_refused_by_both(offset: int, size: int, value: int, tmp_path: Path) -> None:
    path = make_file(tmp_path, 3_000, random.Random(12))
    sidecar = protect([path]).sidecar

    def patch(record: bytearray) -> None:
        record[offset : offset + size] = value.to_bytes(size, "little")

    patched(sidecar, patch)
    assert plain_reader.main([str(sidecar)]) == 30
    with pytest.raises(FormatError):
        repair(sidecar, output=tmp_path / "fast")


def test_an_endless_window_costs_nothing(tmp_path: Path) -> None:
    """A record that is sound in itself and promises 2^60 bytes is refused before anything is made for it."""
    path = make_file(tmp_path, 3_000, random.Random(12))
    sidecar = protect([path]).sidecar
    length = 1 << 60
    depth = whole_depth(length, NAMED["shelf"].outer.k)

    def patch(record: bytearray) -> None:
        record[10:12] = (48).to_bytes(2, "little")
        record[80:88] = record[104:112] = length.to_bytes(8, "little")
        record[88:96] = depth.to_bytes(8, "little")

    patched(sidecar, patch)
    assert plain_reader.main([str(sidecar)]) == 30
    with pytest.raises(FormatError):
        repair(sidecar, output=tmp_path / "fast")


def test_names_cannot_leave_the_folder() -> None:
    from oakum.sidecar.table import Kind, Piece

    for path in (b"../x", b"/etc/x", b"a//b", b".", b"a/../b", b"a\0b", b""):
        entry = Piece(Kind.FILE, path, 0o644, 0, 0, 0, 0, True).pack()
        with pytest.raises(plain_reader.Unreadable):
            plain_reader.parse_table(entry, 1, 0)


def test_a_link_in_the_way_is_not_followed(tmp_path: Path) -> None:
    """A member behind a link is absent: what lies elsewhere is neither read nor taken for it."""
    rng = random.Random(13)
    folder = make_folder(tmp_path, rng)
    sidecar = protect([folder]).sidecar
    folder.rename(tmp_path / "elsewhere")
    folder.symlink_to(tmp_path / "elsewhere")
    assert plain_reader.main([str(sidecar)]) == 20
