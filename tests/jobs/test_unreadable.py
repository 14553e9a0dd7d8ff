"""The list of what must not be read."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from support import content, plant

from oakum import CannotCheck, UsageError, protect
from oakum.cli.running import run
from oakum.jobs.unreadable import read_unreadable


def read(tmp_path: Path, data: bytes) -> dict[bytes, list[tuple[int, int]]]:
    (tmp_path / "list.csv").write_bytes(data)
    return read_unreadable(tmp_path / "list.csv").ranges


def test_ranges_by_member(tmp_path: Path) -> None:
    data = b"path,offset,length\n# a remark\n\na/b,512,1024\nc,0,1\na/b,0,512\r\n"
    assert read(tmp_path, data) == {b"a/b": [(0, 512), (512, 1536)], b"c": [(0, 1)]}
    assert read_unreadable(None).ranges == {}
    assert read(tmp_path, b"") == {}
    assert read(tmp_path, b"a,0,%d\n" % ((1 << 62) - 1)) == {b"a": [(0, (1 << 62) - 1)]}


def test_names_of_every_kind(tmp_path: Path) -> None:
    """Commas, quotes and line ends in a name are quoted as in RFC 4180; bytes that are not UTF-8 survive."""
    data = b'"a,b",0,1\n"say ""x""",0,2\n"two\nlines",0,3\n"r\rn",0,4\ncaf\xe9,0,5\n'
    assert read(tmp_path, data) == {
        b"a,b": [(0, 1)], b'say "x"': [(0, 2)], b"two\nlines": [(0, 3)], b"r\rn": [(0, 4)],
        b"caf\xe9": [(0, 5)],
    }  # fmt: skip


@pytest.mark.parametrize(
    ("data", "line"),
    [(b"a,0\n", 1), (b"a,0,1\nb,0,1,2\n", 2), (b'"x\ny",0,1\na,-1,1\n', 3), (b"#\n\na,0,0\n", 3),
     (b"a,0,1.5\n", 1), (b"a,0,-1\n", 1), (b"a,%d,1\n" % ((1 << 62) - 1), 1),
     (b",0,1\n", 1), (b"a,0,%d\n" % (1 << 62), 1)],
)  # fmt: skip
def test_the_line_at_fault_is_named(tmp_path: Path, data: bytes, line: int) -> None:
    with pytest.raises(UsageError, match=f"^line {line} of .* is not path,offset,length"):
        read(tmp_path, data)


def test_lists_that_are_none(tmp_path: Path) -> None:
    with pytest.raises(CannotCheck, match="cannot be read: no such file"):
        read_unreadable(tmp_path / "nothing")
    with pytest.raises(CannotCheck, match="cannot be read: is a directory"):
        read_unreadable(tmp_path)
    (tmp_path / "huge").touch()
    os.truncate(tmp_path / "huge", 65 << 20)
    with pytest.raises(UsageError, match="too large"):
        read_unreadable(tmp_path / "huge")
    with pytest.raises(UsageError, match="not a list"):
        read(tmp_path, b"a" * 200_000 + b",0,1\n")


def test_members_that_the_sidecar_does_not_have(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A path that was mistyped would else be read, which is what the list is to prevent."""
    plant(tmp_path, {"set/a": content(5000), "set/b": content(10), "other": content(10)})
    protect([tmp_path / "set"])
    protect([tmp_path / "other"])
    (tmp_path / "bad.csv").write_text("path,offset,length\n\nset/a,0,512\nset/A,512,512\nb,0,1\n")
    listed = ["--unreadable", str(tmp_path / "bad.csv")]
    for command in ("verify", "repair", "audit"):
        assert run([command, str(tmp_path / "set"), *listed]) == 2
        assert (
            f"line 4 of {tmp_path}/bad.csv names set/A, which the sidecar does not" in capsys.readouterr().err
        )
    (tmp_path / "bad.csv").write_text("set/a,0,512\n")
    assert run(["audit", str(tmp_path / "set"), str(tmp_path / "other"), *listed]) == 10
