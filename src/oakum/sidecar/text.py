"""The page of plain words at the top of a section, for whoever opens it in a pager in fifty years.

It is a function of the bootstrap record alone, so that it can be written again, byte for byte.
"""

from __future__ import annotations

from textwrap import fill

from oakum.sidecar.bootstrap import Bootstrap
from oakum.sidecar.layout import FRAME_CONTENT, TEXT_BYTES, Layout

WIDTH = 78

_TITLE = "OAKUM SIDECAR, format version {version}: PARITY FOR FILES KEPT IN COLD STORAGE"

_PARAGRAPHS = (
    """This file is not a copy of anything. With the parity in it, damaged bytes of the files that it
    belongs to can be found and put right; they lie beside it, or did. The program that wrote it is
    called oakum, its format page oakum-sidecar(5). Should both be lost, this is how it is read. Numbers
    are little endian, counting starts at 0, lengths are in bytes.""",
    """The files, end to end in the order of the member table, are a stream. This section is for its bytes
    {start} up to {end} (window {window}; sections for others may follow). The window is cut into {k}
    data strips of {depth} bytes, zeros after its end; {r} parity strips as long follow. The bytes at
    one place of all {n} strips are one codeword of the Reed-Solomon code RS({n},{k}) over GF(256),
    field polynomial {poly:#x}, roots a^(s*(f+j)) for j = 0 to {rlast}, a = x, s = {spacing}, f =
    {first}; strip i has the locator a^(s*({nlast}-i)).""",
    """Strips are cut into cells of {cell} bytes from their start. {inner}""",
    """A section is this page ({text} bytes) and {stretches} stretches, {distance} bytes apart. A stretch
    begins with the marker B9 77 0C 24 F6 05 8D 06 and the bootstrap record (200 bytes and 310 check
    bytes of RS(255,100), two codewords in turn), then {slice} bytes of records; at byte {prefix} of it
    begins a piece of {piece} bytes of the body. The pieces in order are the body: the parity strips one
    after the other ({parity} bytes), the inner parity of the data cells in the order of the stream
    ({datainner} bytes), then that of the parity cells, block by block.""",
    """Records are frames of 240 rows, RS(240,120) down the columns (same field, roots a^0 to a^119), 120
    rows of payload and 120 of check symbols; each stretch has {rows} rows of every frame. A payload is
    a checksum (XXH3-64 of the rest), 16 bytes of identity, frame number (4), track (2), two zeros, and
    content, at most {content} bytes. Tracks: 1 member table ({table} bytes); 2 digests (XXH3-64) of the
    data cells; 3 of the inner parity of data cut into cells; 4 of the parity cells, block by block; 5
    of their inner parity; 6 of every frame's check rows. A table entry: length (2), kind (1: 1 file, 2
    folder, 3 link), flag (1: ends here), mode (4), time in ns (8), size, offset and length of the piece
    (8 each), SHA-256 of the file up to the end of the piece (32), lengths of path and link target (2
    each), path, target.""",
    "A repaired file is right when its SHA-256 agrees. Nothing else is proof.",
)

_INNER = """In strip i the words of a cell begin at byte i mod {m} and wrap round inside it. A word is {m}
    bytes (the last of a cell has fewer) and {p} of inner parity, a codeword of the binary code
    [{bits},{data},{d}]. Its parity is the XOR of these {digits}-digit numbers, one for each bit of
    the word that is set, from bit 0 of byte 0 on: {columns}."""

_PLAIN = "There is no inner code."


def page(bootstrap: Bootstrap, layout: Layout) -> bytes:
    """The 4,096 bytes at the top of a section: text, then blanks, lines ended by a newline."""
    c, g = bootstrap.code, layout.geometry
    values = {
        "version": bootstrap.version, "start": bootstrap.start, "end": bootstrap.start + bootstrap.length,
        "window": bootstrap.window, "k": c.k, "r": c.n - c.k, "n": c.n, "depth": bootstrap.depth,
        "poly": c.field_poly, "rlast": c.n - c.k - 1, "spacing": c.root_spacing, "first": c.first_root,
        "nlast": c.n - 1, "cell": bootstrap.cell, "inner": _inner(bootstrap) if c.p else _PLAIN,
        "text": TEXT_BYTES, "stretches": layout.stretches, "distance": layout.stretch_bytes,
        "slice": layout.slice_bytes, "prefix": layout.prefix, "piece": layout.piece, "parity": g.parity_bytes,
        "datainner": g.data_inner, "rows": layout.rows, "content": FRAME_CONTENT,
        "table": layout.table_length,
    }  # fmt: skip
    parts = [_TITLE, *_PARAGRAPHS]
    text = "\n\n".join(fill(" ".join(part.format(**values).split()), WIDTH) for part in parts) + "\n"
    return text.encode("ascii").ljust(TEXT_BYTES - 1) + b"\n"


def _inner(bootstrap: Bootstrap) -> str:
    c = bootstrap.code
    columns = c.code().inner.check_columns[: c.m]
    matrix = " ".join("".join(f"{v:0{2 * c.p}x}" for v in row) for row in columns.tolist())
    return _INNER.format(
        m=c.m, p=c.p, bits=8 * (c.m + c.p), data=8 * c.m, d=c.d, digits=2 * c.p, columns=matrix
    )  # fmt: skip
