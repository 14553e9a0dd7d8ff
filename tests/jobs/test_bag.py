"""Bags (RFC 8493): the payload stays as it is, and a bag with a sidecar is valid for `bagit`."""

from __future__ import annotations

from pathlib import Path

import bagit
import pytest
from support import content, plant, rewrite, snapshot, with_flips

from oakum import CannotCheck, UsageError, protect, repair, verify
from oakum.cli.running import run
from oakum.jobs.audit import AuditOptions, audit
from oakum.results import Outcome


def make_bag(folder: Path, algorithms: tuple[str, ...] = ("sha256", "md5")) -> Path:
    """A bag as the `bagit` library of the Library of Congress makes it."""
    plant(folder, {"a.tif": content(200_000), "sub/b.tif": content(3000, 2), "per%cent\nline": b"x"})
    bagit.make_bag(str(folder), checksums=list(algorithms))
    return folder


def is_valid(bag: Path) -> bool:
    return bool(bagit.Bag(str(bag)).is_valid())


@pytest.mark.parametrize("algorithms", [("sha512",), ("sha256", "md5", "sha1")])
def test_a_protected_bag_is_valid(tmp_path: Path, algorithms: tuple[str, ...]) -> None:
    bag = make_bag(tmp_path / "bag", algorithms)
    before = snapshot(bag)
    result = protect([bag], bag=True)
    assert result.sidecar == bag / "data.oakum"
    assert is_valid(bag)
    after = snapshot(bag)
    changed = {name for name in before if before[name] != after[name]}
    assert changed == {f"tagmanifest-{a}.txt" for a in algorithms}
    assert set(after) - set(before) == {"data.oakum"}
    for algorithm in algorithms:
        assert (bag / f"tagmanifest-{algorithm}.txt").read_text().count(" data.oakum\n") == 1


def test_the_sidecar_is_part_of_what_the_bag_vouches_for(tmp_path: Path) -> None:
    bag = make_bag(tmp_path / "bag")
    sidecar = protect([bag / "data"], bag=True).sidecar
    rewrite(sidecar, with_flips(sidecar.read_bytes(), 1))
    assert not is_valid(bag)


def test_protecting_again_keeps_the_bag_valid(tmp_path: Path) -> None:
    bag = make_bag(tmp_path / "bag")
    protect([bag], bag=True)
    protect([bag], bag=True, code="slim", overwrite=True)
    assert is_valid(bag)
    with pytest.raises(UsageError, match="give --bag to keep them right"):
        protect([bag / "data"], overwrite=True)
    assert is_valid(bag)


def test_audit_and_repair_of_a_bag(tmp_path: Path) -> None:
    bag = make_bag(tmp_path / "bag")
    protect([bag], bag=True)
    before = snapshot(bag)
    (target,) = audit([bag], AuditOptions(ledger=tmp_path / "l")).targets
    assert target.outcome is Outcome.INTACT
    assert verify(bag / "data").outcome is Outcome.INTACT
    assert snapshot(bag) == before
    damaged = with_flips(content(200_000), 50)
    rewrite(bag / "data/a.tif", damaged)
    (target,) = audit([bag]).targets
    assert (target.outcome, (bag / "data/a.tif").read_bytes()) == (Outcome.CORRECTABLE, damaged)
    repair(bag / "data", output=tmp_path / "out")
    assert (tmp_path / "out/data/a.tif").read_bytes() == content(200_000)


def test_one_file_of_the_payload(tmp_path: Path) -> None:
    bag = make_bag(tmp_path / "bag")
    sidecar = protect([bag / "data/sub/b.tif"], bag=True).sidecar
    assert sidecar == bag / "b.tif.oakum"
    assert is_valid(bag)
    result = verify(sidecar)
    assert (result.outcome, [m.path for m in result.members]) == (Outcome.INTACT, ["data/sub/b.tif"])


def test_a_name_that_has_to_be_escaped(tmp_path: Path) -> None:
    """RFC 8493, section 2.1.3: CR, LF and % are percent-encoded in manifests."""
    bag = make_bag(tmp_path / "bag")
    protect([bag], bag=True, output=bag / "50%\nof.oakum")
    assert "  50%25%0Aof.oakum\n" in (bag / "tagmanifest-md5.txt").read_text()


def test_a_bag_without_tag_manifests(tmp_path: Path) -> None:
    bag = make_bag(tmp_path / "bag")
    for manifest in bag.glob("tagmanifest-*"):
        manifest.unlink()
    protect([bag], bag=True)
    assert is_valid(bag) and not list(bag.glob("tagmanifest-*"))


@pytest.mark.parametrize("name", ["data/sub", "data/a.tif"])
def test_the_payload_is_not_written_to(tmp_path: Path, name: str) -> None:
    bag = make_bag(tmp_path / "bag")
    before = snapshot(bag)
    with pytest.raises(UsageError, match="would lie in the payload"):
        protect([bag / name])
    with pytest.raises(UsageError, match="outside its payload"):
        protect([bag / name], bag=True, output=bag / "data/x.oakum")
    assert snapshot(bag) == before


def test_no_bag_or_two(tmp_path: Path) -> None:
    one, two = make_bag(tmp_path / "one"), make_bag(tmp_path / "two")
    plant(tmp_path / "none", {"x": b"1"})
    for paths in ([tmp_path / "none"], [one / "data/a.tif", two / "data/a.tif"]):
        with pytest.raises(UsageError, match="one bag"):
            protect(paths, bag=True)
    with pytest.raises(UsageError, match="need --output"):
        protect([one / "data/a.tif", one / "data/sub"], bag=True)
    with pytest.raises(UsageError, match="outside its payload"):
        protect([one], bag=True, output=tmp_path / "away.oakum")


def test_a_checksum_that_is_not_known(tmp_path: Path) -> None:
    bag = make_bag(tmp_path / "bag")
    (bag / "tagmanifest-rot13.txt").write_text("x  bagit.txt\n")
    with pytest.raises(CannotCheck, match="not known here"):
        protect([bag], bag=True)
    assert not (bag / "data.oakum").exists()


def test_the_command(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    bag = make_bag(tmp_path / "bag")
    assert run(["protect", "--bag", str(bag)]) == 0
    assert is_valid(bag)
    assert run(["protect", "--bag", "-", "--name", "x"]) == 2
    assert run(["audit", str(bag), "--ledger", str(tmp_path / "l"), "--quiet"]) == 0
    assert "1 whole" in capsys.readouterr().out
