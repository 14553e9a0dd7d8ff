"""The sample ledgers in the repository are what their script writes."""

import runpy
from pathlib import Path

SAMPLES = Path(__file__).parents[2] / "samples"


def contents(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


def test_the_script_writes_the_same_bytes_again(tmp_path: Path) -> None:
    runpy.run_path(str(SAMPLES / "make_ledgers.py"))["write_ledgers"](tmp_path / "quernhaven")
    written, kept = contents(tmp_path / "quernhaven"), contents(SAMPLES / "quernhaven")
    assert sorted(written) == sorted(kept)
    assert [name for name in kept if written[name] != kept[name]] == []


def test_they_are_small_and_of_every_kind() -> None:
    kept = contents(SAMPLES / "quernhaven")
    assert sum(map(len, kept.values())) < 1_000_000
    assert {Path(name).suffix for name in kept} == {".csv", ".txt", ".pgm"}
    tables = [content for name, content in kept.items() if name.endswith(".csv")]
    assert sum(table.count(b"\n") - 1 for table in tables) == 365 * 24
