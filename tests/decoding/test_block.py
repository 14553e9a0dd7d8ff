"""The steps of decoding one block, on blocks in memory."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
import pytest
from blocks import MemoryBlock
from hypothesis import given, settings
from hypothesis import strategies as st

from oakum.algebra.naming import resolve_code
from oakum.decoding.block import BlockOutcome, Decoders, decode_block, decode_blocks

CODES = ("shelf", "slim", "stout", "plain", "RS(60,40)+EH(128,120)", "RS(60,40)+EB(128,104)", "RS(20,15)")
_READY: dict[str, Decoders] = {}


def decode(block: MemoryBlock) -> BlockOutcome:
    name = block.code.name
    if name not in _READY:
        _READY[name] = Decoders.of(block.code)
    outcome = decode_block(block, _READY[name])
    # Whatever happened, nothing that is called known may be wrong, and all that is finished is known.
    assert not (outcome.known & (outcome.right != block.sent[outcome.strips])).any()
    assert outcome.known[outcome.finished].all()
    return outcome


def is_back(block: MemoryBlock) -> BlockOutcome:
    outcome = decode(block)
    assert outcome.correctable
    received = np.where(block.lost, np.uint8(0), block.strips)[outcome.strips]
    flips = np.where(block.lost[outcome.strips], np.uint8(0), received ^ block.sent[outcome.strips])
    assert np.array_equal(outcome.flips, flips)
    return outcome


def flip(block: MemoryBlock, strip: int, columns: np.ndarray | list[int], value: int = 1) -> None:
    block.strips[strip, columns] ^= np.uint8(value)


# -- step 1 ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("code", CODES)
def test_a_clean_block(code: str) -> None:
    outcome = is_back(MemoryBlock(code))
    assert (len(outcome.strips), outcome.margin, outcome.words_corrected, outcome.words_flagged) == (
        0,
        1.0,
        0,
        0,
    )


@pytest.mark.parametrize("code", CODES)
def test_unreadable_strips_up_to_r(code: str) -> None:
    for count in (1, resolve_code(code).outer.r):
        block = MemoryBlock(code)
        chosen = np.random.default_rng(3).choice(block.geometry.n, count, replace=False)
        block.lost[chosen] = True
        outcome = is_back(block)
        assert outcome.margin == 1 - count / block.geometry.r
        assert outcome.erased.all()


@pytest.mark.parametrize("code", CODES)
def test_one_strip_more_than_r_is_too_many(code: str) -> None:
    block = MemoryBlock(code)
    block.lost[: block.geometry.r + 1] = True
    outcome = decode(block)
    assert not outcome.finished.any()
    assert not outcome.known.any()


@pytest.mark.parametrize("code", CODES)
def test_different_erasures_in_every_column(code: str) -> None:
    """Erasures in each column, all strips touched: no cell is right, and every column is solved alone.

    Words that hold an unreadable byte must not be "corrected": what stands in its place was never received,
    and half of all such words would spoil a byte that was.
    """
    block = MemoryBlock(code)
    rng = np.random.default_rng(5)
    for column in range(128):
        block.lost[rng.choice(block.geometry.n, block.geometry.r - 1, replace=False), column] = True
    assert is_back(block).margin == pytest.approx(1 / block.geometry.r)


def test_right_cells_are_never_altered() -> None:
    """Too many wrong symbols for the code: the decoder must not "correct" into cells whose digest agrees."""
    for seed in range(20):
        block = MemoryBlock("RS(20,15)", seed=seed)
        chosen = np.random.default_rng(seed).choice(20, 6, replace=False)
        flip(block, chosen, slice(None), 0x3C)  # type: ignore[arg-type]
        outcome = decode(block)
        assert outcome.strips.tolist() == sorted(chosen.tolist())
        assert not outcome.finished.any()


# -- step 2 ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("code", ["shelf", "stout", "RS(60,40)+EB(128,104)"])
def test_2a_reads_no_other_strip(code: str) -> None:
    block = MemoryBlock(code)
    t = block.code.inner.t
    for word in range(3):
        columns = block.word_of(7, word * 40)[1]
        flip(block, 7, columns[:t], 0x80)
    outcome = is_back(block)
    assert (outcome.margin, outcome.words_corrected, outcome.words_flagged) == (1.0, 3, 0)
    asked = [strip for call in block.asked for strip in call]
    assert set(asked) == {7}


def test_2a_is_not_taken_when_the_inner_code_errs() -> None:
    """Three flips look like one: the digest disagrees, and the outer code decides."""
    block = MemoryBlock("shelf")
    columns = block.word_of(7, 40)[1]
    flip(block, 7, columns[[0, 5, 9]])
    outcome = is_back(block)
    assert len({strip for call in block.asked for strip in call}) == 255
    assert outcome.margin < 1


def test_unreadable_inner_parity_makes_words_undecodable_but_erases_nothing() -> None:
    block = MemoryBlock("shelf")
    word, columns = block.word_of(9, 60)
    flip(block, 9, [int(columns[3])])
    block.lost_inner[9, word] = True
    outcome = is_back(block)
    assert not outcome.erased.any()
    assert outcome.margin == 1 - 2 / 32
    # Without damage to the cell itself, its inner parity does not matter at all.
    clean = MemoryBlock("shelf")
    clean.lost_inner[:] = True
    clean.inner_received ^= np.uint8(0xFF)
    assert len(is_back(clean).strips) == 0


def test_wrong_inner_parity_alone_harms_nothing() -> None:
    """All digests withheld and the inner parity of ten strips overwritten: the data stay as they were."""
    block = MemoryBlock("shelf")
    block.withheld[:] = True
    block.inner_received[20:30] ^= np.uint8(0x6B)
    outcome = is_back(block)
    assert not outcome.flips.any()


# -- step 3: t and t + 1 ---------------------------------------------------------------------------


def scattered(block: MemoryBlock, column: int, count: int, seed: int) -> None:
    """`count` wrong symbols in one column, and one in each strip elsewhere, so that no cell is right."""
    n = block.geometry.n
    rng = np.random.default_rng(seed)
    width = block.sent.shape[1]
    others = np.setdiff1d(np.arange(width), [column])
    for strip in range(n):
        flip(block, strip, [int(others[strip % len(others)])], int(rng.integers(1, 256)))
    for strip in rng.choice(n, count, replace=False).tolist():
        flip(block, strip, [column], int(rng.integers(1, 256)))


@pytest.mark.parametrize("code", ["plain", "RS(60,40)", "RS(20,15)"])
@pytest.mark.parametrize("digests", [True, False])
def test_t_wrong_symbols_in_a_column_are_corrected(code: str, digests: bool) -> None:
    for seed in range(5):
        block = MemoryBlock(code, 512, seed)
        block.withheld[:] = not digests
        t = block.geometry.r // 2
        scattered(block, 300, t, seed)
        outcome = is_back(block)
        assert outcome.margin == pytest.approx(1 - 2 * t / block.geometry.r)


@pytest.mark.parametrize("code", ["plain", "RS(60,40)"])
def test_well_past_t_without_digests_is_lost_and_said_to_be(code: str) -> None:
    """Six more than t, so that no lucky trial of a few erasures reaches it; the other columns are solved."""
    for seed in range(5):
        block = MemoryBlock(code, 512, seed)
        block.withheld[:] = True
        scattered(block, 300, block.geometry.r // 2 + 6, seed)
        outcome = decode(block)
        assert not outcome.finished.any()
        assert not outcome.known[:, 300].any()
        assert np.delete(outcome.known, 300, axis=1).all()


@pytest.mark.parametrize("code", ["plain", "RS(60,40)", "RS(20,15)"])
def test_more_than_r_wrong_symbols_are_lost_whatever_is_known(code: str) -> None:
    for seed in range(5):
        block = MemoryBlock(code, 512, seed)
        scattered(block, 300, block.geometry.r + 1, seed)
        outcome = decode(block)
        assert not outcome.correctable
        assert not outcome.known[~outcome.finished][:, 300].any()


@pytest.mark.parametrize("code", CODES)
def test_errors_and_erasures_share_r(code: str) -> None:
    """2 * errors + erasures <= r in every column, all digests withheld."""
    block = MemoryBlock(code)
    block.withheld[:] = True
    rng = np.random.default_rng(8)
    r = block.geometry.r
    erasures = r // 3
    for column in range(128):
        chosen = rng.choice(block.geometry.n, erasures + (r - erasures) // 2, replace=False)
        block.lost[chosen[:erasures], column] = True
    # Bursts that cover whole strips keep the inner words from helping.
    for strip in rng.choice(block.geometry.n, (r - erasures) // 2, replace=False):
        block.strips[strip] = rng.integers(0, 256, 128, np.uint8)
    decode(block)
    assert decode(block).correctable


# -- the guarantee ---------------------------------------------------------------------------------


@pytest.mark.parametrize("code", ["slim", "shelf", "stout", "RS(60,40)+EB(128,104)"])
@given(data=st.data())
@settings(max_examples=25)
def test_the_guarantee_of_generalised_minimum_distance(code: str, data: st.DataObject) -> None:
    """Forney 1966: floor((D d - 1) / 2) flips in the n words through a column, wherever, never defeat it.

    No digest helps. Words get just as many flips as deceive a bounded-distance decoder most: d - t (which
    may look like t), half of d (flagged), or a random number, all of them through one column.
    """
    block = MemoryBlock(code, 64)
    block.withheld[:] = True
    d, t = block.code.inner.d, block.code.inner.t
    left = (block.code.outer.distance * d - 1) // 2
    assert left == block.code.guaranteed_flips
    seed = data.draw(st.integers(0, 10_000))
    shape = data.draw(st.lists(st.sampled_from([d // 2, d - t, d - 1, d, 1]), min_size=1, max_size=4))
    rng = np.random.default_rng(seed)
    column = int(rng.integers(64))
    for number, strip in enumerate(rng.permutation(block.geometry.n).tolist()):
        flips = min(shape[number % len(shape)], left)
        if not flips:
            break
        left -= flips
        _, columns = block.word_of(strip, column)
        bits = [(int(c), b) for c in columns for b in range(8)]
        here = [i for i, (c, _) in enumerate(bits) if c == column]
        first = rng.choice(here)
        rest = rng.choice(np.setdiff1d(np.arange(len(bits)), [first]), flips - 1, replace=False)
        for i in (first, *rest):
            flip(block, strip, [bits[i][0]], 1 << bits[i][1])
    assert decode(block).known[:, column].all()


# -- feedback and other helps ----------------------------------------------------------------------


def test_what_other_members_vouch_for_is_never_altered() -> None:
    """Half of a cell belongs to a member whose SHA-256 agrees: those bytes are right whatever is decoded."""
    block = MemoryBlock("shelf")
    block.withheld[:] = True
    block.vouched[:100, :64] = True
    flip(block, 50, np.arange(64, 128), 0x11)
    outcome = is_back(block)
    assert not outcome.flips[:, :64].any()


@pytest.mark.parametrize("digests", [True, False])
def test_bursts_over_neighbouring_strips(digests: bool) -> None:
    """24 whole strips of 32 are noise: more than t, so that they have to be erased."""
    block = MemoryBlock("shelf", 4096)
    block.withheld[:] = not digests
    rng = np.random.default_rng(2)
    block.strips[100:124] = rng.integers(0, 256, (24, 4096), np.uint8)
    # A byte that noise left right by chance may be spoilt by the inner code, and then counts as wrong.
    assert is_back(block).margin == 1 - 24 / 32


@pytest.mark.parametrize(
    ("code", "rate"), [("slim", 0.002), ("shelf", 0.005), ("stout", 0.012), ("plain", 0.002)]
)
def test_scattered_flips_everywhere(code: str, rate: float) -> None:
    """Rates at which one pass and feedback lose next to nothing (measured); data and all parity are hit."""
    block = MemoryBlock(code, 4096)
    rng = np.random.default_rng(4)
    for array in (block.strips, block.inner_received):
        bits = rng.random((*array.shape, 8)) < rate
        array ^= np.packbits(bits, axis=-1)[..., 0]
    assert is_back(block).margin < 1  # Below 0 where feedback saved a column.


# -- margins by hand -------------------------------------------------------------------------------


def test_margin_counts_twice_what_is_wrong_and_once_what_is_erased() -> None:
    block = MemoryBlock("plain")
    block.lost[3, 10] = True
    flip(block, 4, [10])
    flip(block, 5, [10])
    flip(block, 6, [11])
    assert is_back(block).margin == 1 - 5 / 32


def test_margin_counts_a_burst_as_erasures() -> None:
    block = MemoryBlock("plain")
    flip(block, 3, np.arange(20, 60))
    assert is_back(block).margin == 1 - 1 / 32
    flip(block, 4, [30])
    assert is_back(block).margin == 1 - 3 / 32


def test_margin_is_counted_after_the_inner_code() -> None:
    block = MemoryBlock("stout")
    columns = block.word_of(9, 60)[1]
    flip(block, 9, columns[:2])
    assert is_back(block).margin == 1.0
    flip(block, 9, columns[5:6])
    assert is_back(block).margin == 1 - 2 / 48


# -- several blocks at once ----------------------------------------------------------------------------


class Joined:
    """Blocks as if they were one: the strips of block i have the numbers from i * n on."""

    def __init__(self, blocks: list[MemoryBlock]) -> None:
        self.blocks = blocks
        self.geometry, self.number = blocks[0].geometry, 0
        self.states = np.concatenate([block.states for block in blocks])

    def gather(self, name: str, numbers: np.ndarray) -> list[tuple[np.ndarray, np.ndarray | None]]:
        n = self.geometry.n
        parts = [numbers[numbers // n == i] - i * n for i in range(len(self.blocks))]
        return [getattr(block, name)(part) for block, part in zip(self.blocks, parts, strict=True)]

    def both(self, name: str, numbers: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        found = self.gather(name, numbers)
        masks = [np.zeros(a.shape, bool) if mask is None else mask for a, mask in found]
        return np.concatenate([a for a, _ in found]), np.concatenate(masks)

    def rows(self, numbers: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return self.both("rows", numbers)

    def inner(self, numbers: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return self.both("inner", numbers)

    def digests(self, numbers: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return self.both("digests", numbers)

    def pinned(self, numbers: np.ndarray) -> np.ndarray:
        n = self.geometry.n
        return np.concatenate(
            [b.vouched[numbers[numbers // n == i] - i * n] for i, b in enumerate(self.blocks)]
        )


@pytest.mark.parametrize("code", CODES)
def test_blocks_at_once_are_as_each_alone(code: str) -> None:
    """One clean, one with flips, a burst, lost ranges, one past all correction, one without digests."""
    rng = np.random.default_rng(17)
    blocks = [MemoryBlock(code, 640, seed) for seed in range(6)]
    n, r = blocks[0].geometry.n, blocks[0].geometry.r
    for block in (blocks[1], blocks[3], blocks[5]):
        for strip in rng.choice(n, n // 2, replace=False).tolist():
            flip(block, strip, rng.choice(640, 2, replace=False))
    blocks[2].strips[3 : 3 + r // 2] = rng.integers(0, 256, (r // 2, 640), np.uint8)
    blocks[3].lost[5, 100:300] = blocks[3].lost_inner[6] = True
    blocks[3].vouched[7] = True
    blocks[3].strips[7] = blocks[3].sent[7]
    blocks[4].strips[: 2 * r] ^= np.uint8(1)
    blocks[5].withheld[:] = True
    decoders = Decoders.of(blocks[0].code)
    together = decode_blocks(Joined(blocks), blocks, decoders)
    for block, outcome in zip(blocks, together, strict=True):
        alone = decode_block(block, decoders)
        for field in fields(alone):
            name = field.name
            np.testing.assert_array_equal(getattr(outcome, name), getattr(alone, name), name)
    assert [o.correctable for o in together[:3]] == [True] * 3
    assert not together[4].correctable
