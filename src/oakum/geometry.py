"""Where everything is: stream, window, strip, column, cell, block and word, as pure arithmetic.

The rule of this module: integers in, integers out. No I/O, no arrays of data. A `Geometry` that exists
is valid, and a valid geometry is the only way to a kernel; sizes are Python integers and cannot overflow.

The terms are those of the format page. A window of `length` stream bytes is cut into k data strips of
`depth` bytes (the last ones may be partly or wholly virtual zeros); r parity strips of the same depth
complete it. Strips are cut into cells of 4,096 bytes from their start, and the cells at one place of all
strips are a block.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

from oakum.errors import FormatError, UsageError

CELL = 4096
"""Bytes in a cell (the last one of a strip may be shorter)."""

LARGE = 64 << 20
"""From this window length on, depths and places in the sidecar are multiples of a cell."""

SMALL = 64 << 10
"""Windows below this length have no digests of cells: there the SHA-256 alone decides."""

MAX_LENGTH = 1 << 60
"""No window or stream is longer; a record that says otherwise is refused."""


def round_up(value: int, unit: int) -> int:
    """The least multiple of `unit` that is at least `value`."""
    return -(-value // unit) * unit


def alignment(length: int) -> int:
    """The unit, in bytes, to which the depth of a window of `length` bytes is rounded up."""
    return CELL if length >= LARGE else 64


def whole_depth(length: int, k: int) -> int:
    """The depth in bytes that makes `length` bytes one window of k data strips."""
    return round_up(-(-length // k), alignment(length))


def window_depth(length: int, k: int, depth: int) -> int:
    """The depth of a window of `length` bytes in a set cut at `depth`: less only where it is not full."""
    return min(depth, whole_depth(length, k))


@dataclass(frozen=True)
class Window:
    """One window of the stream: its number, its place in the stream and its depth, in bytes."""

    index: int
    start: int
    length: int
    depth: int


def plan_windows(length: int, k: int, depth: int | None) -> tuple[Window, ...]:
    """Cut a stream of known `length` bytes into windows of k strips of `depth` bytes (None: one window).

    Raises UsageError for a depth that no window can have.
    """
    step = k * check_depth(depth) if depth is not None else max(length, 1)
    windows = []
    for index, start in enumerate(range(0, max(length, 1), step)):
        size = min(step, length - start)
        windows.append(Window(index, start, size, window_depth(size, k, depth or MAX_LENGTH)))
    return tuple(windows)


def check_depth(depth: int) -> int:
    """`depth` itself when a window can have it; UsageError when not."""
    if depth < CELL or depth % CELL:
        raise UsageError(f"a depth of {depth} bytes cannot be used; give a multiple of {CELL} bytes")
    return depth


@dataclass(frozen=True)
class Run:
    """Consecutive cells of one data strip: the strip, its first block, the place and length in the window."""

    strip: int
    block: int
    start: int
    length: int


@dataclass(frozen=True)
class Geometry:
    """The geometry of one window: n strips, k of them data, of `depth` bytes; words of m + p bytes.

    Raises FormatError when the numbers do not fit each other, so that whatever was read from a
    sidecar is checked here once and for all.
    """

    n: int
    k: int
    m: int
    p: int
    length: int
    depth: int

    def __post_init__(self) -> None:
        sound = (
            0 < self.k < self.n <= 255
            and (self.p == 0 or 0 < self.m <= 32)
            and 0 <= self.p <= 4
            and 0 <= self.length <= MAX_LENGTH
            and self.depth % 64 == 0
            and self.length <= self.k * self.depth
            # An empty window has depth zero, any other no more than its last strip needs.
            and self.depth <= whole_depth(self.length, self.k)
        )
        if not sound:
            raise FormatError("the sidecar's record of its geometry contradicts itself")

    # -- strips and cells ----------------------------------------------------------------------

    @property
    def r(self) -> int:
        """Number of parity strips."""
        return self.n - self.k

    @property
    def blocks(self) -> int:
        """Number of blocks, which is the number of cells in a strip."""
        return -(-self.depth // CELL)

    @property
    def digested(self) -> bool:
        """Whether cells have digests."""
        return self.length >= SMALL

    def width(self, block: int) -> int:
        """Length in bytes of the cells of one block, which is its number of columns."""
        return min(CELL, self.depth - block * CELL)

    def strip_length(self, strip: int) -> int:
        """Bytes of data strip `strip` that are in the stream; what is missing to `depth` is virtual."""
        return max(0, min(self.depth, self.length - strip * self.depth))

    @cached_property
    def data_cells(self) -> int:
        """Number of cells of data strips that hold at least one byte of the stream."""
        if not self.depth:
            return 0
        full, rest = divmod(self.length, self.depth)
        return full * self.blocks + -(-rest // CELL)

    def cell_number(self, strip: int, block: int) -> int:
        """Number of a data cell in the order of the stream."""
        return strip * self.blocks + block

    def cell_place(self, number: int) -> tuple[int, int]:
        """Strip and block of data cell `number`."""
        return divmod(number, self.blocks)

    def cell_start(self, number: int) -> int:
        """Offset in the window of data cell `number`."""
        strip, block = divmod(number, self.blocks)
        return strip * self.depth + block * CELL

    def cell_at(self, offset: int) -> int:
        """Number of the data cell that holds byte `offset` of the window."""
        strip, inside = divmod(offset, self.depth)
        return strip * self.blocks + inside // CELL

    @property
    def cells_end(self) -> int:
        """Offset in the window at which the last cell that holds a byte of the stream ends."""
        if not self.data_cells:
            return 0
        strip, block = self.cell_place(self.data_cells - 1)
        return strip * self.depth + block * CELL + self.width(block)

    def chunks(self, size: int, start: int = 0, end: int | None = None) -> Iterator[tuple[int, int]]:
        """Ranges (start, stop) of at most `size` bytes, all ends of cells, that make up the window.

        With `start` and `end`, which are ends of cells too, that part of the window.
        """
        end = self.cells_end if end is None else end
        while start < end:
            stop = min(end, start + size)
            if stop < end:
                strip, inside = divmod(stop, self.depth)
                stop = strip * self.depth + inside // CELL * CELL
            yield start, stop
            start = stop

    def runs(self, start: int, stop: int, limit: int) -> Iterator[Run]:
        """Cut the bytes start..stop-1 (ends of cells both) into runs of at most `limit` bytes."""
        while start < stop:
            strip, inside = divmod(start, self.depth)
            length = min(stop - start, self.depth - inside, limit)
            yield Run(strip, inside // CELL, start, length)
            start += length

    # -- words and inner parity ------------------------------------------------------------------

    def stagger(self, strip: int) -> int:
        """Byte of a cell at which its first word begins; the words wrap round inside the cell.

        No cell is shorter than 64 bytes, so that every cell has room for the rotation (m is at most 32).
        """
        return strip % self.m if self.p else 0

    def group(self, block: int) -> int:
        """Bytes of inner parity of one cell of a block."""
        return self.p * -(-self.width(block) // self.m) if self.p else 0

    @cached_property
    def full_group(self) -> int:
        """Bytes of inner parity of a cell of the first block, which has the greatest width."""
        return self.group(0) if self.depth else 0

    @cached_property
    def strip_inner(self) -> int:
        """Bytes of inner parity of one whole strip."""
        if not self.depth:
            return 0
        return (self.blocks - 1) * self.full_group + self.group(self.blocks - 1)

    def inner_start(self, strip: int, block: int) -> int:
        """Offset of a data cell's inner parity in the inner parity of all data cells (stream order)."""
        return strip * self.strip_inner + block * self.full_group

    @cached_property
    def data_inner(self) -> int:
        """Bytes of inner parity of all data cells that hold a byte of the stream."""
        if not self.data_cells:
            return 0
        strip, block = self.cell_place(self.data_cells - 1)
        return self.inner_start(strip, block) + self.group(block)

    def parity_inner_start(self, row: int, block: int) -> int:
        """Offset of a parity cell's inner parity in that of all parity cells (block by block)."""
        return block * self.r * self.full_group + row * self.group(block)

    @property
    def parity_inner(self) -> int:
        """Bytes of inner parity of all parity cells."""
        return self.r * self.strip_inner

    # -- the body of the sidecar: parity strips, inner parity of data, inner parity of parity ------

    @property
    def parity_bytes(self) -> int:
        """Bytes of all parity strips, one strip after the other."""
        return self.r * self.depth

    @property
    def body(self) -> int:
        """Bytes of the body: parity strips, then inner parity of data, then inner parity of parity."""
        return self.parity_bytes + self.data_inner + self.parity_inner

    @property
    def guaranteed_burst(self) -> int:
        """Length in bytes of the contiguous loss that is repairable anywhere in the window."""
        return max(0, self.r * self.depth - 2 * CELL)
