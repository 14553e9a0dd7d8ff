"""Seeded mutations of the corpus through every target: the short form of fuzzing, without atheris.

Corpus files beside these that begin with `found-` once broke a target.
"""

from __future__ import annotations

import random
from pathlib import Path

import pytest
from targets import LARGEST, TARGETS

CORPUS = Path(__file__).parent / "corpus"
WORTHWHILE = (0, 1, 0x7F, 0x80, 0xFF)


def mutated(data: bytes, luck: random.Random) -> bytes:
    """A few of the usual mutations: bits, bytes, runs removed, repeated, copied, large numbers."""
    out = bytearray(data)
    for _ in range(luck.choice((1, 1, 2, 4, 16))):
        at = luck.randrange(len(out) + 1)
        # Two in three hit where the records are: the first head.
        if len(out) > 4400 and luck.random() < 0.66:
            at = luck.randrange(4096, 4096 + 1024)
        n = luck.choice((1, 2, 4, 8, 64, 500))
        match luck.randrange(6):
            case 0:
                if at < len(out):
                    out[at] ^= 1 << luck.randrange(8)
            case 1:
                out[at : at + n] = bytes([luck.choice(WORTHWHILE)]) * n
            case 2:
                del out[at : at + n]
            case 3:
                out[at:at] = luck.randbytes(n)
            case 4:
                out[at : at + 8] = luck.choice((0, 1, 1 << 31, 1 << 60, (1 << 63) - 1, 1 << 63)).to_bytes(
                    8, "little"
                )
            case 5:
                source = luck.randrange(len(out) + 1)
                out[at:at] = out[source : source + n]
    return bytes(out[:LARGEST])


@pytest.mark.parametrize("name", TARGETS)
def test_the_corpus(name: str) -> None:
    target, mend = TARGETS[name]
    paths = sorted((CORPUS / name).iterdir())
    assert len(paths) > 2
    for path in paths:
        target(path.read_bytes())
        target(mend(path.read_bytes()))


@pytest.mark.parametrize("name", TARGETS)
def test_mutations(name: str, long: bool) -> None:
    target, mend = TARGETS[name]
    seeds = [path.read_bytes() for path in sorted((CORPUS / name).iterdir())]
    luck = random.Random(name)
    for number in range(200_000 if long else 700):
        data = luck.choice(seeds)
        for _ in range(luck.randrange(1, 4)):
            data = mutated(data, luck)
        data = mend(data) if number % 2 else data
        try:
            target(data)
        except BaseException as error:
            raise AssertionError(f"input {number}: {data.hex()}") from error


def test_menders_reach_the_member_table(monkeypatch: pytest.MonkeyPatch) -> None:
    """Else the mutations would all end at the first checksum."""
    import targets

    reached = 0
    through = targets._read

    def counted(section: targets.Section) -> None:
        nonlocal reached
        section.table()
        reached += 1
        through(section)

    monkeypatch.setattr(targets, "_read", counted)
    seeds = [path.read_bytes() for path in sorted((CORPUS / "reader").iterdir())]
    luck = random.Random(1)
    for _ in range(60):
        targets.reader(targets.mend_sidecar(mutated(luck.choice(seeds), luck)))
    assert reached > 10
