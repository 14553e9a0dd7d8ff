"""The format page man/oakum-sidecar.5: tables, hex and quotations against the program and the slow reader."""

import hashlib
import os
import re
import struct
from itertools import pairwise
from pathlib import Path

import pytest
import reedsolo
import xxhash

from oakum import plain_reader, protect
from oakum.algebra.inner import EXTENDED_BCH, EXTENDED_HAMMING, NONE, InnerCode
from oakum.algebra.naming import NAMED
from oakum.algebra.outer import OuterCode
from oakum.geometry import CELL, LARGE, MAX_LENGTH, SMALL
from oakum.sidecar import bootstrap, frames, layout
from oakum.sidecar.bootstrap import Bootstrap, CodeParameters
from oakum.sidecar.layout import Frame, Layout, Track
from oakum.sidecar.table import Kind, Piece

PAGE = (Path(__file__).parents[2] / "man" / "oakum-sidecar.5").read_text().replace(r"\-", "-")
PAGE = PAGE.replace(r"\(ha", "^")
FAMILIES = {0: NONE, 1: EXTENDED_HAMMING, 2: EXTENDED_BCH}


# -- reading the page ------------------------------------------------------------------------------------


def table(name: str) -> list[list[str]]:
    """The rows of all tables of that name, without their heads."""
    found = re.findall(rf'^\.\\" table: {name}\n\.TS\n(.*?)^\.TE', PAGE, re.M | re.S)
    assert found, f"the page has no table {name}"
    return [row.split("|") for part in found for row in part.splitlines()[5:]]


def block(label: str) -> list[str]:
    """The lines of the display of that label."""
    found = re.search(rf'^\.\\" {re.escape(label)}\n\.EX\n(.*?)^\.EE', PAGE, re.M | re.S)
    assert found, f"the page has no {label}"
    return found[1].splitlines()


def dump(name: str) -> bytes:
    """The bytes of an example that is given with offsets."""
    rows = [line.split("  ") for line in block(f"example: {name}")]
    data = b"".join(bytes.fromhex(digits) for _, digits in rows)
    assert [int(place, 16) for place, _ in rows] == list(range(0, len(data), 16))
    return data


def fields(name: str) -> dict[str, slice]:
    """Where each field of a record stands; together they leave no gap."""
    places = {row[2]: slice(int(row[0]), int(row[0]) + int(row[1])) for row in table(name)}
    assert all(a.stop == b.start for a, b in pairwise(places.values()))
    return places


def number(data: bytes) -> int:
    return int.from_bytes(data, "little")


# -- tables ----------------------------------------------------------------------------------------------


def test_constants() -> None:
    values = {row[0]: row[1] for row in table("constants")}
    assert bytes.fromhex(values.pop("MARKER")) == bootstrap.MARKER == plain_reader.MARKER
    code = {
        "MARKER_ERRORS": bootstrap.MARKER_ERRORS, "CELL": CELL, "TEXT": layout.TEXT_BYTES,
        "HEAD": bootstrap.HEAD_BYTES, "ROWS": layout.FRAME_ROWS, "PAYLOAD_ROWS": layout.PAYLOAD_ROWS,
        "FULL_WIDTH": layout.FRAME_WIDTH, "FRAME_HEADER": layout.FRAME_HEADER,
        "FULL_CONTENT": layout.FRAME_CONTENT, "SMALL": SMALL, "LARGE": LARGE,
        "MANY": layout.MANY, "LONGEST": MAX_LENGTH,
    }  # fmt: skip
    assert {name: int(value) for name, value in values.items()} == code
    assert {name: getattr(plain_reader, name) for name in code} == code


def test_bootstrap_record() -> None:
    """A record whose fields are all different, read at the places that the page gives."""
    code = CodeParameters("a name", 101, 99, 0x187, 112, 11, EXTENDED_BCH, 14, 2, 6, 0x1122334455667788)
    record = Bootstrap(
        code, stretches=48, window=2**33 + 1, start=2**34 + 2, length=2**35 + 3, depth=2**36 + 4,
        set_depth=2**37 + 5, stream_length=2**38 + 6, section_offset=2**39 + 7, table_length=2**40 + 8,
        body_digest=2**41 + 9, entries=2**25 + 10, flags=3, parent=b"p" * 16, set_identity=b"s" * 16,
        identity=b"i" * 16, stretch=47,
    )  # fmt: skip
    expected: dict[str, int | bytes] = {
        "magic": b"OAKUM\0", "name": b"a name".ljust(32, b"\0"), "parent": b"p" * 16,
        "set_identity": b"s" * 16, "identity": b"i" * 16, "field_polynomial": 0x187, "family": 2,
    }  # fmt: skip
    for owner in (code, record):
        expected |= {
            f: v
            for f in fields("bootstrap")
            if f not in expected and isinstance(v := getattr(owner, f, None), int)
        }
    packed = record.pack()
    expected["checksum"] = xxhash.xxh3_64_intdigest(packed[:192])
    places = fields("bootstrap")
    found = {
        f: packed[at] if isinstance(expected[f], bytes) else number(packed[at]) for f, at in places.items()
    }
    assert found == expected
    assert len(packed) == max(at.stop for at in places.values()) == plain_reader.RECORD.size
    assert tuple(places) == plain_reader.Bootstrap._fields


def test_frame_header() -> None:
    frame = Frame(Track.PARITY, 259, 100, 2, 0)
    payload = frames.payload(frame, bytes(range(100)), b"i" * 16).tobytes()
    found = {field: payload[at] for field, at in fields("frame").items()}
    assert number(found.pop("checksum")) == xxhash.xxh3_64_intdigest(payload[8:])
    assert found == {"identity": b"i" * 16, "number": b"\3\1\0\0", "track": b"\4\0", "reserved": b"\0\0"}
    assert payload[layout.FRAME_HEADER :] == bytes(range(100)) + bytes(240 - 132)


def test_table_entry() -> None:
    piece = Piece(Kind.FILE, b"a/b", 0o640, -5, 1000, 300, 700, True, b"d" * 32, b"target")
    packed = piece.pack()
    places = fields("entry")
    found = {field: packed[at] for field, at in places.items()}
    assert found.pop("digest") == b"d" * 32
    assert int.from_bytes(found.pop("modified_ns"), "little", signed=True) == -5
    assert {field: number(value) for field, value in found.items()} == {
        "total": 76 + 3 + 6, "kind": 1, "flags": 1, "mode": 0o640, "size": 1000, "offset": 300, "length": 700,
        "path_length": 3, "target_length": 6,
    }  # fmt: skip
    assert packed[max(at.stop for at in places.values()) :] == b"a/btarget"
    assert (*places, "path", "target") == plain_reader.Piece._fields


def test_tracks() -> None:
    rows = {row[1]: int(row[0]) for row in table("tracks")}
    assert rows == {track.name: track.value for track in Track}
    assert rows == {name: getattr(plain_reader, name) for name in rows}


def test_codes() -> None:
    rows = {row[0]: [int(value) for value in row[1:]] for row in table("codes")}
    assert set(rows) == set(NAMED)
    for name, (n, k, family, m, p, d) in rows.items():
        inner = InnerCode(FAMILIES[family], m, p)
        assert (NAMED[name].outer, NAMED[name].inner, inner.d) == (OuterCode(n, k, 0x11D, 0, 1), inner, d)
    assert len(table("families")) == len(FAMILIES)


@pytest.mark.parametrize(("family", "m", "p"), [(1, 15, 1), (2, 14, 2), (2, 13, 3)])
def test_check_columns(family: int, m: int, p: int) -> None:
    columns = [int(column, 16) for line in block(f"columns: {family} {m} {p}") for column in line.split()]
    assert columns == InnerCode(FAMILIES[family], m, p).check_columns[:m].ravel().tolist()
    assert columns == plain_reader.InnerCode(family, m, p).columns[: 8 * m]
    assert columns == (hamming_columns() if family == 1 else bch_columns(p))


def test_digest_vectors() -> None:
    """xxHash's own sanity check (seen, computed)."""
    for length, digest in table("vectors"):
        generator, data = 2654435761, bytearray()
        for _ in range(int(length)):
            data.append(generator >> 56)
            generator = generator * 11400714785074694797 % 2**64
        assert xxhash.xxh3_64_hexdigest(data).upper() == digest


# -- the constructions of the page, step by step in plain integers -----------------------------------------


def hamming_columns() -> list[int]:
    def rotated(byte: int, by: int) -> int:
        return (byte << by | byte >> 8 - by) & 255

    odd = [c for c in range(256) if c.bit_count() % 2 and c.bit_count() >= 3]
    least = [c for c in odd if c == min(rotated(c, by) for by in range(8))]
    return [rotated(c, b) for c in least for b in range(8)]


def times(x: int, y: int) -> int:
    """The product in GF(128), a^7 = a^3 + 1."""
    product = 0
    for bit in range(7):
        product ^= (x << bit) * (y >> bit & 1)
    for bit in range(13, 6, -1):
        product ^= (0b10001001 << bit - 7) * (product >> bit & 1)
    return product


def power(x: int, exponent: int) -> int:
    result = 1
    for _ in range(exponent):
        result = times(result, x)
    return result


def trace(x: int) -> int:
    total = 0
    for _ in range(7):
        total ^= x
        x = times(x, x)
    assert total in (0, 1)
    return total


def bch_columns(p: int) -> list[int]:
    positions = [0] + [power(2, i) for i in range(127)]
    columns = []
    for x in positions:
        parts = [(1, 1), *((power(x, s), 7) for s in range(1, 2 * p, 2))]
        parts += {2: [(trace(power(x, 5)), 1)], 3: [(trace(times(c, power(x, 7))), 1) for c in (1, 2)]}[p]
        column = shift = 0
        for value, width in parts:
            column |= value << shift
            shift += width
        columns.append(column)
    return systematic(columns, 8 * p)


def systematic(columns: list[int], r: int) -> list[int]:
    """Message columns in the basis of the last independent columns, by elimination over GF(2)."""
    basis: dict[int, tuple[int, int]] = {}  # by leading bit: a vector, and which chosen columns make it up
    chosen: list[int] = []

    def reduce(vector: int) -> tuple[int, int]:
        made_of = 0
        while vector and vector.bit_length() in basis:
            other, parts = basis[vector.bit_length()]
            vector, made_of = vector ^ other, made_of ^ parts
        return vector, made_of

    for position in reversed(range(len(columns))):
        rest, made_of = reduce(columns[position])
        if rest:
            basis[rest.bit_length()] = (rest, made_of | 1 << len(chosen))
            chosen.append(position)
    assert len(chosen) == r
    parity = sorted(chosen)
    message = []
    for position in sorted(set(range(len(columns))) - set(chosen)):
        made_of = reduce(columns[position])[1]
        message.append(sum(1 << parity.index(c) for i, c in enumerate(chosen) if made_of >> i & 1))
    return message


# -- the worked example ----------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def sidecar(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    """The sidecar of the example, as the program writes it."""
    path = tmp_path_factory.mktemp("example") / "tide.txt"
    path.write_bytes(content())
    path.chmod(0o644)
    os.utime(path, ns=(1_767_225_600 * 10**9,) * 2)  # 2026-01-01 00:00 UTC
    return protect([path]).sidecar.read_bytes()


def content() -> bytes:
    text = "\n".join(block("example: content")) + "\n"
    assert f"holds the {len(text)} bytes" in " ".join(PAGE.split())
    return text.encode("ascii")


def example_numbers() -> dict[str, int]:
    return {row[0]: int(row[1]) for row in table("numbers")}


def test_example_numbers(sidecar: bytes) -> None:
    found = bootstrap.unpack(dump("head")[8:208])
    assert found is not None
    place, g = Layout(found.geometry, found.table_length), found.geometry
    assert example_numbers() == {
        "depth S": g.depth, "blocks B": g.blocks, "data cells that count": g.data_cells,
        "group of a cell": g.group(0), "body": g.body, "stretches": place.stretches,
        "slice": place.slice_bytes, "prefix": place.prefix, "piece": place.piece, "section": place.size,
    }  # fmt: skip
    assert len(sidecar) == place.size


def test_example_head(sidecar: bytes) -> None:
    head = dump("head")
    assert sidecar[4096 : 4096 + len(head)] == head
    record = head[8:208]
    digest = hashlib.sha256(b"oakum section\0" + record[:160] + dump("frame")[32:116]).digest()
    assert record[fields("bootstrap")["identity"]] == digest[:16]


def test_example_frame(sidecar: bytes) -> None:
    payload = dump("frame")
    numbers = example_numbers()
    step = numbers["prefix"] + numbers["piece"]
    rows = b"".join(sidecar[4096 + t * step + 518 :][:60] for t in range(4))
    assert rows[:120] == payload
    assert rows[120:] == bytes(reedsolo.RSCodec(120, nsize=240).encode(payload)[120:])
    entry = payload[32:116]
    assert entry[fields("entry")["digest"]] == hashlib.sha256(content()).digest()
    assert entry[76:] == b"tide.txt"


def test_example_words(sidecar: bytes) -> None:
    strips = content().ljust(128, b"\0")
    body = example_body(sidecar)
    groups = body[32 * 64 :]
    hamming = InnerCode(EXTENDED_HAMMING, 15, 1)
    for line in block("example: words"):
        place, message, parity = line.split("  ")
        i, w = map(int, place.split())
        cell = strips[64 * i : 64 * i + 64]
        word = bytes(cell[(i + w * 15 + c) % 64] for c in range(15) if w * 15 + c < 64)
        assert word == bytes.fromhex(message)
        assert groups[5 * i + w] == number(bytes.fromhex(parity))
        syndrome = 0
        for t, byte in enumerate(word.ljust(15, b"\0") + bytes.fromhex(parity)):
            for b in range(8):
                syndrome ^= int(hamming.check_columns[t, b]) * (byte >> b & 1)
        assert syndrome == 0


def test_example_column(sidecar: bytes) -> None:
    lines = [line.split("  ", 1) for line in block("example: column")]
    data = b"".join(bytes.fromhex(digits) for kind, digits in lines if kind == "data")
    parity = b"".join(bytes.fromhex(digits) for kind, digits in lines if kind == "parity")
    assert data == bytes([content()[0], content()[64]])
    assert parity == example_body(sidecar)[: 32 * 64 : 64]
    # reedsolo as an outside encoder: field polynomial 0x11D, first root alpha^0
    assert parity == bytes(reedsolo.RSCodec(32, fcr=0, prim=0x11D).encode(data.ljust(223, b"\0"))[223:])


def example_body(sidecar: bytes) -> bytes:
    numbers = example_numbers()
    step = numbers["prefix"] + numbers["piece"]
    pieces = (sidecar[4096 + t * step + numbers["prefix"] :][: numbers["piece"]] for t in range(4))
    return b"".join(pieces)[: numbers["body"]]


# -- the slow reader quotes the page ---------------------------------------------------------------------


def quotations() -> list[str]:
    """The comments of the reader that quote, each as one line of words."""
    found = re.findall(r"(?:^ *# > .*\n)+", Path(plain_reader.__file__).read_text(), re.M)
    return [" ".join(re.sub(r"^ *# > (?:\d\. )?", "", quotation, flags=re.M).split()) for quotation in found]


def test_the_reader_quotes_the_page() -> None:
    text = " ".join(" ".join(line for line in PAGE.splitlines() if not line.startswith(".")).split())
    quoted = quotations()
    assert len(quoted) > 30
    for quotation in quoted:
        assert quotation in text


def test_the_reader_follows_the_order_of_the_page() -> None:
    headings = [heading.strip('"') for heading in re.findall(r"^\.SH (.*)", PAGE, re.M)]
    order = [
        "CONVENTIONS",
        "GEOMETRY",
        "OUTER CODE",
        "INNER CODES",
        "DIGESTS",
        "SECTIONS",
        "BOOTSTRAP",
        "RECORDS",
        "FINDING",
        "DECODING",
    ]
    source = Path(plain_reader.__file__).read_text()
    sections = re.findall(r"^ *# == (?:THE )?(.*?) =", source, re.M)
    for titles in (headings, sections):
        places = [next(i for i, title in enumerate(titles) if title.startswith(name)) for name in order]
        assert places == sorted(places)


def test_the_struct_formats_of_the_reader_are_those_of_the_page() -> None:
    for name, record in (("bootstrap", plain_reader.RECORD), ("entry", plain_reader.ENTRY)):
        sizes = [struct.calcsize("<" + code) for code in re.findall(r"\d*s|[A-Za-z]", record.format[1:])]
        assert sizes == [at.stop - at.start for at in fields(name).values()]
