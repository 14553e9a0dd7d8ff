"""How fast the strip map, the parity encoder and the word codec are, as ratios of runs that take turns.

    python tests/benchmarks/bench_stripmap.py

Megabytes of source a second of CPU time, one thread. They mean little on a shared machine; only the ratios
of one run hold. The others encode the same RS(255,223) data: `galois`, `reedsolo`, and the storage library
libisal where it is installed, called on whole rows and on pieces of 64 bytes.
"""

from __future__ import annotations

import ctypes
import ctypes.util
import statistics
import time
from collections.abc import Callable
from functools import partial

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.inner import InnerCode
from oakum.algebra.outer import OuterCode
from oakum.kernels import tiers
from oakum.kernels.parity import ParityEncoder
from oakum.kernels.stripmap import StripMap
from oakum.kernels.words import WordCodec

CODE = OuterCode(255, 223)
LENGTH = 60 * 1024
ROUNDS = 9
GALOIS_COLUMNS = 2000

Bytes = NDArray[np.uint8]


def rows(count: int, length: int, seed: int) -> Bytes:
    """Random rows at a distance that is no multiple of 4096, which would alias in the cache."""
    return np.random.default_rng(seed).integers(0, 256, (count, length + 64), dtype=np.uint8)[:, :length]


class StorageLibrary:
    """The same map by libisal, which takes arrays of row addresses; `piece` columns a call."""

    def __init__(self, library: ctypes.CDLL, source: Bytes, out: Bytes, piece: int) -> None:
        self.library, self.piece, self.arrays = library, piece, (source, out)
        self.inputs, self.rows = len(source), len(out)
        self.tables = ctypes.create_string_buffer(32 * self.inputs * self.rows)
        matrix = np.ascontiguousarray(CODE.parity_matrix)
        library.ec_init_tables(self.inputs, self.rows, ctypes.c_void_p(matrix.ctypes.data), self.tables)
        starts = range(0, source.shape[1], piece)
        self.calls = [(addresses(source, at), addresses(out, at)) for at in starts]

    def __call__(self) -> None:
        encode = self.library.ec_encode_data
        for source, out in self.calls:
            encode(self.piece, self.inputs, self.rows, self.tables, source, out)


def addresses(array: Bytes, column: int) -> ctypes.Array[ctypes.c_void_p]:
    first, stride = array.ctypes.data + column, array.strides[0]
    return (ctypes.c_void_p * len(array))(*(first + i * stride for i in range(len(array))))


def galois_encoder(source: Bytes) -> Callable[[], object]:
    import galois
    import numba

    numba.set_num_threads(1)
    code = galois.ReedSolomon(255, 223, c=0)
    messages = code.field(source[:, :GALOIS_COLUMNS].T.copy())
    return lambda: code.encode(messages, output="parity")


def reedsolo_encoder(source: Bytes) -> Callable[[], object]:
    from reedsolo import RSCodec

    codec = RSCodec(CODE.r, nsize=CODE.n, prim=CODE.field_poly, fcr=CODE.first_root)
    messages = np.ascontiguousarray(source[:, :GALOIS_COLUMNS].T).tobytes()
    return lambda: codec.encode(messages)


def strip_map_runs() -> dict[str, tuple[int, Callable[[], object]]]:
    """Name: bytes of source in one call, and the call."""
    source, out = rows(CODE.k, LENGTH, 1), rows(CODE.r, LENGTH, 2)
    maps = {tier: StripMap(CODE.parity_matrix, tier=tier) for tier in tiers.available_tiers()}
    runs: dict[str, tuple[int, Callable[[], object]]] = {}
    for tier, map_ in maps.items():
        runs[f"strip map, {tier}"] = (source.size, lambda map_=map_: map_.apply(source, out))
        map_.apply(source, out)
    for tier in maps:
        encoder, ours = ParityEncoder(CODE, tier), rows(CODE.r, LENGTH, 6)
        if encoder.transform is not None:
            runs[f"parity by moments, {tier}"] = (source.size, partial(encoder.apply, source, ours))
            encoder.apply(source, ours)
            assert np.array_equal(ours, out)
    name = ctypes.util.find_library("isal")
    if name:
        library, theirs = ctypes.CDLL(name), rows(CODE.r, LENGTH, 3)
        for piece, label in ((LENGTH, "whole rows"), (64, "pieces of 64 bytes")):
            run = StorageLibrary(library, source, theirs, piece)
            run()
            assert np.array_equal(theirs, out)
            runs[f"libisal, {label}"] = (source.size, run)
    runs["galois encode"] = (CODE.k * GALOIS_COLUMNS, galois_encoder(source))
    runs["reedsolo encode"] = (CODE.k * GALOIS_COLUMNS, reedsolo_encoder(source))
    return runs


def word_codec_runs() -> dict[str, tuple[int, Callable[[], object]]]:
    runs: dict[str, tuple[int, Callable[[], object]]] = {}
    data, staggers = rows(64, 64 * 1024, 4), range(64)
    for inner in InnerCode.known():
        for tier in tiers.available_tiers():
            codec = WordCodec(inner, tier)
            out = np.empty((64, 16 * codec.group_size(4096)), np.uint8)
            runs[f"inner parity {inner.notation}, {tier}"] = (
                data.size,
                lambda codec=codec, out=out: codec.parity_rows(data, staggers, out),
            )
        cells, parity = data[:, :4096].copy(), np.ascontiguousarray(out[:, : codec.group_size(4096)])
        status = np.empty((64, codec.words(4096)), np.uint8)
        codec.parity_rows(cells, staggers, parity)
        noise = np.packbits(np.random.default_rng(5).random((64, 8 * 4096)) < 1e-3, axis=1)
        best = WordCodec(inner)
        runs[f"inner decoding {inner.notation}, flip rate 1e-3"] = (
            cells.size,
            lambda best=best, cells=cells, parity=parity, noise=noise, status=status: best.correct(
                cells ^ noise, parity.copy(), staggers, status
            ),
        )
    return runs


def measure(runs: dict[str, tuple[int, Callable[[], object]]]) -> dict[str, float]:
    """Median bytes a second of CPU time of each.

    They take turns; each runs twice and the second time counts, so that what its neighbour left of the
    caches does not.
    """
    seconds: dict[str, list[float]] = {name: [] for name in runs}
    for _ in range(ROUNDS):
        for name, (_, run) in runs.items():
            run()
            start = time.process_time()
            run()
            seconds[name].append(time.process_time() - start)
    return {name: size / statistics.median(seconds[name]) for name, (size, _) in runs.items()}


def main() -> None:
    for runs, yardstick in ((strip_map_runs(), "galois encode"), (word_codec_runs(), "")):
        speeds = measure(runs)
        unit = speeds.get(yardstick, next(iter(speeds.values())))
        yardstick = yardstick or next(iter(speeds))
        print(f"\n{'':44}{'MB/s':>8}   times {yardstick}")
        for name, speed in speeds.items():
            print(f"{name:44}{speed / 1e6:8.1f}   {speed / unit:.2f}")


if __name__ == "__main__":
    main()
