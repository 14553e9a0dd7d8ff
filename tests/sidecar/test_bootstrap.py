"""The bootstrap record and its code; the marker's chances against the published figures."""

from __future__ import annotations

import hashlib
import struct
from dataclasses import fields, replace

import numpy as np
import pytest
import xxhash
from hypothesis import given
from hypothesis import strategies as st
from support import content, with_flips

from oakum.algebra.naming import NAMED, resolve_code
from oakum.errors import FormatError
from oakum.sidecar.bootstrap import (
    CODED_BYTES,
    HEAD_BYTES,
    MARKER,
    MARKER_ERRORS,
    RECORD_BYTES,
    Bootstrap,
    CodeParameters,
    decode,
    decode_all,
    encode,
    unpack,
)


def bootstrap(code: str = "shelf", **changes: object) -> Bootstrap:
    made = Bootstrap(
        CodeParameters.of(resolve_code(code)), 16, 3, 4_000_000, 1_000_000, 4544, 8192, 9_000_000, 777, 300,
        5, 2, 1, b"P" * 16, b"S" * 16, b"I" * 16, 7,
    )  # fmt: skip
    return replace(made, **changes)  # type: ignore[arg-type]


@pytest.mark.parametrize("code", [*NAMED, "RS(12,5)+EB(128,104)", "RS(255,223)+[128,112,6]"])
def test_pack_and_unpack(code: str) -> None:
    record = bootstrap(code)
    packed = record.pack()
    assert len(packed) == RECORD_BYTES == 200
    assert unpack(packed) == record
    assert record.code.code() == resolve_code(code)


def test_every_field_is_recorded() -> None:
    """No two records that differ in a field pack to the same bytes."""
    record = bootstrap()
    for f in fields(Bootstrap):
        value = getattr(record, f.name)
        if isinstance(value, bytes):
            other: object = b"?" * 16
        elif isinstance(value, int):
            other = value + 1
        else:
            other = CodeParameters.of(NAMED["stout"])
        assert replace(record, **{f.name: other}).pack() != record.pack(), f.name


def test_a_copy_is_under_two_kilobytes_and_very_redundant() -> None:
    """The sizes of oakum-sidecar(5). Singleton: RS(255,100) has distance 156 and corrects 77."""
    assert (CODED_BYTES, HEAD_BYTES) == (510, 518)
    assert encode(bootstrap().pack())[:RECORD_BYTES] == bootstrap().pack()


@given(st.integers(0, 77), st.integers(0, 77), st.integers(0, 1000))
def test_up_to_77_wrong_symbols_in_each_codeword(first: int, second: int, seed: int) -> None:
    record = bootstrap()
    right = np.frombuffer(encode(record.pack()), np.uint8)
    rng = np.random.default_rng(seed)
    received = right.copy()
    for codeword, count in enumerate((first, second)):
        places = 2 * rng.choice(255, count, replace=False) + codeword
        received[places] ^= rng.integers(1, 256, count, np.uint8)
    found = decode(received.tobytes())
    assert found is not None
    assert found[0] == record
    assert found[1] == int(np.bitwise_count(received ^ right).sum())


def test_many_copies_at_once() -> None:
    """Each is corrected by itself, whatever becomes of the others."""
    records = [bootstrap(stretch=i) for i in range(5)]
    copies = [encode(record.pack()) for record in records]
    copies[1] = with_flips(copies[1], 60, 1)
    copies[2] = content(CODED_BYTES)
    copies[4] = with_flips(copies[4], 60, 4)
    assert decode_all(copies) == [*records[:2], None, *records[3:]]
    assert decode_all([]) == []
    assert decode(copies[1]) == (records[1], 60)
    assert decode(copies[0]) == (records[0], 0)


def test_one_more_than_77_is_no_record() -> None:
    received = bytearray(encode(bootstrap().pack()))
    for i in range(78):
        received[2 * i] ^= 0x55
    assert decode(bytes(received)) is None


@given(st.binary(max_size=CODED_BYTES))
def test_rubbish_is_no_record(data: bytes) -> None:
    assert decode(data.ljust(CODED_BYTES, b"\0")) is None
    assert unpack(data) is None


def mended(record: bytes) -> bytes:
    """The record with a checksum that fits whatever stands in it."""
    return record[:-8] + struct.pack("<Q", xxhash.xxh3_64_intdigest(record[:-8]))


def test_a_newer_version_is_named() -> None:
    packed = bytearray(bootstrap().pack())
    packed[6] = 2
    with pytest.raises(
        FormatError, match="format version 2, this program reads up to 1; use a newer release"
    ):
        unpack(mended(bytes(packed)))
    with pytest.raises(FormatError, match="version 2"):
        decode(encode(mended(bytes(packed))))


@pytest.mark.parametrize("changes", [{"version": 0}, {"cell": 4095}, {"cell": 8192}, {"stretch": 16}])
def test_a_record_that_contradicts_itself_is_refused(changes: dict[str, int]) -> None:
    """Cells have 4,096 bytes, and sixteen stretches are numbered from 0 to 15."""
    with pytest.raises(FormatError, match="contradicts itself"):
        unpack(bootstrap(**changes).pack())
    assert unpack(bootstrap(stretch=15).pack()) == bootstrap(stretch=15)


def test_a_family_of_codes_that_there_is_not() -> None:
    """They are counted from 0, none, over 1, extended Hamming, to 2, extended BCH."""
    packed = bytearray(bootstrap("stout").pack())
    place = packed.index(bytes([2, 14, 2, 6]))  # Family, m, p and d of the code [128,112,6].
    packed[place] = 3
    with pytest.raises(FormatError, match="contradicts itself"):
        unpack(mended(bytes(packed)))


def test_a_code_whose_name_is_no_text() -> None:
    packed = bootstrap().pack().replace(b"shelf\0", b"sh\xe9lf\0")
    with pytest.raises(FormatError, match="names its code in no readable way"):
        unpack(mended(packed))


def test_bytes_that_are_almost_a_record_are_none() -> None:
    packed = bootstrap().pack()
    assert unpack(packed + b"more") == bootstrap()
    assert unpack(packed[:-1]) is None
    assert unpack(packed[:-1] + bytes([packed[-1] ^ 1])) is None
    assert unpack(mended(b"OAKUN" + packed[5:])) is None


@given(st.integers(6, RECORD_BYTES - 9), st.integers(1, 255))
def test_whatever_a_record_says_it_is_read_or_refused(place: int, change: int) -> None:
    """A wrong byte with a checksum that fits: a record that can be checked, or FormatError."""
    packed = bytearray(bootstrap().pack())
    packed[place] ^= change
    try:
        record = unpack(mended(bytes(packed)))
        assert record is not None
        record.geometry  # noqa: B018
        record.code.code()
    except FormatError:
        pass


def test_another_matrix_is_refused() -> None:
    record = bootstrap()
    other = replace(record.code, matrix_digest=record.code.matrix_digest ^ 1)
    with pytest.raises(FormatError, match="inner code of another matrix"):
        other.code()
    with pytest.raises(FormatError, match="inner code of another matrix"):
        replace(record.code, d=record.code.d + 2).code()
    with pytest.raises(FormatError, match="does not have"):
        replace(record.code, m=16).code()


def test_identity_is_a_hash_of_record_and_table() -> None:
    """Whatever describes the set changes it; the number of the copy does not. SHA-256 as in FIPS 180-4."""
    record = bootstrap(window=0)
    identified = record.identified(b"table")
    assert identified.identity == identified.set_identity != record.identity
    assert replace(record, stretch=9).identified(b"table").identity == identified.identity
    assert identified.identified(b"table") == identified
    assert record.identified(b"other").identity != identified.identity
    assert replace(record, length=999_999).identified(b"table").identity != identified.identity
    later = bootstrap(window=2).identified(b"table")
    assert later.set_identity == b"S" * 16
    plain = replace(record, stretch=0, identity=bytes(16), set_identity=bytes(16)).pack()[: 200 - 8 - 32]
    assert identified.identity == hashlib.sha256(b"oakum section\0" + plain + b"table").digest()[:16]


# -- the marker ------------------------------------------------------------------------------------


def test_marker_against_its_chances() -> None:
    """False matches and misses by the binomial distribution (computed; scipy as the oracle)."""
    from scipy.stats import binom

    assert (len(MARKER), MARKER_ERRORS) == (8, 10)
    assert binom.cdf(MARKER_ERRORS, 64, 0.5) == pytest.approx(1.0e-8, rel=0.05)
    assert binom.sf(MARKER_ERRORS, 64, 0.01) == pytest.approx(4.6e-11, rel=0.05)


def test_marker_is_unlike_itself_shifted() -> None:
    """Aperiodic autocorrelation: +-1 sequences, no sidelobe above 7 (a shift never looks like a marker)."""
    bits = 2 * np.unpackbits(np.frombuffer(MARKER, np.uint8)).astype(int) - 1
    sidelobes = np.correlate(bits, bits, "full")[:63]
    assert np.abs(sidelobes).max() <= 7


# -- digests through the code paths that use them --------------------------------------------------


def sanity_buffer(length: int) -> bytes:
    """The buffer of xxHash's own sanity check (seen, computed)."""
    out, value = bytearray(), 2_654_435_761
    for _ in range(length):
        out.append(value >> 56)
        value = value * 11_400_714_785_074_694_797 % (1 << 64)
    return bytes(out)


@pytest.mark.parametrize(
    ("length", "digest"),
    [(1, 0xC44BDFF4074EECDB), (403, 0xCDEB804D65C6DEA4), (2367, 0xCB37AEB9E5D361ED)],
)
def test_xxh3_vectors_through_cell_digests(length: int, digest: int) -> None:
    """XXH3-64, seed 0: test vectors of xxHash's sanity check (seen, computed)."""
    from oakum.digests import cell_digests

    data = np.frombuffer(sanity_buffer(length), np.uint8)
    assert cell_digests(data).tolist() == [digest]
    assert cell_digests(np.concatenate([np.zeros(4096, np.uint8), data])).tolist()[1] == digest


def test_xxh3_of_nothing_is_the_published_one() -> None:
    """Length 0: 2D06800538D394C2 (xxHash's sanity check; seen, computed); no cell has that length."""
    from oakum.digests import cell_digests

    assert xxhash.xxh3_64_intdigest(b"") == 0x2D06800538D394C2
    assert len(cell_digests(np.empty(0, np.uint8))) == 0


@pytest.mark.parametrize(
    ("message", "digest"),
    [
        (b"", "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"),
        (b"abc", "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"),
        (b"abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq",
         "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1"),
        (b"a" * 10**6, "cdc76e5c9914fb9281a1c7e284d73e67f1809a48a497200e046d39ccc7112cd0"),
    ],
)  # fmt: skip
def test_sha256_vectors_through_the_member_hasher(message: bytes, digest: str) -> None:
    """FIPS 180-4 examples (seen: first and last bytes of the million; the rest from memory, computed)."""
    from oakum.members import MemberHasher, Span

    hasher = MemberHasher()
    hasher.expect([Span(b"before", 0, 5), Span(b"m", 0, len(message)), Span(b"after", 0, 3)])
    stream = memoryview(content(5) + message + b"end")
    for start in range(0, len(stream), 4093):
        hasher.update(stream[start : start + 4093])
    assert hasher.digests[1].hex() == digest
    assert hasher.digests[0] == hashlib.sha256(content(5)).digest()
    assert hasher.digests[2] == hashlib.sha256(b"end").digest()
