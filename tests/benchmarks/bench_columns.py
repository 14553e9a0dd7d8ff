"""How fast the column decoder is, as ratios of runs that take turns.

    python tests/benchmarks/bench_columns.py

Every column of RS(255,223) has the same number of wrong symbols, at places of its own; decoding includes the
syndromes. All run in one thread; `galois` would otherwise take one a core. Megabytes of source a second mean
little on a shared machine, only the ratios of one run hold.
"""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.outer import OuterCode
from oakum.kernels import tiers
from oakum.kernels.columns import ColumnDecoder

CODE = OuterCode(255, 223)
COLUMNS = 4096
GALOIS_COLUMNS = 200
ROUNDS = 7

Bytes = NDArray[np.uint8]


def wrong_symbols(count: int, seed: int) -> Bytes:
    """Error patterns uint8[n, COLUMNS], at a row distance that is no multiple of 4096."""
    rng = np.random.default_rng(seed)
    pattern = np.zeros((CODE.n, COLUMNS + 64), dtype=np.uint8)[:, :COLUMNS]
    places = np.argsort(rng.random(pattern.shape), axis=0)[:count]
    np.put_along_axis(pattern, places, rng.integers(1, 256, places.shape, dtype=np.uint8), axis=0)
    return pattern


def decoding(decoder: ColumnDecoder, pattern: Bytes, erased: Bytes | None = None) -> Callable[[], None]:
    def run() -> None:
        decoder.decode(decoder.syndromes(pattern), erased)

    magnitudes, _ = decoder.decode(decoder.syndromes(pattern), erased)
    assert np.array_equal(magnitudes, pattern)
    return run


def galois_decoding(pattern: Bytes) -> Callable[[], None]:
    import galois
    import numba

    numba.set_num_threads(1)
    field = galois.GF(2**8, irreducible_poly=CODE.field_poly)
    code = galois.ReedSolomon(CODE.n, CODE.k, field=field, alpha=field(2), c=CODE.first_root)
    words = field(pattern[:, :GALOIS_COLUMNS].T.copy())

    def run() -> None:
        assert not code.decode(words).any()

    return run


def reedsolo_decoding(pattern: Bytes) -> Callable[[], None]:
    from reedsolo import RSCodec

    codec = RSCodec(CODE.r, nsize=CODE.n, prim=CODE.field_poly, fcr=CODE.first_root)
    words = np.ascontiguousarray(pattern[:, :GALOIS_COLUMNS].T).tobytes()

    def run() -> None:
        assert not any(codec.decode(words)[0])

    return run


def column_runs() -> dict[str, tuple[Callable[[], None], int]]:
    """Name: the call, and its number of columns; ours by tier, then the two libraries."""
    runs: dict[str, tuple[Callable[[], None], int]] = {}
    for tier in tiers.available_tiers():
        decoder = ColumnDecoder(CODE, tier)
        for count in (0, 1, 4, 16):
            runs[f"{tier}, {count} wrong"] = decoding(decoder, wrong_symbols(count, seed=count)), COLUMNS
        pattern = wrong_symbols(16, seed=16)
        marks = (pattern != 0).astype(np.uint8)
        runs[f"{tier}, 16 erased"] = decoding(decoder, pattern, marks), COLUMNS
    few = wrong_symbols(16, seed=16)
    runs["galois, 16 wrong"] = galois_decoding(few), GALOIS_COLUMNS
    runs["reedsolo, 16 wrong"] = reedsolo_decoding(few), GALOIS_COLUMNS
    return runs


def megabytes_per_second(runs: dict[str, tuple[Callable[[], None], int]]) -> dict[str, float]:
    """The median of each over rounds in which all take turns; the int is a run's number of columns.

    Each runs twice and the second time counts, so that what its neighbour left of the caches does not.
    """
    seconds: dict[str, list[float]] = {name: [] for name in runs}
    for _ in range(ROUNDS):
        for name, (run, _) in runs.items():
            run()
            start = time.perf_counter()
            run()
            seconds[name].append(time.perf_counter() - start)
    return {
        name: CODE.k * columns / statistics.median(seconds[name]) / 1e6 for name, (_, columns) in runs.items()
    }


def main() -> None:
    rates = megabytes_per_second(column_runs())
    slowest = rates["galois, 16 wrong"]
    for name, rate in rates.items():
        print(f"{name:24}{rate:9.1f} MB/s{rate / slowest:8.1f} x galois")


if __name__ == "__main__":
    main()
