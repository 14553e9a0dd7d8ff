"""describe: what a sidecar says about itself, whole and damaged."""

from __future__ import annotations

import hashlib
import io
import os
from pathlib import Path

import pytest
from support import content, overwritten, plant, with_flips

from oakum import CannotCheck, FormatError, describe, protect, protect_pipe


def test_everything_that_was_protected(tmp_path: Path) -> None:
    folder = plant(tmp_path / "set", {"a": content(100_000), "d/b": b"", "e/": b""})
    (folder / "link").symlink_to("a")
    (folder / "a").chmod(0o640)
    result = protect([folder], code="stout")
    found = describe(tmp_path / "set.oakum")
    assert (found.sidecar, found.format_version, found.notes) == (result.sidecar, 1, ())
    assert (found.code, found.depth, found.windows) == (result.code, result.depth, 1)
    assert (found.stream_bytes, found.sidecar_bytes) == (100_000, result.sidecar_bytes)
    assert found.guaranteed_burst == result.guaranteed_burst
    assert [(m.path, m.kind, m.size, m.sha256, m.link_target) for m in found.members] == [
        ("set", "folder", 0, None, None),
        ("set/a", "file", 100_000, hashlib.sha256(content(100_000)).digest(), None),
        ("set/d", "folder", 0, None, None),
        ("set/d/b", "file", 0, hashlib.sha256(b"").digest(), None),
        ("set/e", "folder", 0, None, None),
        ("set/link", "link", 0, None, "a"),
    ]
    by_path = {m.path: m for m in found.members}
    assert by_path["set/a"].mode == 0o640
    assert by_path["set/a"].modified_ns == (folder / "a").stat().st_mtime_ns
    assert describe(folder) == found


def test_members_are_not_needed(tmp_path: Path) -> None:
    (tmp_path / "f").write_bytes(content(5000))
    protect([tmp_path / "f"])
    before = describe(tmp_path / "f.oakum")
    (tmp_path / "f").unlink()
    assert describe(tmp_path / "f.oakum") == before
    assert describe(tmp_path / "f") == before


def test_the_identity_is_that_of_the_content(tmp_path: Path) -> None:
    identities = set()
    for seed in (1, 1, 2):
        (tmp_path / "f").write_bytes(content(5000, seed))
        os.utime(tmp_path / "f", ns=(0, 10**18))
        protect([tmp_path / "f"], overwrite=True)
        identities.add(describe(tmp_path / "f.oakum").identity)
    assert len(identities) == 2


def test_a_pipe_in_windows(tmp_path: Path) -> None:
    data = content(400_000)
    out = tmp_path / "p.oakum"
    protect_pipe(io.BytesIO(data), name="p", output=out, code="RS(60,40)", depth=4096)
    found = describe(out)
    assert (found.windows, found.stream_bytes, found.depth) == (3, 400_000, 4096)
    (member,) = found.members
    assert (member.size, member.sha256) == (400_000, hashlib.sha256(data).digest())
    whole = out.read_bytes()
    out.write_bytes(whole[: len(whole) * 2 // 3])
    cut = describe(out)
    assert cut.windows == 2
    assert cut.members[0].sha256 is None
    assert "end is missing" in cut.notes[0]


@pytest.mark.parametrize("how", ["flips", "front", "end", "inserted"])
def test_damaged_sidecars_still_tell(tmp_path: Path, how: str) -> None:
    plant(tmp_path / "set", {"a": content(300_000), "b": content(70)})
    sidecar = protect([tmp_path / "set"]).sidecar
    whole = sidecar.read_bytes()
    before = describe(sidecar)
    third = len(whole) // 3
    hurt = {
        "flips": with_flips(whole, len(whole) // 30),
        "front": overwritten(whole, 0, third),
        "end": whole[:-third],
        "inserted": b"header" + whole,
    }[how]
    sidecar.write_bytes(hurt)
    after = describe(sidecar)
    assert (after.members, after.identity) == (before.members, before.identity)


def test_what_is_no_sidecar(tmp_path: Path) -> None:
    (tmp_path / "x").write_bytes(b"x")
    with pytest.raises(CannotCheck, match="no sidecar"):
        describe(tmp_path / "x")
    (tmp_path / "x.oakum").write_bytes(content(9000))
    with pytest.raises(FormatError, match="not an oakum sidecar"):
        describe(tmp_path / "x.oakum")
